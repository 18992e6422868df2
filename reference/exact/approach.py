"""The tail of an orbit that winds onto an unstable circle for ever.

With a double root ``u_c`` the radial potential is ``2 L^2 (u - u_c)^2 (u - u_1)``,
``u_1 = 1/2 - 2 u_c``, and the motion is elementary: ``z = sqrt(u - u_1)`` is a hyperbolic
tangent (from outside) or cotangent (from inside) of Mino time, so that::

    u = u_c + s 4 z_c^2 e / (1 - s e)^2,   e = exp(-lambda y),   lambda = L sqrt(6 u_c - 1)

with ``s = -1`` outside and ``+1`` inside, ``z_c^2 = 3 u_c - 1/2``.  At the innermost stable
circle the root is triple and ``u = 1/6 + e^2/6`` with ``e = 1/y``.  (Elementary integrals;
compare Chandrasekhar 1983, section 19, from memory.)  The clocks are power series in ``e`` plus
a linear part, right at any time.
"""

from __future__ import annotations

from flint import arb, arb_series

from truefall.reference.exact.disc import SLACK, Disc, log2_lower, log2_upper, pow2_ball, tail_log2
from truefall.reference.exact.field import to_ball
from truefall.reference.exact.flow import CLOCKS, Flow, Germ
from truefall.reference.exact.segment import NotCovered, Point, interval_newton

__all__ = ["Approach"]

_DISC = -1.0  # log2 of the radius in e on which the rates are bounded


