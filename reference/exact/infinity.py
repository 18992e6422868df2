"""Ingoing light traced back to infinity in Eddington-Finkelstein time.

That time is constant along radial ingoing rays, so an ingoing ray leaves infinity at a finite
reading: the past edge of the chart.  ``u = 0`` is a regular point of the flow,
``dT/ds = L^2/(E + w)`` is regular there too, and only the affine parameter runs off, like
``1/u`` (no logarithm: ``d2u/ds2`` vanishes with ``u``).
"""

from __future__ import annotations

from flint import arb, arb_poly

from truefall.reference.exact.disc import Disc, log2_lower, pow2_ball, tail_log2
from truefall.reference.exact.flow import Flow
from truefall.reference.exact.segment import NotCovered, Point, Taylor, interval_newton

__all__ = ["Infinity"]


class Infinity(Taylor):
    """A power series about ``u = 0``, reached at ``x = 0`` from ``x < 0``."""

    def __init__(self, flow: Flow) -> None:
        self.flow, self.delta, self.regular, self.at_horizon = flow, -1, True, False
        scale = round(-log2_lower(flow.momentum))
        germ = flow.germ(arb(0), -flow.energy, scale=scale)
        self.step = arb((1, scale))
        w = germ.v.scaled(-1 / self.step)
        chart = w.scaled(arb(1), flow.energy).inverse().scaled(flow.momentum2 * self.step)
        inverse = germ.u.shifted(1).inverse()
        tau = (inverse * inverse).scaled(self.step)  # times x^2
        reach = germ.limit + min(-1.0, (-flow.accuracy - 16) / germ.u.order)
        self.h_log = min(reach, self._reach(0, chart), self._reach(0, tau))
        self.h = 2.0**self.h_log
        self.poly_u = arb_poly(germ.u.series.coeffs())
        self.tail_u = pow2_ball(germ.tail_u(self.h_log))
        self.poly_v = arb_poly(germ.v.series.coeffs())
        self.tail_v = pow2_ball(germ.tail_v(self.h_log))
        self.clocks = {"chart": self._integrate(0, chart)}
        self._powers = {}
        self._poles(tau)

    def _poles(self, tau: Disc) -> None:
        """Split the affine parameter into ``-c_0/x`` and a regular part."""
        c = tau.series.coeffs()
        self.pole = c[0]
        self.rest = arb_poly(c[2:]).integral()
        tail = tail_log2(tau.sup, self.h_log - tau.radius, tau.order) - self.h_log
        self.rest_tail = pow2_ball(tail)

    def endless(self, name: str) -> bool:
        return name == "tau"

    def point(self, x: arb) -> Point:
        if x.is_zero():
            return Point(arb(0), -self.flow.energy, arb(1), arb(0))
        self.require(x)
        u = x * (self.poly_u.right_shift(1)(x) + self.tail_u / self.h)
        return Point(u, self.v_at(x), 1 - 2 * u, x * self.step)

    def clock(self, name: str, x: arb) -> arb:
        if name != "tau":
            return super().clock(name, x)
        self.require(x)
        reading: arb = -self.pole / x + self.rest(x) + self.rest_tail
        return reading

    def find_clock(self, name: str, target: arb) -> arb:
        if name != "tau":
            return super().find_clock(name, target)
        middle = target.mid()
        x = (-self.pole / middle).mid()
        slope = self.rest.derivative()
        for _ in range(60):
            if not abs(x) <= self.h or x >= 0:
                x = arb(-self.h)
            rate = self.pole / (x * x) + slope(x)
            step = ((-self.pole / x + self.rest(x) - middle) / rate).mid()
            x = (x - step).mid()
            if abs(step) <= abs(x) * arb((1, 10 - self.flow.precision)):
                break
        if not x < 0:
            raise NotCovered("the affine parameter is not resolved so far out")
        residual = self.clock("tau", x) - target
        size = abs(residual).upper() * x * x / abs(self.pole)
        spread = (4 * size + abs(x) * arb((1, 4 - self.flow.precision))).upper()
        return interval_newton(x, residual, self._affine_rate, spread)

    def _affine_rate(self, x: arb) -> arb:
        u = x * (self.poly_u.right_shift(1)(x) + self.tail_u / self.h)
        rate: arb = self.step / (u * u)
        return rate
