"""The radial flow in Mino time and the rates of the clocks, in balls and in discs.

With ``u = 1/r``, ``w = -dr/dtau = du/ds`` and ``dtau = r^2 ds`` (Mino 2003, Phys. Rev. D 67,
084027, from memory)::

    d2u/ds2 = mu + L^2 (3 u^2 - u)
    w^2     = P(u) = E^2 - (1 - 2u) (mu + L^2 u^2)

A leg of the orbit is described by a parameter ``y >= 0`` that grows away from a pivot, with
``v = du/dy = delta w`` and ``delta = +1`` towards the future, ``-1`` towards the past.  The
equation is even in the direction, so one description serves both.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil, inf, log2

import numpy as np
from flint import arb, arb_series

from truefall.reference.exact.disc import (
    SLACK,
    Disc,
    log2_upper,
    series_logs,
)
from truefall.reference.exact.field import to_ball
from truefall.reference.exact.start import INGOING, Motion

__all__ = ["CLOCKS", "Flow", "Germ"]

#: ``chart`` is the chart's own time, ``tau`` proper time (affine parameter for light).
CLOCKS = ("chart", "tau")

#: Share of the majorant's condition left to its linear term.
_MAJORANT_SHARE = 0.1
#: log2 radius of the disc (in natural steps) on which radial motion, a polynomial, is bounded.
_RADIAL_DISC = 3.0


@dataclass(frozen=True)
class Germ:
    """The solution around a point ``(u, v)``, as a series in ``x = y / 2^scale``.

    ``limit`` is the log2 radius on which the majorant ``|a_k| <= C (k + 1) rho^-k`` holds,
    ``constant`` is log2 C, and ``exact`` marks a polynomial (radial motion).
    """

    scale: int
    u: Disc
    v: Disc
    limit: float
    constant: float
    exact: bool

    def tail_u(self, h: float) -> float:
        """log2 bound of the omitted terms of ``u`` on ``|x| <= 2^h``."""
        if self.exact:
            return -inf
        n, ratio = self.u.order, h - self.limit
        q = 2.0**ratio
        return self.constant + n * ratio + log2((n + 1) / (1 - q) + q / (1 - q) ** 2) + SLACK

    def tail_v(self, h: float) -> float:
        """log2 bound of the omitted terms of ``du/dx``, the series cut one term earlier."""
        if self.exact:
            return -inf
        n, ratio = self.u.order, h - self.limit
        q = 2.0**ratio
        # sum_{k >= n} k (k+1) q^(k-1), bounded by n (n+1) q^(n-1) sum_j (1 + j)^2 q^j
        spread = (1 + q) / (1 - q) ** 3
        return self.constant - self.limit + (n - 1) * ratio + log2(n * (n + 1) * spread) + SLACK


class Flow:
    """Constants as balls at one working precision, and everything that follows from them.

    Create and use it inside ``flint.ctx.workprec(flow.precision)``.
    """

    def __init__(self, motion: Motion, chart: str, precision: int) -> None:
        self.motion, self.chart, self.precision = motion, chart, precision
        self.order = max(24, ceil(0.3 * precision))
        self.accuracy = precision - 40
        self.mu = motion.mu
        self.ingoing = chart in INGOING
        self.energy2 = to_ball(motion.energy_squared)
        self.momentum2 = to_ball(motion.momentum_squared)
        self.energy = motion.energy_sign * self.energy2.sqrt()
        self.momentum = self.momentum2.sqrt()
        self.excess = to_ball(motion.energy_squared - motion.mu)  # E^2 - mu, no cancellation
        self.u0, inward_squared = motion.start_balls()
        self.w0 = motion.inward * inward_squared.sqrt()
        self.widest = inf  # log2 of the half-width (Mino time) no piece may exceed

    def limit_width(self, lowest: arb | None) -> None:
        """Keep every piece so short that ``v`` has at most one zero on it.

        ``v'' = -L^2 (1 - 6u) v``, so by Sturm's comparison zeros of ``v`` lie at least
        ``pi / (L sqrt(1 - 6 u_min))`` apart; ``lowest`` is that ``u_min`` (0 if None).
        """
        stiffness = self.momentum2 * (1 - (6 * lowest if lowest is not None else 0))
        if stiffness > 0:
            self.widest = log2(0.45 * 3.14159) - 0.5 * log2_upper(stiffness)

    # -- pointwise ---------------------------------------------------------------------------
    def radial_potential(self, u: arb) -> arb:
        """``P(u) = w^2``, arranged so that a weak field keeps its digits."""
        return self.excess + u * (2 * self.mu + self.momentum2 * u * (2 * u - 1))

    def slope(self, u: arb) -> arb:
        """``d2u/ds2 = P'(u)/2``."""
        return self.mu + self.momentum2 * u * (3 * u - 1)

    def rate(self, clock: str, u: arb, w: arb, gap: arb, regular: bool) -> arb:
        """``d clock / ds`` at a point; ``gap = 1 - 2u``.

        ``regular`` asks for the form that passes the future horizon (ingoing charts, ``w >= 0``).
        """
        u2 = u * u
        if clock == "tau":
            return 1 / u2
        if not self.ingoing:
            return self.energy / (u2 * gap)
        angular = self.mu + self.momentum2 * u2
        if self.chart == "kerr-schild":
            if regular:
                top = self.energy2 * (1 + 2 * u) + 4 * u2 * angular
                return top / (u2 * (self.energy + 2 * u * w))
            return (self.energy - 2 * u * w) / (u2 * gap)
        if self.chart == "painleve-gullstrand":
            g = (2 * u).sqrt()
            if regular:
                return (self.energy2 + 2 * u * angular) / (u2 * (self.energy + g * w))
            return (self.energy - g * w) / (u2 * gap)
        if regular:
            return angular / (u2 * (self.energy + w))
        return (self.energy - w) / (u2 * gap)

    # -- series ------------------------------------------------------------------------------
    def germ(self, u: arb, v: arb, scale: int | None = None) -> Germ:
        """Taylor coefficients about a point, with a majorant for all that are left out.

        With ``z = u - u_0``: ``z'' = A + B z + 3 L^2 z^2``, ``B = L^2 (6 u_0 - 1)``.  If
        ``|z_k| <= C (k+1) rho^-k`` holds for the computed ``k <= K`` and
        ``rho^2 (L^2 C/2 + |B|/((K+1)(K+2))) <= 1``, the recurrence carries it to every ``k``,
        because ``sum_i (i+1)(k-i+1) = (k+1)(k+2)(k+3)/6``.  Near a circle ``C`` is small, and
        the disc as large as the slow motion there.
        """
        n = self.order
        scale = self._scale(u, v) if scale is None else scale
        step = arb((1, scale))
        square = step * step
        momentum2 = self.momentum2 * square
        bend = momentum2 * (6 * u - 1)
        triple = 3 * momentum2
        a = [arb(0), v * step, self.slope(u) * square / 2]
        for k in range(1, n - 2):
            total = arb(0)
            for i in range(1, (k + 1) // 2):
                total += a[i] * a[k - i]
            total = 2 * total
            if k % 2 == 0:
                total += a[k // 2] * a[k // 2]
            a.append((triple * total + bend * a[k]) / ((k + 1) * (k + 2)))
        a[0] = u
        logs = series_logs(a)
        exact = bool(self.momentum2.is_zero())
        if exact:
            limit, constant = _RADIAL_DISC, -inf
        else:
            index = np.arange(1, n)
            size = log2_upper(momentum2)
            limits = (log2(2 * (1 - _MAJORANT_SHARE)) + np.log2(index + 1.0) - logs[1:] - size) / (
                index + 2
            )
            limit = float(np.min(limits))
            limit = (
                min(limit, 0.5 * (log2(_MAJORANT_SHARE * n * (n + 1)) - log2_upper(bend))) - SLACK
            )
            constant = float(np.max(logs[1:] + index * limit - np.log2(index + 1.0))) + SLACK
        radius = limit - (0.0 if exact else 0.2)
        q = 2.0 ** (radius - limit)
        sup = float(np.logaddexp2.reduce(logs + np.arange(n) * radius)) + SLACK
        sup_v = (
            float(
                np.logaddexp2.reduce(
                    logs[1:] + np.arange(n - 1) * radius + np.log2(np.arange(1, n))
                )
            )
            + SLACK
        )
        if not exact:
            tail = constant + n * (radius - limit) + log2((n + 1) / (1 - q) + q / (1 - q) ** 2)
            sup = float(np.logaddexp2(sup, tail)) + SLACK
            spread = (1 + q) / (1 - q) ** 3
            tail = constant - limit + (n - 1) * (radius - limit) + log2(n * (n + 1) * spread)
            sup_v = float(np.logaddexp2(sup_v, tail)) + SLACK
        whole = Disc(arb_series(a, n), logs, radius, sup, exact)
        slope_series = arb_series([(j + 1) * a[j + 1] for j in range(n - 1)], n - 1)
        speed = Disc.build(slope_series, n - 1, radius, sup_v)
        speed = Disc(speed.series, speed.logs, radius, sup_v, exact)
        return Germ(scale, whole, speed, limit, constant, exact)

    def _scale(self, u: arb, v: arb) -> int:
        """log2 of a natural step: by the oscillation, by the fall, by the change of ``u``."""
        size_u, size_v = log2_upper(u), log2_upper(v)
        sizes = [size_u - size_v if size_v > -inf else inf]
        momentum = 0.5 * log2_upper(self.momentum2)
        if momentum > -inf:
            sizes.append(-momentum - 0.5 * max(size_u, 0.0))
        if self.mu:
            sizes.append(0.5 * size_u)
        best = min(sizes)
        return round(best) if best < inf else 0

    def rate_disc(self, clock: str, germ: Germ, delta: int, regular: bool) -> Disc:
        """The clock's rate along a leg as a function of ``x`` (per unit of Mino time)."""
        u = germ.u
        inverse = u.inverse()
        if clock == "tau":
            return inverse * inverse
        u2_inverse = inverse * inverse
        gap = u.scaled(arb(-2), 1)
        if not self.ingoing:
            return (u2_inverse * gap.inverse()).scaled(self.energy)
        w = germ.v.scaled(delta * arb((1, -germ.scale)))
        angular = (u * u).scaled(self.momentum2, self.mu)
        if self.chart == "kerr-schild":
            drag = (u * w).scaled(arb(2))
            top = u.scaled(2 * self.energy2, self.energy2) + (u * u * angular).scaled(arb(4))
        elif self.chart == "painleve-gullstrand":
            drag = u.scaled(arb(2)).sqrt() * w
            top = (u * angular).scaled(arb(2), self.energy2)
        else:
            drag, top = w, angular
        if regular:
            return top * (u2_inverse * drag.scaled(arb(1), self.energy).inverse())
        return drag.scaled(arb(-1), self.energy) * (u2_inverse * gap.inverse())

    def log_rate_disc(self, germ: Germ, delta: int) -> tuple[int, Disc]:
        """The chart clock's rate times ``x`` near a horizon where it diverges logarithmically.

        Returns the residue (an exact integer: -2, -4 or 4, proved by the enclosure) and the
        regular remainder ``rate dy/dx - residue/x`` as a disc.
        """
        u = germ.u
        inverse = u.inverse()
        step = arb((1, germ.scale))
        gap = u.scaled(arb(-2), 1)
        still = bool(germ.v.series[0].is_zero())  # E = 0: the horizon is a turning point
        places = 2 if still else 1
        gap_reduced = gap.shifted(places)
        w = germ.v.scaled(delta / step)
        if not self.ingoing:
            constants = arb_series([self.energy], germ.v.order)
            top = Disc.build(constants, germ.v.order, u.radius, log2_upper(self.energy))
        elif self.chart == "kerr-schild":
            top = (u * w).scaled(arb(-2), self.energy)
        elif self.chart == "painleve-gullstrand":
            top = (u.scaled(arb(2)).sqrt() * w).scaled(arb(-1), self.energy)
        else:
            top = w.scaled(arb(-1), self.energy)
        if still:
            top = top.shifted(1)
        product = (top * (inverse * inverse * gap_reduced.inverse())).scaled(step)
        residue = product.series[0].unique_fmpz()
        if residue is None:
            raise ArithmeticError("the residue at the horizon is not yet resolved")
        return int(residue), product.scaled(arb(1), -int(residue)).shifted(1)
