"""Precision raised until every number rounds without doubt: from balls to float64 results."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from typing import TypeVar

import numpy as np
from flint import arb, fmpq

from truefall.reference.declaration import rational
from truefall.reference.exact.disc import TooSmall, working
from truefall.reference.exact.frame import ElementsFrame, Frame, StartFrame, chart_state
from truefall.reference.exact.leg import LegEnd
from truefall.reference.exact.rounding import Rounded, ball_to_float, round_ball
from truefall.reference.exact.segment import NotCovered
from truefall.reference.exact.solution import BeyondEnd, Instant, MoreBits, Solution
from truefall.reference.exact.start import Motion
from truefall.reference.states import Bounded, Floats

__all__ = ["Enclosure", "Sample"]

#: Working precisions in bits, tried in turn.
PRECISIONS = (160, 256, 384, 640, 1024, 2048, 4096, 8192)
_TIE_BITS = 400  # a ball this tight that still straddles a rounding boundary is a tie
T = TypeVar("T")
_RETRY = (MoreBits, NotCovered, TooSmall)


@dataclass(frozen=True)
class Sample:
    """One instant: position (3), velocity (3), proper time (affine), chart time, azimuth.

    ``numbers`` holds them in this order.
    """

    numbers: list[Rounded]
    radius: float


class Enclosure:
    """All solutions of one start, by precision, and the numbers rounded from them.

    Parameters
    ----------
    motion, frame
        The exact constants and the orbit's plane.
    chart : str
    length, time, speed : Fraction
        GM/c^2, GM/c^3 and c in the caller's units.
    """

    def __init__(
        self,
        motion: Motion,
        frame: StartFrame | ElementsFrame,
        chart: str,
        *,
        length: Fraction,
        time: Fraction,
        speed: Fraction,
    ) -> None:
        self.motion, self.frame, self.chart = motion, frame, chart
        self._length, self._time, self._speed = rational(length), rational(time), rational(speed)
        self._solutions: dict[int, Solution] = {}
        self._frames: dict[int, Frame] = {}

    def solution(self, precision: int) -> Solution:
        """The solution at a precision; use inside ``working(precision)``."""
        if precision not in self._solutions:
            self._solutions[precision] = Solution(self.motion, self.chart, precision)
            self._frames[precision] = self.frame.balls()
        return self._solutions[precision]

    def first_that(self, take: Callable[[Solution], T], accept: Callable[[T], bool]) -> T:
        """``take(solution)`` at the lowest precision at which it works and is accepted."""
        for precision in PRECISIONS:
            with working(precision):
                try:
                    value = take(self.solution(precision))
                except _RETRY:
                    continue
                if accept(value) or precision == PRECISIONS[-1]:
                    return value
        raise ArithmeticError("the orbit could not be enclosed at the highest precision")

    def region_name(self) -> str:
        """The class of an orbit that is no circle."""
        return self.first_that(lambda s: s.region.name, lambda _: True)

    def constant(self, name: str, scale: Fraction = Fraction(1)) -> Bounded | None:
        """A constant of the motion (see ``_CONSTANTS``) times ``scale``, or None."""
        factor = rational(scale)

        def take(solution: Solution) -> Rounded | None:
            ball = _CONSTANTS[name](solution)
            if ball is None:
                return None
            rounded = round_ball(ball * factor)
            rounded.decided |= ball.rel_accuracy_bits() > _TIE_BITS
            return rounded

        rounded = self.first_that(take, lambda r: r is None or r.decided)
        if rounded is None:
            return None
        return Bounded(rounded.value, rounded.low, rounded.bound)

    def end(self, clock: str, delta: int) -> tuple[arb, LegEnd] | None:
        """Reading since the start (GM/c^3) and kind of the end towards future or past."""
        return self.first_that(lambda s: s.end(clock, delta), lambda _: True)

    def reaches(self, clock: str, elapsed: list[fmpq]) -> bool:
        """Whether the orbit certainly reaches all of these times; False may mean "too close"."""
        for precision in PRECISIONS[:2]:
            with working(precision):
                try:
                    for time in elapsed:
                        self.solution(precision).at(clock, time)
                except _RETRY:
                    continue
                except BeyondEnd:
                    return False
                return True
        return self.end(clock, 1) is None and self.end(clock, -1) is None

    def samples(self, clock: str, elapsed: list[fmpq], digits: int) -> list[Sample]:
        """The orbit at exact elapsed times (GM/c^3), each at the precision it needs."""
        found: dict[int, Sample] = {}
        waiting = list(range(len(elapsed)))
        for precision in PRECISIONS:
            if not waiting:
                break
            with working(precision):
                try:
                    self.solution(precision)
                except _RETRY:
                    continue
                for index in waiting:
                    sample = self._sample(precision, clock, elapsed[index], digits)
                    if sample is not None:
                        found[index] = sample
            waiting = [k for k in waiting if k not in found]
        if waiting:
            raise ArithmeticError(
                f"sample {waiting[0] + 1} could not be enclosed at the highest precision"
            )
        return [found[k] for k in range(len(elapsed))]

    def planar(self, clock: str, other: str, elapsed: list[fmpq]) -> Floats:
        """Planar position, velocity and the other clock as two words, (n, 5, 2)."""
        flat = Frame((arb(1), arb(0)), (arb(0), arb(1)))
        scale = self._length if other == "tau" and not self.motion.mu else self._time
        out = np.empty((len(elapsed), 5, 2))
        for k, time in enumerate(elapsed):

            def take(solution: Solution, time: fmpq = time) -> list[arb]:
                instant = solution.at(clock, time)
                x, v = chart_state(self.chart, instant, solution.flow.momentum, flat)
                reading = instant.chart if other == "chart" else instant.tau
                return [
                    *(c * self._length for c in x), *(c * self._speed for c in v), reading * scale
                ]  # fmt: skip

            balls = self.first_that(take, lambda b: _fine(b[:2]) and _fine(b[2:4]))
            for j, ball in enumerate(balls):
                high = ball_to_float(ball)
                with working(256):
                    out[k, j] = high, ball_to_float(ball - arb(high))
        return out

    def azimuths(self, clock: str, elapsed: list[fmpq]) -> list[float]:
        """Azimuth since the start at exact elapsed times."""
        found = []
        for time in elapsed:
            ball = self.first_that(
                lambda s, t=time: s.at(clock, t).azimuth,  # type: ignore[misc]
                lambda b: bool(b.is_finite()) and float(b.rad()) < 1e-3,
            )
            found.append(ball_to_float(ball))
        return found

    def reduction(self, clock: str, other: str) -> tuple[float, Floats, Floats] | None:
        """First elapsed time of the period that holds the start, the period's words, the turn's.

        The radial period, or a whole turn of a circular orbit; None for orbits without either.
        """

        def take(solution: Solution) -> tuple[arb, ...] | None:
            scale = self._length if other == "tau" and not self.motion.mu else self._time
            if solution.circular:  # which has no radial period, but repeats after every turn
                one = solution.at(clock, fmpq(1))
                length = 2 * arb.pi() / one.azimuth
                reading = length * (one.chart if other == "chart" else one.tau)
                return arb(0), length * self._time, reading * scale, arb(0)
            period = solution.period
            if period is None:
                return None
            turn = solution.flow.momentum * period.s
            turn -= 2 * arb.pi() * (turn / (2 * arb.pi())).mid().floor().mid()
            low = -period.before[clock] - solution.start[clock]
            length = period.clocks[clock] * self._time
            return low * self._time, length, period.clocks[other] * scale, turn

        balls = self.first_that(take, lambda b: b is None or all(_fine([x]) for x in b[1:]))
        if balls is None:
            return None
        words = []
        for ball in balls[1:]:
            high = ball_to_float(ball)
            with working(256):
                words += [high, ball_to_float(ball - arb(high))]
        return ball_to_float(balls[0]), np.array(words[:4]), np.array(words[4:])

    def plane(self) -> tuple[Floats, Floats]:
        """The frame's unit vectors, (3, 2), as two words."""
        with working(256):
            frame = self.frame.balls()
            axes = (frame.radial, frame.across)
            high = [[ball_to_float(c) for c in axis] for axis in axes]
            low = [
                [ball_to_float(c - arb(h)) for c, h in zip(axis, words, strict=True)]
                for axis, words in zip(axes, high, strict=True)
            ]
        return np.array(high).T.copy(), np.array(low).T.copy()

    def _sample(self, precision: int, clock: str, elapsed: fmpq, digits: int) -> Sample | None:
        try:
            instant = self.solution(precision).at(clock, elapsed)
        except _RETRY:
            return None
        except BeyondEnd as error:
            if precision == PRECISIONS[-1]:
                raise ArithmeticError("a time at the very end of the orbit") from error
            return None
        tight = arb((1, -int(digits * 3.33) - 1))
        numbers = self._rounded(precision, instant, tight)
        if numbers is None:
            return None
        radius = ball_to_float(self._length / instant.u)
        return Sample(numbers, radius)

    def _rounded(self, precision: int, instant: Instant, tight: arb) -> list[Rounded] | None:
        """The numbers of a sample, or None if the enclosure does not settle them."""
        position, velocity = chart_state(
            self.chart, instant, self.solution(precision).flow.momentum, self._frames[precision]
        )
        if instant.tau.is_zero() and instant.chart.is_zero():
            start = self.frame.start_state(velocity, bool(self.motion.mu))
            position, velocity = start if start is not None else (position, velocity)
        groups = [
            [x * self._length for x in position],
            [v * self._speed for v in velocity],
            [instant.tau * (self._time if self.motion.mu else self._length)],
            [instant.chart * self._time],
            [instant.azimuth],
        ]
        numbers: list[Rounded] = []
        for group in groups:
            size2 = sum((x * x for x in group), arb(0))
            limit = tight * size2.sqrt().lower() if size2 > 0 else arb(0)
            for ball in group:
                if not ball.is_finite() or ball.rad() > limit:
                    return None
                rounded = round_ball(ball)
                tie = ball.rel_accuracy_bits() > _TIE_BITS or precision == PRECISIONS[-1]
                if not (rounded.decided or tie):
                    return None
                numbers.append(rounded)
        return numbers