class Approach:
    """The end of a leg at a double root; the parameter is ``y`` itself, with its own origin.

    Parameters
    ----------
    flow : Flow
    delta : int
        +1 if the circle is approached in the future, -1 in the past.
    side : int
        -1 if the orbit comes from outside the circle, +1 from inside.
    regular : bool
        Form of the clock rates, see :meth:`Flow.rate`.
    """

    def __init__(self, flow: Flow, *, delta: int, side: int, regular: bool) -> None:
        self.flow, self.delta, self.side, self.regular = flow, delta, side, regular
        root = flow.motion.double_root
        if root is None:
            raise ValueError("no circle belongs to these constants")
        self.triple = flow.motion.triple
        self.centre = to_ball(root)
        self.spread = 3 * self.centre - arb(1) / 2
        self.decay = flow.momentum * (6 * self.centre - 1).sqrt() if not self.triple else arb(1)
        germ = self._germ()
        self.discs: dict[str, Disc] = {
            name: flow.rate_disc(name, germ, delta, regular) for name in CLOCKS
        }
        self.h_log = min(self._reach(disc) for disc in self.discs.values())
        self.h = arb(2.0**self.h_log)
        self.sums = {name: self._sum(disc) for name, disc in self.discs.items()}

    def _germ(self) -> Germ:
        """``u`` and ``v`` as series in ``e`` (closed forms, so the bounds are elementary)."""
        n, s = self.flow.order, self.side
        if self.triple:
            u = [self.centre, arb(0), arb(1) / 6]
            v = [arb(0), arb(0), arb(0), arb(-1) / 3]
            bound_u, bound_v = arb(1) / 4, arb(1) / 3
        else:
            size = 4 * self.spread
            u = [self.centre] + [size * k * s**k for k in range(1, n)]
            v = [arb(0)] + [-self.decay * size * k * k * s**k for k in range(1, n)]
            # on |e| = 1/2: |e/(1-e)^2| <= 2 and |e(1+e)/(1-e)^3| <= 6
            bound_u, bound_v = self.centre + 2 * size, 6 * size * self.decay
        disc_u = Disc.build(arb_series(u, n), n, _DISC, log2_upper(bound_u))
        disc_v = Disc.build(arb_series(v, n), n, _DISC, log2_upper(bound_v))
        return Germ(0, disc_u, disc_v, _DISC, 0.0, False)

    def _reach(self, disc: Disc) -> float:
        goal = log2_lower(disc.series[0]) - self.flow.accuracy
        extra = 12.0 + abs(log2_upper(self.decay))
        return disc.radius + min(-1.0, (goal - disc.sup - extra) / disc.order)

    def _sum(self, disc: Disc) -> tuple[arb_series, arb]:
        """Coefficients and tail of the decaying part of a clock."""
        c = disc.series.coeffs()
        shift = 1 if self.triple else 0
        terms = [arb(0)] * len(c)
        for k in range(1 + shift, len(c)):
            terms[k - shift] = -c[k] / (k - shift)
        tail = tail_log2(disc.sup, self.h_log - disc.radius, disc.order)
        if self.triple:
            tail -= self.h_log
        else:
            tail += log2_upper(1 / self.decay)
            terms = [t / self.decay for t in terms]
        return arb_series(terms, len(c)), pow2_ball(tail + SLACK)

    # -- the same questions as a Taylor piece -----------------------------------------------
    def small(self, y: arb) -> arb:
        """``e`` at ``y``."""
        return 1 / y if self.triple else (-self.decay * y).exp()

    def _parts(self, y: arb) -> tuple[arb, arb]:
        e = self.small(y)
        if self.triple:
            return e * e / 6, -(e**3) / 3
        s = self.side
        scale = 4 * s * self.spread * e
        denominator = 1 - s * e
        return scale / denominator**2, -self.decay * scale * (1 + s * e) / denominator**3

    def point(self, y: arb) -> Point:
        offset, v = self._parts(y)
        u = self.centre + offset
        return Point(u, v, 1 - 2 * u, y)

    def clock(self, name: str, y: arb) -> arb:
        series, tail = self.sums[name]
        e = self.small(y)
        if not e <= self.h:
            raise NotCovered("too far from the circle for this piece")
        total = arb(0)
        for c in reversed(series.coeffs()):
            total = total * e + c
        return self.discs[name].series[0] * y + total + tail

    def ball_rate(self, name: str, y: arb) -> arb:
        p = self.point(y)
        return self.flow.rate(name, p.u, self.delta * p.v, p.gap, self.regular)

    def find_u(self, u: arb, offset: arb | None = None) -> arb:
        """``y`` at ``u``; pass ``offset = u - u_c`` where it is known better than by difference."""
        offset = u - self.centre if offset is None else offset
        if self.triple:
            return 1 / (6 * offset).sqrt()
        root = (u - (arb(1) / 2 - 2 * self.centre)).sqrt()
        e = self.side * offset / (root + self.spread.sqrt()) ** 2
        if not e > 0:
            raise NotCovered("the distance from the circle is not yet resolved")
        return -e.log() / self.decay

    def find_clock(self, name: str, target: arb) -> arb:
        """``y`` at which the clock shows ``target``."""
        linear = self.discs[name].series[0].mid()
        lowest = (1 / self.h if self.triple else -self.h.log() / self.decay).mid()
        middle = target.mid()
        y = max((middle / linear).mid(), lowest)
        for _ in range(200):
            step = ((self.clock(name, y) - middle) / self.ball_rate(name, y)).mid()
            y = max((y - step).mid(), lowest)
            if abs(step) <= abs(y) * arb((1, 10 - self.flow.precision)):
                break
        residual = self.clock(name, y) - target
        size = abs(residual).upper() / abs(linear) * 4
        spread = (size + abs(y) * arb((1, 4 - self.flow.precision))).upper()
        return interval_newton(y, residual, lambda ball: self.ball_rate(name, ball), spread)

    def covers_u(self, u: arb) -> bool:
        """Whether the piece certainly reaches out to ``u`` with its full accuracy."""
        limit = 0.9 * 2.0 ** (self.h_log)
        offset = abs(u - self.centre)
        if self.triple:
            return bool((6 * offset).sqrt() < limit)
        return bool(offset < 4 * self.spread * limit / (1 + limit) ** 2)
