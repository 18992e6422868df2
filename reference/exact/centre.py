"""The last stretch to ``r = 0``, in the variable ``z = sqrt(r)`` in which nothing diverges.

With ``u = z^-2`` the radial potential is ``z^-6 Q(z)``,
``Q = 2L^2 - L^2 z^2 + 2 mu z^4 + (E^2 - mu) z^6``, so ``w = z^-3 sqrt(Q)`` and
``ds = -2 dz / sqrt(Q)``.  In every ingoing chart the clocks' rates per ``z`` are then power
series about ``z = 0``, and the singularity is reached at a reading known with proof.  Radial
motion has ``Q`` of order ``z^4`` (particles) or ``z^6`` (light); the power ``z^k`` of
``sqrt(Q)`` is split off.
"""

from __future__ import annotations

from flint import arb, arb_poly, arb_series

from truefall.reference.exact.disc import Disc, log2_upper, pow2_ball, tail_log2
from truefall.reference.exact.flow import Flow
from truefall.reference.exact.segment import NotCovered, Point, interval_newton

__all__ = ["Centre"]

_EXPONENTS = {"kerr-schild": 1, "painleve-gullstrand": 2, "eddington-finkelstein": 3}


class Centre:
    """The end of a leg at ``r = 0``; the parameter is ``x = -z``, from ``-h`` to 0.

    Clocks read 0 at ``x = 0``.
    """

    def __init__(self, flow: Flow) -> None:
        self.flow = flow
        if flow.motion.mu and flow.momentum2.is_zero():
            self.split = 2
        else:
            self.split = 3 if flow.momentum2.is_zero() else 0
        q = [2 * flow.momentum2, arb(0), -flow.momentum2, arb(0), arb(2 * flow.mu)]
        q += [arb(0), flow.excess if flow.mu else flow.energy2]
        root = self._polynomial(q[2 * self.split :]).sqrt()
        inverse = root.inverse()
        rates = {
            "chart": self._times_power(self._chart_rate(root, inverse), self._exponent),
            "tau": self._times_power(inverse.scaled(arb(2)), 4 - self.split),
            "mino": inverse.scaled(arb(2)),
        }
        self.h_log = min(self._reach(d) for d in rates.values())
        self.h = 2.0**self.h_log
        self.root = arb_poly(root.series.coeffs())
        self.sums = {name: self._integrate(disc) for name, disc in rates.items()}

    @property
    def _exponent(self) -> int:
        return _EXPONENTS[self.flow.chart]

    def _polynomial(self, coefficients: list[arb]) -> Disc:
        """A polynomial in ``z`` on the disc ``|z| <= 2``, as an exact disc."""
        n = self.flow.order
        sup = sum((abs(c) * 2**k for k, c in enumerate(coefficients)), arb(0))
        disc = Disc.build(arb_series(coefficients, n), n, 1.0, log2_upper(sup))
        return Disc(disc.series, disc.logs, disc.radius, disc.sup, exact=True)

    def _times_power(self, disc: Disc, power: int) -> Disc:
        """``z^power f(z)``."""
        coefficients = [arb(0)] * power + disc.series.coeffs()
        n = disc.order
        series = arb_series(coefficients[:n], n)
        return Disc.build(series, n, disc.radius, disc.sup + power * max(disc.radius, 0.0) + 1e-9)

    def _chart_rate(self, root: Disc, inverse: Disc) -> Disc:
        """``d T/dz`` of the chart's clock without its factor ``-z^e``."""
        flow, k = self.flow, self.split
        mu, l2, e2 = arb(flow.mu), flow.momentum2, flow.energy2
        zero = arb(0)
        if flow.chart == "kerr-schild":
            top = [4 * l2, zero, zero, zero, 4 * mu, zero, 2 * e2, zero, e2]
            factor, drag = arb(2), 5 - k
        elif flow.chart == "painleve-gullstrand":
            top = [2 * l2, zero, zero, zero, 2 * mu, zero, e2]
            factor, drag = arb(2).sqrt(), 4 - k
        else:
            top = [l2, zero, zero, zero, mu]
            factor, drag = arb(1), 3 - k
        bottom = self._polynomial([zero] * drag + [flow.energy]) + root.scaled(factor)
        return (self._polynomial(top[2 * k :]) * (bottom.inverse() * inverse)).scaled(arb(2))

    def _reach(self, disc: Disc) -> float:
        return disc.radius + min(-1.0, (-self.flow.accuracy - 8 - 4) / disc.order)

    def _integrate(self, disc: Disc) -> tuple[arb_poly, arb_poly, arb]:
        slope = arb_poly(disc.series.coeffs())
        tail = tail_log2(disc.sup, self.h_log - disc.radius, disc.order) + self.h_log
        return slope.integral(), slope, pow2_ball(tail)

    # -- the same questions as a Taylor piece -----------------------------------------------
    def point(self, x: arb) -> Point:
        """State at ``x < 0``; at 0 only ``y`` is meant."""
        if x.is_zero():
            return Point(arb("inf"), arb("inf"), arb("-inf"), arb(0))
        z = -x
        u = 1 / (z * z)
        v = self.flow.radial_potential(u).sqrt()
        y = arb(0) if self.split else -self._value("mino", z)
        return Point(u, v, 1 - 2 * u, y)

    def _value(self, name: str, z: arb) -> arb:
        poly, _, tail = self.sums[name]
        # the tail is that of the whole piece; it shrinks at least like z
        value: arb = poly(z) + tail * (z / self.h)
        return value

    def clock(self, name: str, x: arb) -> arb:
        """Reading relative to the end (negative before it)."""
        if x.is_zero():
            return arb(0)
        if not abs(x) <= self.h:
            raise NotCovered("too far from the centre for this piece")
        return -self._value(name, -x)

    def covers_u(self, u: arb) -> bool:
        """Whether the piece reaches out to ``u``."""
        return bool(u * (0.9 * self.h) ** 2 > 1)

    def find_u(self, u: arb) -> arb:
        """The parameter at ``u``."""
        return -1 / u.sqrt()

    def find_clock(self, name: str, target: arb) -> arb:
        """The parameter at which a clock reads ``target < 0``, relative to the end."""
        poly, slope, _ = self.sums[name]
        power = next(k for k, c in enumerate(poly.coeffs()) if not c.contains(0))
        middle = -target.mid()
        if not middle > 0:
            raise NotCovered("the time is not told from the end of the orbit")
        z = ((middle / poly[power].mid()).mid().root(power)).mid()
        for _ in range(60):
            if z > self.h:
                z = arb(self.h)
            step = ((poly(z) - middle) / slope(z)).mid()
            z = (z - step).mid()
            if abs(step) <= abs(z) * arb((1, 10 - self.flow.precision)):
                break
        residual = self._value(name, z) + target
        size = (abs(residual).upper() / abs(slope(z)).lower()).upper()
        spread = (4 * size + z * arb((1, 4 - self.flow.precision))).upper()
        return -interval_newton(z, residual, lambda ball: self._rate(name, ball), spread)

    def _rate(self, name: str, z: arb) -> arb:
        """``|d clock/dz|`` on a ball from the pointwise formula: no series involved."""
        u = 1 / (z * z)
        w = self.flow.radial_potential(u).sqrt()
        rate = self.flow.rate(name, u, w, 1 - 2 * u, regular=True)
        return rate * 2 * u / (w * z)