def _fine(balls: list[arb]) -> bool:
    """Whether a vector is known to 33 digits of its size."""
    size2 = sum((b * b for b in balls), arb(0))
    if not size2 > 0:
        return all(b.is_finite() and b.rad() < arb((1, -200)) for b in balls)
    limit = arb((1, -110)) * size2.sqrt().lower()
    return all(b.is_finite() and b.rad() <= limit for b in balls)


def _turning(solution: Solution, upper: bool) -> arb | None:
    if solution.circular:
        return 1 / solution.flow.u0
    u = solution.region.upper_u if upper else solution.region.lower_u
    return None if u is None else 1 / u


def _energy_minus_one(solution: Solution) -> arb:
    flow = solution.flow
    return flow.excess / (flow.energy + 1) if flow.mu else arb(0)


#: Constants of the motion by name, each from a solution to a ball (GM = c = 1) or None.
_CONSTANTS: dict[str, Callable[[Solution], arb | None]] = {
    "energy": lambda s: s.flow.energy,
    "energy_minus_one": _energy_minus_one,
    "angular_momentum": lambda s: s.flow.momentum,
    "periapsis": lambda s: _turning(s, True),
    "apoapsis": lambda s: _turning(s, False),
    "radial_period": lambda s: s.period.clocks["chart"] if s.period else None,
    "proper_radial_period": lambda s: s.period.clocks["tau"] if s.period else None,
    "azimuth_per_radial_period": lambda s: s.flow.momentum * s.period.s if s.period else None,
}
