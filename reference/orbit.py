"""The exact geodesic of a start: the truth that everything else is held against."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from functools import cached_property
from math import isfinite

import numpy as np
import numpy.typing as npt
from flint import arb, fmpq

from truefall.reference.exact.disc import TooSmall, working
from truefall.reference.exact.frame import ElementsFrame, Frame, StartFrame, chart_state
from truefall.reference.exact.leg import LegEnd
from truefall.reference.exact.rounding import Rounded, ball_to_float, round_ball
from truefall.reference.exact.segment import NotCovered
from truefall.reference.exact.solution import BeyondEnd, Instant, MoreBits, Solution
from truefall.reference.exact.start import (
    INGOING,
    Motion,
    StartError,
    motion_from_elements,
    motion_from_start,
)
from truefall.reference.states import Bounded, End, EndReached, Floats, States

__all__ = ["CHARTS", "CLOCKS", "PARTICLES", "SYSTEMS", "Orbit"]

#: Exact speed of light in each system's units (BIPM, SI brochure, 9th edition 2019).
SYSTEMS = {
    "geometric": Fraction(1),
    "SI": Fraction(299_792_458),
    "astronomical": Fraction(299_792_458, 1000),
}
CHARTS = ("areal", "isotropic", "harmonic", *INGOING)
PARTICLES = ("massive", "light")
CLOCKS = ("coordinate", "proper")

_PRECISIONS = (256, 384, 640, 1024, 2048, 4096, 8192)
_TIE_BITS = 400  # a ball this tight that still straddles a rounding boundary is a tie
_RETRY = (MoreBits, NotCovered, TooSmall)


def _choice(value: str, allowed: Sequence[str], key: str) -> str:
    if value not in allowed:
        raise StartError(f"{key} is {value!r}; allowed are {', '.join(allowed)}", key)
    return value


def _number(value: object, key: str) -> float:
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        raise StartError(f"{key} must be a number, not {value!r}", key) from None
    if not isfinite(number):
        raise StartError(f"{key} must be finite, not {number}", key)
    return number


def _triple(values: object, key: str) -> tuple[float, float, float]:
    items = list(values) if not isinstance(values, str) else []  # type: ignore[call-overload]
    if len(items) != 3:
        raise StartError(f"{key} must hold three numbers", key)
    a, b, c = (_number(v, key) for v in items)
    return a, b, c


class Orbit:
    """An exact Schwarzschild geodesic with a proven bound on every value.

    The start is a set of float64 numbers and is taken as exact.  The solution is enclosed in
    ball arithmetic (see DEVELOPERS.md, "The exact engine"), with the precision raised until
    each value rounds without doubt.

    Parameters
    ----------
    system : {"geometric", "SI", "astronomical"}
        Units: GM = c = 1; m and s; km and s.
    gm : float
        Gravitational parameter, length^3/time^2 (1 in the geometric system).
    particle : {"massive", "light"}
    chart : str
        One of :data:`CHARTS`.
    position : three floats
        Cartesian in the chart.
    velocity : three floats
        ``d position / d (chart time)``; for light only its direction counts.
    clock : {"coordinate", "proper"}
        What the times of :meth:`at` mean; "proper" only for massive particles.
    start_time : float
        Reading of the clock at the start.

    Raises
    ------
    StartError
        If no geodesic starts like that; ``key`` names the orbit-file key at fault.
    """

    def __init__(
        self,
        *,
        position: Sequence[float],
        velocity: Sequence[float],
        system: str = "geometric",
        gm: float = 1.0,
        particle: str = "massive",
        chart: str = "areal",
        clock: str = "coordinate",
        start_time: float = 0.0,
    ) -> None:
        self._declare(system, gm, particle, chart, clock, start_time)
        self.position = _triple(position, "start.position")
        self.velocity = _triple(velocity, "start.velocity")
        place = tuple(Fraction(x) / self._length for x in self.position)
        speed = tuple(Fraction(v) / self._c for v in self.velocity)
        self._motion: Motion = motion_from_start(particle, chart, place, speed)
        self._frame: StartFrame | ElementsFrame = StartFrame(place, speed)

    @classmethod
    def from_elements(
        cls,
        *,
        semilatus_rectum: float,
        eccentricity: float,
        inclination: float = 0.0,
        node: float = 0.0,
        periapsis: float = 0.0,
        anomaly: float = 0.0,
        system: str = "geometric",
        gm: float = 1.0,
        particle: str = "massive",
        clock: str = "coordinate",
        start_time: float = 0.0,
    ) -> Orbit:
        """An orbit ``r = p/(1 + e cos chi)`` in the areal chart; the elements are exact.

        Parameters
        ----------
        semilatus_rectum : float
            ``p`` in the system's length unit; must exceed ``(6 + 2e) GM/c^2``.
        eccentricity : float
            0 or more; 1 and more are flybys.
        inclination, node, periapsis, anomaly : float
            Radians; ``anomaly`` is ``chi`` of the start.

        Raises
        ------
        StartError
            If the elements describe no such orbit.
        """
        orbit = cls.__new__(cls)
        orbit._declare(system, gm, particle, "areal", clock, start_time)
        if particle != "massive":
            raise StartError(
                "elements describe massive particles; give light a position and a direction",
                "particle",
            )
        names = ("semilatus_rectum", "eccentricity", "inclination", "node", "periapsis", "anomaly")
        given = (semilatus_rectum, eccentricity, inclination, node, periapsis, anomaly)
        p, e, tilt, ascending, argument, chi = (
            Fraction(_number(v, f"start.{n}")) for n, v in zip(names, given, strict=True)
        )
        orbit._motion = motion_from_elements(p / orbit._length, e, chi)
        orbit._frame = ElementsFrame(tilt, ascending, argument + chi)
        start = orbit.at([start_time])
        orbit.position = tuple(float(x) for x in start.position[0])
        orbit.velocity = tuple(float(v) for v in start.velocity[0])
        return orbit

    def _declare(
        self, system: str, gm: float, particle: str, chart: str, clock: str, start_time: float
    ) -> None:
        self.system = _choice(system, tuple(SYSTEMS), "system")
        self.particle = _choice(particle, PARTICLES, "particle")
        self.chart = _choice(chart, CHARTS, "chart")
        self.clock = _choice(clock, CLOCKS, "clock")
        self.gm = _number(gm, "gm")
        self.start_time = _number(start_time, "start.time")
        if not self.gm > 0:
            raise StartError(f"gm must be positive, not {self.gm!r}", "gm")
        if system == "geometric" and self.gm != 1:
            raise StartError(
                f"gm is {self.gm!r}, but geometric units mean gm = 1; write gm = 1.0, or use the "
                "SI or astronomical system",
                "gm",
            )
        if particle == "light" and clock == "proper":
            raise StartError("light has no proper time; use clock = \"coordinate\"", "clock")
        self._c = SYSTEMS[system]
        self._length = Fraction(self.gm) / self._c**2
        self._time = self._length / self._c
        self._solutions: dict[int, Solution] = {}
        self._frames: dict[int, Frame] = {}
        self.position: tuple[float, ...]
        self.velocity: tuple[float, ...]

    # -- what kind of orbit -------------------------------------------------------------------
    def _solution(self, precision: int) -> Solution:
        if precision not in self._solutions:
            self._solutions[precision] = Solution(self._motion, self.chart, precision)
            self._frames[precision] = self._frame.balls()
        return self._solutions[precision]

    def _settled(self, first: int = 256) -> tuple[int, Solution]:
        """The solution at the lowest precision that separates its turning points."""
        for precision in _PRECISIONS:
            if precision < first:
                continue
            with working(precision):
                try:
                    return precision, self._solution(precision)
                except _RETRY:
                    continue
        raise ArithmeticError("the orbit could not be enclosed at the highest precision")

    def _bounded(self, take: str, scale: Fraction = Fraction(1)) -> Bounded | None:
        """A constant of the orbit as float64 words, by the name of its enclosure."""
        precision, _ = self._settled()
        for bits in _PRECISIONS:
            if bits < precision:
                continue
            with working(bits):
                try:
                    ball = _CONSTANTS[take](self._solution(bits))
                except _RETRY:
                    continue
                if ball is None:
                    return None
                rounded = round_ball(ball * _q(scale))
                if rounded.decided or bits >= 2048:
                    return Bounded(rounded.value, rounded.low, rounded.bound)
        raise ArithmeticError(f"{take} could not be enclosed")

    @cached_property
    def orbit_class(self) -> str:
        """One of the class names of the documentation (bound, plunge, flyby, ...)."""
        if self._motion.circular:
            with working(256):
                edge = arb(1) / 6
                u = self._motion.start_balls()[0]
            return "circular-unstable" if u > edge else "circular-stable"
        return self._settled()[1].region.name

    @cached_property
    def energy(self) -> Bounded:
        """``E`` per rest energy; 1 for light (its affine parameter is scaled so)."""
        return self._must("energy")

    @cached_property
    def energy_minus_one(self) -> Bounded:
        """``E - 1`` without cancellation; 0 for light."""
        return self._must("energy_minus_one")

    @cached_property
    def angular_momentum(self) -> Bounded:
        """Per rest mass, length^2/time; for light the impact parameter ``L/E``, a length."""
        return self._must("angular_momentum", self._length * (self._c if self._motion.mu else 1))

    @cached_property
    def angular_momentum_direction(self) -> Floats:
        """Unit vector (3,); zeros for radial motion."""
        with working(256):
            return np.array([ball_to_float(c) for c in self._frame.momentum_direction()])

    @cached_property
    def periapsis(self) -> Bounded | None:
        """Areal radius of the inner turning point, or None."""
        return self._bounded("periapsis", self._length)

    @cached_property
    def apoapsis(self) -> Bounded | None:
        """Areal radius of the outer turning point, or None."""
        return self._bounded("apoapsis", self._length)

    @cached_property
    def radial_period(self) -> Bounded | None:
        """Chart time from periapsis to periapsis (bound orbits), or None."""
        return self._bounded("radial_period", self._time)

    @cached_property
    def proper_radial_period(self) -> Bounded | None:
        """Proper time from periapsis to periapsis (bound orbits), or None."""
        return self._bounded("proper_radial_period", self._time)

    @cached_property
    def azimuth_per_radial_period(self) -> Bounded | None:
        """Azimuth swept from periapsis to periapsis (bound orbits), radians, or None."""
        return self._bounded("azimuth_per_radial_period")

    @cached_property
    def velocity_used(self) -> tuple[float, ...]:
        """The chart velocity at the start: as given, or for light scaled to the speed of light."""
        if self._motion.mu:
            return self.velocity
        return tuple(float(v) for v in self.at([self.start_time]).velocity[0])

    def _must(self, take: str, scale: Fraction = Fraction(1)) -> Bounded:
        value = self._bounded(take, scale)
        if value is None:
            raise ArithmeticError(f"{take} has no value")
        return value

    # -- where it ends --------------------------------------------------------------------------
    @property
    def _engine_clock(self) -> str:
        return "tau" if self.clock == "proper" else "chart"

    @cached_property
    def _ends(self) -> dict[int, tuple[arb, LegEnd] | None]:
        ends: dict[int, tuple[arb, LegEnd] | None] = {}
        for delta in (1, -1):
            precision, _ = self._settled()
            for bits in [b for b in _PRECISIONS if b >= precision]:
                with working(bits):
                    try:
                        ends[delta] = self._solution(bits).end(self._engine_clock, delta)
                    except _RETRY:
                        continue
                    break
        return ends

    def _end(self, delta: int) -> End | None:
        found = self._ends[delta]
        if found is None:
            return None
        reading, kind = found
        with working(512):
            time = _q(Fraction(self.start_time)) + reading * _q(self._time)
            radius = 0.0 if kind is LegEnd.CENTRE else ball_to_float(2 * _q(self._length))
        if kind is LegEnd.CENTRE:
            reason = "r = 0"
        elif self.chart in INGOING:
            reason = "the past edge of the ingoing chart (the past horizon, r = 2 GM/c^2)"
        else:
            reason = f"the horizon (r = 2 GM/c^2), where the {self.chart} chart stops"
        return End(ball_to_float(time), reason, radius)

    @cached_property
    def ends_after(self) -> End | None:
        """Where the orbit ends towards the future on its clock, or None."""
        return self._end(1)

    @cached_property
    def ends_before(self) -> End | None:
        """Where the orbit ends towards the past on its clock, or None."""
        return self._end(-1)

    def reachable(self, times: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """Which of the times the orbit reaches.

        Parameters
        ----------
        times : (n,) array_like
            On the orbit's clock.

        Returns
        -------
        (n,) bool array
        """
        stamps = self._stamps(times)
        inside = np.ones(stamps.shape, dtype=bool)
        limits = {d: e[0] for d, e in self._ends.items() if e is not None}
        if not limits:
            return inside
        with working(512):
            for k, t in enumerate(stamps):
                elapsed = arb(self._elapsed(t))
                for delta, limit in limits.items():
                    if not delta * elapsed < delta * limit:
                        inside[k] = False
        return inside

    @staticmethod
    def _stamps(times: npt.ArrayLike) -> Floats:
        stamps = np.atleast_1d(np.asarray(times, dtype=np.float64))
        if stamps.ndim != 1 or not np.all(np.isfinite(stamps)):
            raise ValueError("times must be a one-dimensional array of finite numbers")
        return stamps

    def _elapsed(self, time: float) -> fmpq:
        """Exact elapsed time in units of GM/c^3."""
        value = (Fraction(float(time)) - Fraction(self.start_time)) / self._time
        return fmpq(value.numerator, value.denominator)

    # -- the states -----------------------------------------------------------------------------
    def at(self, times: npt.ArrayLike, *, digits: int = 32) -> States:
        """The orbit at given times.

        Parameters
        ----------
        times : (n,) array_like
            On the orbit's clock, in any order; each float64 is taken as exact.
        digits : int
            Digits that value and second word together must have.

        Returns
        -------
        States

        Raises
        ------
        EndReached
            If the orbit ends before one of the times.
        """
        stamps = self._stamps(times)
        inside = self.reachable(stamps)
        if not inside.all():
            index = int(np.argmin(inside))
            after = stamps[index] >= self.start_time
            end = self.ends_after if after else self.ends_before
            if end is None:
                raise ArithmeticError("an orbit without an end refused a time")
            raise EndReached(end, index, float(stamps[index]))
        rows: dict[int, list[Rounded]] = {}
        extras: dict[int, tuple[float, float]] = {}
        waiting = list(range(len(stamps)))
        for precision in _PRECISIONS:
            if not waiting:
                break
            waiting = self._fill(precision, stamps, waiting, digits, rows, extras)
        if waiting:
            raise ArithmeticError(
                f"time {stamps[waiting[0]]!r} could not be enclosed at the highest precision"
            )
        return self._pack(stamps, rows, extras)

    def _fill(
        self,
        precision: int,
        stamps: Floats,
        wanted: list[int],
        digits: int,
        rows: dict[int, list[Rounded]],
        extras: dict[int, tuple[float, float]],
    ) -> list[int]:
        """Compute samples at one precision; return those that need more."""
        left: list[int] = []
        with working(precision):
            try:
                solution = self._solution(precision)
            except _RETRY:
                return wanted
            tight = arb((1, -int(digits * 3.33) - 1))
            for index in wanted:
                try:
                    instant = solution.at(self._engine_clock, self._elapsed(stamps[index]))
                except _RETRY:
                    left.append(index)
                    continue
                except BeyondEnd as error:
                    # the end lies closer to this time than the enclosure of either
                    raise ArithmeticError("a time at the very end of the orbit") from error
                row = self._row(solution, precision, instant, tight)
                if row is None:
                    left.append(index)
                    continue
                rows[index] = row
                extras[index] = (
                    ball_to_float(_q(self._length) / instant.u), ball_to_float(instant.azimuth)
                )
        return left

    def _row(
        self, solution: Solution, precision: int, instant: Instant, tight: arb
    ) -> list[Rounded] | None:
        """The rounded numbers of a sample, or None if the enclosure does not settle them."""
        position, velocity = chart_state(
            self.chart, instant, solution.flow.momentum, self._frames[precision]
        )
        tau = instant.tau * _q(self._time if self._motion.mu else self._length)
        groups = [
            [x * _q(self._length) for x in position],
            [v * _q(self._c) for v in velocity],
            [tau],
            [instant.chart * _q(self._time)],
        ]
        row: list[Rounded] = []
        for group in groups:
            size2 = sum((x * x for x in group), arb(0))
            limit = tight * size2.sqrt().lower() if size2 > 0 else arb(0)
            for ball in group:
                if not ball.is_finite() or (ball.rad() > limit):
                    return None
                rounded = round_ball(ball)
                tie = ball.rel_accuracy_bits() > _TIE_BITS or precision >= _PRECISIONS[-1]
                if not (rounded.decided or tie):
                    return None
                row.append(rounded)
        return row

    def _pack(
        self,
        stamps: Floats,
        rows: dict[int, list[Rounded]],
        extras: dict[int, tuple[float, float]],
    ) -> States:
        n = len(stamps)
        values = np.array([[q.value for q in rows[k]] for k in range(n)]).reshape(n, 8)
        lows = np.array([[q.low for q in rows[k]] for k in range(n)]).reshape(n, 8)
        bounds = np.array([[q.bound for q in rows[k]] for k in range(n)]).reshape(n, 8)
        more = np.array([extras[k] for k in range(n)]).reshape(n, 2)
        massive, proper = bool(self._motion.mu), self.clock == "proper"

        def column(k: int, wanted: bool) -> tuple[Floats | None, ...]:
            if not wanted:
                return None, None, None
            return values[:, k].copy(), lows[:, k].copy(), bounds[:, k].copy()

        tau, tau_low, tau_bound = column(6, massive)
        affine, affine_low, affine_bound = column(6, not massive)
        chart, chart_low, chart_bound = column(7, proper)
        return States(
            time=stamps.copy(),
            position=values[:, :3].copy(),
            position_low=lows[:, :3].copy(),
            position_bound=bounds[:, :3].copy(),
            velocity=values[:, 3:6].copy(),
            velocity_low=lows[:, 3:6].copy(),
            velocity_bound=bounds[:, 3:6].copy(),
            proper_time=tau,
            proper_time_low=tau_low,
            proper_time_bound=tau_bound,
            affine=affine,
            affine_low=affine_low,
            affine_bound=affine_bound,
            coordinate_time=chart,
            coordinate_time_low=chart_low,
            coordinate_time_bound=chart_bound,
            radius=more[:, 0].copy(),
            azimuth=more[:, 1].copy(),
            winding=more[:, 1] / (2 * np.pi),
        )


def _q(value: Fraction) -> fmpq:
    return fmpq(value.numerator, value.denominator)


def _turning(solution: Solution, upper: bool) -> arb | None:
    if solution.circular:
        return 1 / solution.flow.u0
    u = solution.region.upper_u if upper else solution.region.lower_u
    return None if u is None else 1 / u


def _energy_minus_one(solution: Solution) -> arb:
    flow = solution.flow
    return flow.excess / (flow.energy + 1) if flow.mu else arb(0)


#: Constants of the motion by name, each from a solution to a ball (GM = c = 1) or None.
_CONSTANTS = {
    "energy": lambda s: s.flow.energy,
    "energy_minus_one": _energy_minus_one,
    "angular_momentum": lambda s: s.flow.momentum,
    "periapsis": lambda s: _turning(s, True),
    "apoapsis": lambda s: _turning(s, False),
    "radial_period": lambda s: s.period.clocks["chart"] if s.period else None,
    "proper_radial_period": lambda s: s.period.clocks["tau"] if s.period else None,
    "azimuth_per_radial_period": lambda s: s.flow.momentum * s.period.s if s.period else None,
}
