"""Stretches of a fall below the horizon, in the variable ``z = sqrt(r)``.

The same substitution as in :mod:`.centre`, about ``z_0 > 0``: with ``z = z_0 (1 - x)`` the
radial potential is ``z^-6 Q(z)``.  The power of ``z`` that rules ``Q`` there is split off
exactly, ``Q = z^(2k) q``, because powers of ``1 - x`` are bounded on a disc without loss; what
is left is nearly constant.  A nearly radial fall, whose angular momentum matters only at
``r ~ L``, would otherwise need thousands of power series in Mino time.
"""

from __future__ import annotations

from math import log2

from flint import arb, arb_poly, arb_series

from truefall.reference.exact.disc import (
    SLACK,
    Disc,
    log2_lower,
    log2_upper,
    pow2_ball,
    tail_log2,
)
from truefall.reference.exact.flow import Flow
from truefall.reference.exact.segment import ClockSeries, NotCovered, Point, interval_newton

__all__ = ["Fall"]

_DISC = log2(0.75)
_EXPONENTS = {"kerr-schild": 1, "painleve-gullstrand": 2, "eddington-finkelstein": 3}


class Fall:
    """A piece about ``z_0``; the parameter ``x`` runs from ``-h`` to ``h``, inward."""

    def __init__(self, flow: Flow, z0: arb) -> None:
        self.flow, self.z0 = flow, z0
        self._ones = self._geometric()
        k = self._ruling_power()
        l2, mu = flow.momentum2, flow.mu
        excess = flow.excess if mu else flow.energy2
        q = self._sum([(2 * l2, -2 * k), (-l2, 2 - 2 * k), (arb(2 * mu), 4 - 2 * k),
                       (excess, 6 - 2 * k)])  # fmt: skip
        root = q.sqrt()
        inverse = root.inverse()
        rates = {
            "chart": self._chart_rate(root, inverse, k),
            "tau": (self._power(4 - k) * inverse).scaled(2 * z0),
            "mino": (self._power(-k) * inverse).scaled(2 * z0),
        }
        self.h_log = min(self._reach(d) for d in rates.values())
        self.h = 2.0**self.h_log
        self.sums = {name: self._integrate(disc) for name, disc in rates.items()}

    def _geometric(self) -> Disc:
        """``1/(1 - x)`` with its exact bound on the disc."""
        n = self.flow.order
        series = arb_series([arb(1)] * n, n)
        return Disc.build(series, n, _DISC, -log2(0.25) + SLACK)

    def _power(self, exponent: int) -> Disc:
        """``z^exponent``."""
        n = self.flow.order
        factor = Disc.build(arb_series([1, -1], n), n, _DISC, log2(1.75) + SLACK)
        disc = Disc.build(arb_series([1], n), n, _DISC, 0.0)
        step = factor if exponent >= 0 else self._ones
        for _ in range(abs(exponent)):
            disc = disc * step
        return disc.scaled(self.z0**exponent)

    def _sum(self, terms: list[tuple[arb, int]]) -> Disc:
        total: Disc | None = None
        for coefficient, exponent in terms:
            if coefficient.is_zero():
                continue
            term = self._power(exponent).scaled(coefficient)
            total = term if total is None else total + term
        if total is None:
            raise NotCovered("no term is left of a sum of powers")
        return total

    def _ruling_power(self) -> int:
        """``k`` of the largest term of ``Q`` at the centre: 0, 2 or 3."""
        flow, z0 = self.flow, self.z0
        sizes = {0: log2_upper(2 * flow.momentum2)}
        if flow.mu:
            sizes[2] = log2_upper(2 * z0**4)
        else:
            sizes[3] = log2_upper(flow.energy2 * z0**6)
        return max(sizes, key=lambda k: sizes[k])

    def _chart_rate(self, root: Disc, inverse: Disc, k: int) -> Disc:
        """``dT/dx``, see :mod:`.centre` for the three charts."""
        flow = self.flow
        mu, l2, e2 = arb(flow.mu), flow.momentum2, flow.energy2
        if flow.chart == "kerr-schild":
            terms = [(4 * l2, 0), (4 * mu, 4), (2 * e2, 6), (e2, 8)]
            factor, drag = arb(2), 5 - k
        elif flow.chart == "painleve-gullstrand":
            terms = [(2 * l2, 0), (2 * mu, 4), (e2, 6)]
            factor, drag = arb(2).sqrt(), 4 - k
        else:
            terms = [(l2, 0), (mu, 4)]
            factor, drag = arb(1), 3 - k
        top = self._sum([(c, e - 2 * k) for c, e in terms])
        bottom = root.scaled(factor)
        if not flow.energy.is_zero():
            bottom = bottom + self._power(drag).scaled(flow.energy)
        rate = top * (bottom.inverse() * inverse) * self._power(_EXPONENTS[flow.chart])
        return rate.scaled(2 * self.z0)

    def _reach(self, disc: Disc) -> float:
        scale = log2_lower(disc.series[0])
        return disc.radius + min(-1.0, (scale - self.flow.accuracy - disc.sup - 1) / disc.order)

    def _integrate(self, disc: Disc) -> ClockSeries:
        tail = tail_log2(disc.sup, self.h_log - disc.radius, disc.order) + self.h_log
        slope = arb_poly(disc.series.coeffs())
        return ClockSeries(slope.integral(), slope, pow2_ball(tail), 0)

    # -- the same questions as a Taylor piece -----------------------------------------------
    def _require(self, x: arb) -> None:
        if not abs(x) <= self.h:
            raise NotCovered("outside the piece")

    def point(self, x: arb) -> Point:
        """State at ``x``; ``y`` is Mino time from the centre of the piece."""
        self._require(x)
        z = self.z0 * (1 - x)
        u = 1 / (z * z)
        v = self.flow.radial_potential(u).sqrt()
        return Point(u, v, 1 - 2 * u, self.sums["mino"].value(x))

    def clock(self, name: str, x: arb) -> arb:
        """Reading relative to the centre of the piece."""
        self._require(x)
        return self.sums[name].value(x)

    def find_u(self, u: arb) -> arb:
        """The parameter at ``u``."""
        return 1 - 1 / (self.z0 * u.sqrt())

    def find_clock(self, name: str, target: arb) -> arb:
        """The parameter at which a clock reads ``target``."""
        series = self.sums[name]
        middle = target.mid()
        x = (middle / series.slope[0].mid()).mid()
        for _ in range(60):
            if not abs(x) <= self.h:
                x = x.sgn() * arb(self.h) if x.is_finite() else arb(0)
            step = ((series.poly(x) - middle) / series.slope(x)).mid()
            x = (x - step).mid()
            if abs(step) <= arb((1, 10 - self.flow.precision)) * self.h:
                break
        residual = series.value(x) - target
        size = abs(residual).upper() / abs(series.slope(x)).lower()
        spread = (4 * size + arb((1, 4 - self.flow.precision)) * self.h).upper()
        root = interval_newton(x, residual, lambda ball: self._rate(name, ball), spread)
        self._require(root)
        return root

    def _rate(self, name: str, x: arb) -> arb:
        """``d clock/dx`` on a ball from the pointwise formula."""
        z = self.z0 * (1 - x)
        u = 1 / (z * z)
        w = self.flow.radial_potential(u).sqrt()
        rate = self.flow.rate(name, u, w, 1 - 2 * u, regular=True)
        return rate * 2 * u / (w * z) * self.z0
