"""Pieces of a leg on which the exact solution is known, with its bound.

Every piece answers the same questions: where it is valid, the state at a parameter, a clock at
a parameter, the parameter at which a clock (or the radius) takes a value.  Three kinds exist:

- :class:`Taylor`: a power series about an exactly known point of the curve;
- the same with a logarithm in the chart's clock, about a horizon that the clock never reaches;
- :class:`Approach`: the tail of an orbit that winds onto an unstable circle for ever.

Adjacent pieces are centred on exactly chosen values of ``u`` (with ``v`` from the radial
potential), so that enclosures add from piece to piece and never multiply.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from flint import arb, arb_poly

from truefall.reference.exact.disc import Disc, log2_lower, pow2_ball, tail_log2
from truefall.reference.exact.flow import CLOCKS, Flow, Germ

__all__ = ["ClockSeries", "NotCovered", "Point", "Taylor", "interval_newton"]

_FLOAT_STEPS = 12
#: Share of the largest term below which a coefficient means nothing in float64.
_UNSEEN = 2.0**-56


class NotCovered(ArithmeticError):
    """The value asked for is not certainly inside this piece; take another or more bits."""


@dataclass(frozen=True)
class Point:
    """A point of a leg: ``u``, ``v = du/dy``, ``gap = 1 - 2u``, and ``y`` within the piece."""

    u: arb
    v: arb
    gap: arb
    y: arb


@dataclass(frozen=True)
class ClockSeries:
    """``clock(x) = residue ln|x| + poly(x)`` with an error of at most ``tail`` on the piece."""

    poly: arb_poly
    slope: arb_poly
    tail: arb
    residue: int

    def value(self, x: arb) -> arb:
        value = self.poly(x) + self.tail
        return value + self.residue * abs(x).log() if self.residue else value


def interval_newton(guess: arb, residual: arb, slope_on: Callable[[arb], arb], spread: arb) -> arb:
    """Enclose the root of ``f`` near ``guess``.

    Parameters
    ----------
    guess : arb
        An exact number.
    residual : arb
        ``f(guess)``.
    slope_on : callable
        Encloses ``f'`` on a ball.
    spread : arb
        Exact radius of the first ball tried.

    Raises
    ------
    NotCovered
        If no ball is found that Newton's operator maps into itself.
    """
    for _ in range(8):
        ball = guess + spread * arb(0, 1)
        slope = slope_on(ball)
        if not slope.contains(0):
            image: arb = guess - residual / slope
            if ball.contains_interior(image):
                return image
        spread = spread * 16
    raise NotCovered("Newton's operator did not contract")


class Taylor:
    """A power series about a point, valid for ``|x| <= h`` with ``y = x 2^scale``."""

    def __init__(
        self, flow: Flow, u: arb, v: arb, *, delta: int, regular: bool, at_horizon: bool = False
    ) -> None:
        self.flow, self.delta, self.regular, self.at_horizon = flow, delta, regular, at_horizon
        germ = flow.germ(u, v)
        self.step = arb((1, germ.scale))
        discs: dict[str, tuple[int, Disc]] = {}
        for clock in CLOCKS:
            if clock == "chart" and at_horizon:
                discs[clock] = flow.log_rate_disc(germ, delta)
            else:
                discs[clock] = (0, flow.rate_disc(clock, germ, delta, regular).scaled(self.step))
        self.h_log = min([self._reach_u(germ)] + [self._reach(*d) for d in discs.values()])
        self.h_log = min(self.h_log, flow.widest - germ.scale)
        self.h = 2.0**self.h_log
        self.poly_u = arb_poly(germ.u.series.coeffs())
        self.tail_u = pow2_ball(germ.tail_u(self.h_log))
        self.poly_v = arb_poly(germ.v.series.coeffs())
        self.tail_v = pow2_ball(germ.tail_v(self.h_log))
        self.clocks = {name: self._integrate(*pair) for name, pair in discs.items()}
        self._powers: dict[str, list[float]] = {}
        if at_horizon:
            coefficients = [-2 * c for c in germ.u.series.coeffs()[1:]]
            self.poly_gap = arb_poly(coefficients)
            self.tail_gap = pow2_ball(germ.tail_u(self.h_log) - self.h_log + 1)

    def _reach_u(self, germ: Germ) -> float:
        """log2 of the half-width on which ``u`` and ``v`` keep the flow's accuracy."""
        if germ.exact:
            return germ.u.radius
        goal = log2_lower(germ.u.series[0]) - self.flow.accuracy
        return germ.limit + min(-1.0, (goal - germ.constant - 8) / germ.u.order)

    def _reach(self, residue: int, disc: Disc) -> float:
        """log2 of the half-width on which an integrated rate keeps the flow's accuracy.

        A rate is measured by its central value (it never vanishes); what remains of it beside a
        logarithm may, and is measured against 1, the size of the logarithm.
        """
        scale = -disc.radius if residue else log2_lower(disc.series[0])
        return disc.radius + min(-1.0, (scale - self.flow.accuracy - disc.sup - 1) / disc.order)

    def _integrate(self, residue: int, disc: Disc) -> ClockSeries:
        tail = tail_log2(disc.sup, self.h_log - disc.radius, disc.order) + self.h_log
        slope = arb_poly(disc.series.coeffs())
        return ClockSeries(slope.integral(), slope, pow2_ball(tail), residue)

    def endless(self, name: str) -> bool:
        """Whether a clock runs on for ever towards the piece's end at ``x = 0``."""
        return bool(self.clocks[name].residue)

    # -- evaluation --------------------------------------------------------------------------
    def covers(self, x: arb) -> bool:
        return bool(abs(x) <= self.h)

    def require(self, x: arb) -> None:
        if not self.covers(x):
            raise NotCovered("outside the piece")

    def u_at(self, x: arb) -> arb:
        return self.poly_u(x) + self.tail_u

    def v_at(self, x: arb) -> arb:
        return (self.poly_v(x) + self.tail_v) / self.step

    def point(self, x: arb) -> Point:
        """State at ``x``; relative accuracy of ``gap`` is kept at a horizon."""
        self.require(x)
        u = self.u_at(x)
        if self.at_horizon:
            gap = x * (self.poly_gap(x) + self.tail_gap)
            v2 = self.flow.energy2 - gap * (self.flow.mu + self.flow.momentum2 * u * u)
            v = self.v_at(x) if v2.contains(0) else self.v_at(x).sgn() * v2.sqrt()
            return Point(u, v, gap, x * self.step)
        return Point(u, self.v_at(x), 1 - 2 * u, x * self.step)

    def clock(self, name: str, x: arb) -> arb:
        self.require(x)
        return self.clocks[name].value(x)

    def ball_rate(self, name: str, x: arb) -> arb:
        """``d clock / dx`` on a ball, from the pointwise formula (no series involved)."""
        u, v = self.u_at(x), self.v_at(x)
        return self.step * self.flow.rate(name, u, self.delta * v, 1 - 2 * u, self.regular)

    # -- inversion ---------------------------------------------------------------------------
    def _newton(self, value: Callable[[arb], arb], slope: Callable[[arb], arb], x: arb) -> arb:
        """Newton on midpoints until the step stops shrinking; returns an exact number."""
        last = arb(10) * self.h
        # the step after one this small is below the precision, by quadratic convergence
        small = self.h * arb((1, -(self.flow.precision // 2) - 8))
        for _ in range(60):
            step = (value(x) / slope(x)).mid()
            x = (x - step).mid()
            if abs(x) > 1.2 * self.h:
                x = x.sgn() * arb(self.h)
            if abs(step) < small or not abs(step) < last / 2:
                break
            last = abs(step)
        return x

    def _certify(self, x: arb, residual: arb, slope_on: Callable[[arb], arb]) -> arb:
        size = residual.abs_upper() / max(abs(slope_on(x)).abs_lower(), arb((1, -(10**6))))
        spread = (4 * size + arb((1, -self.flow.precision)) * self.h).upper()
        root = interval_newton(x, residual, slope_on, spread)
        self.require(root)
        return root

    def find_clock(self, name: str, target: arb) -> arb:
        """The parameter at which the clock shows ``target``."""
        series = self.clocks[name]
        if series.residue:
            return self._find_log(series, target)
        middle = target.mid()
        start = self._guess(name, middle)
        x = self._newton(lambda z: series.poly(z) - middle, series.slope, start)
        return self._certify(x, series.value(x) - target, lambda z: self.ball_rate(name, z))

    def _find_log(self, series: ClockSeries, target: arb) -> arb:
        """Invert ``residue ln|x| + A(x)`` in the variable ``ln|x|``, on the side ``x < 0``."""
        middle = target.mid()

        def place(z: arb) -> arb:
            return -z.exp()

        z = (middle / series.residue).mid()
        for _ in range(80):
            x = place(z).mid()
            if not abs(x) <= self.h:
                z, x = arb(self.h).log().mid(), arb(-self.h)
            slope = series.residue + x * series.slope(x)
            step = ((series.residue * z + series.poly(x) - middle) / slope).mid()
            z = (z - step).mid()
            if abs(step) <= abs(z) * arb((1, 8 - self.flow.precision)) + arb(
                (1, 8 - self.flow.precision)
            ):
                break
        residual = series.residue * z + series.poly(place(z)) + series.tail - target

        def slope_on(ball: arb) -> arb:
            x = place(ball)
            self.require(x)
            # the omitted terms r_k x^k of x A' are at most (k + 1) times those of A
            return series.residue + x * series.slope(x) + (self.flow.order + 2) * series.tail

        spread = (4 * residual.abs_upper() + abs(z) * arb((1, 4 - self.flow.precision))).upper()
        return place(interval_newton(z, residual, slope_on, spread))

    def _guess(self, name: str, target: arb) -> arb:
        """A first guess for the parameter at which a clock shows ``target``, by float64 Newton.

        From there two steps of the real thing reach the working precision.
        """
        c0 = float((self.clocks[name].poly[0] - target).mid())
        powers = self._float_powers(name)
        if not powers or powers[-1] == 0.0:
            return arb(0.5 * self.h)
        x = min(max(-c0 / powers[-1], -self.h), self.h)
        for _ in range(_FLOAT_STEPS):
            value = slope = 0.0
            for c in powers:  # highest first, without the constant term
                slope = slope * x + value
                value = value * x + c
            slope, value = slope * x + value, value * x + c0
            step = value / slope if slope else 0.0
            x = min(max(x - step, -self.h), self.h)
            if abs(step) <= 1e-15 * self.h:
                break
        return arb(x) if x == x else arb(0)

    def _float_powers(self, name: str) -> list[float]:
        """Coefficients of a clock from the highest that float64 can see down to the first."""
        if name not in self._powers:
            found = [float(c.mid()) for c in self.clocks[name].poly.coeffs()[1:]]
            sizes = [abs(c) * self.h**k for k, c in enumerate(found)]
            seen = [k for k, size in enumerate(sizes) if size > _UNSEEN * max(sizes)]
            self._powers[name] = found[: seen[-1] + 1][::-1] if seen else []
        return self._powers[name]

    def find_u(self, u: arb, side: int = 0, guess: arb | None = None) -> arb:
        """The parameter at which ``u`` is reached; ``side`` picks it at a turning point."""
        middle = u.mid()
        if guess is None:
            guess = self._guess_u(middle, side)
        if abs(guess) > self.h:
            guess = guess.sgn() * arb(self.h)
        x = self._newton(lambda z: self.poly_u(z) - middle, self.poly_v, guess)
        return self._certify(x, self.u_at(x) - u, lambda z: self.v_at(z) * self.step)

    def _guess_u(self, u: arb, side: int) -> arb:
        """Root of the quadratic part of ``u(x)``; ``side`` its sign where both roots serve."""
        d0, d1, d2 = self.poly_u[0].mid() - u, self.poly_u[1].mid(), self.poly_u[2].mid()
        if side:
            ratio = -d0 / d2
            return side * (ratio.sqrt() if ratio > 0 else arb(0.5 * self.h)).mid()
        disc = d1 * d1 - 4 * d2 * d0
        if disc > 0:
            return (-2 * d0 / (d1 + d1.sgn() * disc.sqrt())).mid()
        return (-d0 / d1).mid()

    def find_v(self, v: arb) -> arb:
        """The parameter at which ``v`` is reached: well conditioned at a turning point."""
        middle = (v * self.step).mid()
        bend = self.poly_v.derivative()
        x = (-(self.poly_v[0] - middle) / bend[0]).mid()
        if abs(x) > self.h:
            x = x.sgn() * arb(self.h)
        x = self._newton(lambda z: self.poly_v(z) - middle, bend, x)
        return self._certify(
            x,
            self.v_at(x) - v,
            lambda z: self.flow.slope(self.u_at(z)) * self.step,
        )
