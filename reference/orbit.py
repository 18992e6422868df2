"""The exact geodesic of a start: the truth that everything else is held against."""

from __future__ import annotations

from fractions import Fraction
from functools import cached_property
from math import inf

import numpy as np
import numpy.typing as npt
from flint import arb, fmpq

from truefall.reference.declaration import (
    CHARTS,
    CLOCKS,
    PARTICLES,
    SYSTEMS,
    choice,
    finite_number,
    rational,
    three_numbers,
)
from truefall.reference.enclosure import Enclosure, Sample
from truefall.reference.exact.disc import working
from truefall.reference.exact.frame import ElementsFrame, StartFrame
from truefall.reference.exact.leg import LegEnd
from truefall.reference.exact.rounding import ball_to_float
from truefall.reference.exact.start import (
    INGOING,
    Motion,
    StartError,
    motion_from_elements,
    motion_from_start,
)
from truefall.reference.states import Bounded, End, EndReached, Floats, States

__all__ = ["CHARTS", "CLOCKS", "PARTICLES", "SYSTEMS", "Orbit"]


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
        position: npt.ArrayLike,
        velocity: npt.ArrayLike,
        system: str = "geometric",
        gm: float = 1.0,
        particle: str = "massive",
        chart: str = "areal",
        clock: str = "coordinate",
        start_time: float = 0.0,
    ) -> None:
        self._declare(system, gm, particle, chart, clock, start_time)
        self.position: tuple[float, ...] = three_numbers(position, "start.position")
        self.velocity: tuple[float, ...] = three_numbers(velocity, "start.velocity")
        place = tuple(Fraction(x) / self._length for x in self.position)
        speed = tuple(Fraction(v) / self._c for v in self.velocity)
        motion = motion_from_start(particle, chart, place, speed)
        self._enclose(motion, StartFrame(place, speed))

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
            Fraction(finite_number(v, f"start.{n}")) for n, v in zip(names, given, strict=True)
        )
        motion = motion_from_elements(p / orbit._length, e, chi)
        orbit._enclose(motion, ElementsFrame(tilt, ascending, argument + chi))
        start = orbit.at([start_time])
        orbit.position = tuple(float(x) for x in start.position[0])
        orbit.velocity = tuple(float(v) for v in start.velocity[0])
        return orbit

    def _declare(
        self, system: str, gm: float, particle: str, chart: str, clock: str, start_time: float
    ) -> None:
        self.system = choice(system, tuple(SYSTEMS), "system")
        self.particle = choice(particle, PARTICLES, "particle")
        self.chart = choice(chart, CHARTS, "chart")
        self.clock = choice(clock, CLOCKS, "clock")
        self.gm = finite_number(gm, "gm")
        self.start_time = finite_number(start_time, "start.time")
        if not self.gm > 0:
            raise StartError(f"gm must be positive, not {self.gm!r}", "gm")
        if system == "geometric" and self.gm != 1:
            raise StartError(
                f"gm is {self.gm!r}, but geometric units mean gm = 1; write gm = 1.0, or use the "
                "SI or astronomical system",
                "gm",
            )
        if particle == "light" and clock == "proper":
            raise StartError('light has no proper time; use clock = "coordinate"', "clock")
        self._c = SYSTEMS[system]
        self._length = Fraction(self.gm) / self._c**2
        self._time = self._length / self._c

    def _enclose(self, motion: Motion, frame: StartFrame | ElementsFrame) -> None:
        self._motion = motion
        self._enclosure = Enclosure(
            motion, frame, self.chart, length=self._length, time=self._time, speed=self._c
        )

    # -- what kind of orbit -------------------------------------------------------------------
    @cached_property
    def orbit_class(self) -> str:
        """One of the class names of the documentation (bound, plunge, flyby, ...)."""
        if self._motion.circular:
            with working(256):
                edge = arb(1) / 6
                u = self._motion.start_balls()[0]
            return "circular-unstable" if u > edge else "circular-stable"
        return self._enclosure.region_name()

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
            return np.array([ball_to_float(c) for c in self._enclosure.frame.momentum_direction()])

    @cached_property
    def periapsis(self) -> Bounded | None:
        """Areal radius of the inner turning point, or None."""
        return self._enclosure.constant("periapsis", self._length)

    @cached_property
    def apoapsis(self) -> Bounded | None:
        """Areal radius of the outer turning point, or None."""
        return self._enclosure.constant("apoapsis", self._length)

    @cached_property
    def radial_period(self) -> Bounded | None:
        """Chart time from periapsis to periapsis (bound orbits), or None."""
        return self._enclosure.constant("radial_period", self._time)

    @cached_property
    def proper_radial_period(self) -> Bounded | None:
        """Proper time from periapsis to periapsis (bound orbits), or None."""
        return self._enclosure.constant("proper_radial_period", self._time)

    @cached_property
    def azimuth_per_radial_period(self) -> Bounded | None:
        """Azimuth swept from periapsis to periapsis (bound orbits), radians, or None."""
        return self._enclosure.constant("azimuth_per_radial_period")

    @cached_property
    def velocity_used(self) -> tuple[float, ...]:
        """The chart velocity at the start: as given, or for light scaled to the speed of light."""
        if self._motion.mu:
            return self.velocity
        return tuple(float(v) for v in self.at([self.start_time]).velocity[0])

    def _must(self, take: str, scale: Fraction = Fraction(1)) -> Bounded:
        value = self._enclosure.constant(take, scale)
        if value is None:
            raise ArithmeticError(f"{take} has no value")
        return value

    # -- where it ends --------------------------------------------------------------------------
    @property
    def _engine_clock(self) -> str:
        return "tau" if self.clock == "proper" else "chart"

    @cached_property
    def _ends(self) -> dict[int, tuple[arb, LegEnd] | None]:
        return {delta: self._enclosure.end(self._engine_clock, delta) for delta in (1, -1)}

    def _end(self, delta: int) -> End | None:
        found = self._ends[delta]
        if found is None:
            return None
        reading, kind = found
        with working(512):
            time = rational(Fraction(self.start_time)) + reading * rational(self._time)
            radius = (
                0.0 if kind is LegEnd.CENTRE else ball_to_float(2 * arb(rational(self._length)))
            )
        if kind is LegEnd.CENTRE:
            reason, radius = "r = 0", 0.0
        elif kind is LegEnd.INFINITY:
            reason, radius = "the past edge of the ingoing chart (past null infinity)", inf
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
        extremes = [self._elapsed(t) for t in {stamps.min(), stamps.max()}] if stamps.size else []
        if self._enclosure.reaches(self._engine_clock, extremes):
            return inside  # the usual case, without looking for the ends
        limits = {d: e[0] for d, e in self._ends.items() if e is not None}
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
        return rational(value)

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
            end = self.ends_after if stamps[index] >= self.start_time else self.ends_before
            if end is None:
                raise ArithmeticError("an orbit without an end refused a time")
            raise EndReached(end, index, float(stamps[index]))
        elapsed = [self._elapsed(t) for t in stamps]
        return self._pack(stamps, self._enclosure.samples(self._engine_clock, elapsed, digits))

    # -- for the table ---------------------------------------------------------------------------
    @property
    def enclosure(self) -> Enclosure:
        """The solutions behind this orbit, for modules that need more than rounded states."""
        return self._enclosure

    def engine_times(self, elapsed: Floats) -> list[fmpq]:
        """Elapsed times, float64 in the system's unit, as exact multiples of GM/c^3."""
        return [rational(Fraction(float(t)) / self._time) for t in elapsed]

    @property
    def engine_clocks(self) -> tuple[str, str]:
        """Names of the clock that times are on, and of the second one, inside the engine."""
        return self._engine_clock, "chart" if self.clock == "proper" else "tau"

    def _pack(self, stamps: Floats, samples: list[Sample]) -> States:
        n = len(samples)
        numbers = [(q.value, q.low, q.bound) for s in samples for q in s.numbers]
        value, low, bound = np.array(numbers).reshape(n, 9, 3).transpose(2, 0, 1).copy()

        def column(k: int, wanted: bool) -> tuple[Floats | None, ...]:
            if not wanted:
                return None, None, None
            return value[:, k].copy(), low[:, k].copy(), bound[:, k].copy()

        massive = bool(self._motion.mu)
        tau, tau_low, tau_bound = column(6, massive)
        affine, affine_low, affine_bound = column(6, not massive)
        chart, chart_low, chart_bound = column(7, self.clock == "proper")
        return States(
            time=stamps.copy(),
            position=value[:, :3].copy(),
            position_low=low[:, :3].copy(),
            position_bound=bound[:, :3].copy(),
            velocity=value[:, 3:6].copy(),
            velocity_low=low[:, 3:6].copy(),
            velocity_bound=bound[:, 3:6].copy(),
            proper_time=tau,
            proper_time_low=tau_low,
            proper_time_bound=tau_bound,
            affine=affine,
            affine_low=affine_low,
            affine_bound=affine_bound,
            coordinate_time=chart,
            coordinate_time_low=chart_low,
            coordinate_time_bound=chart_bound,
            radius=np.array([s.radius for s in samples]),
            azimuth=value[:, 8].copy(),
            azimuth_low=low[:, 8].copy(),
            azimuth_bound=bound[:, 8].copy(),
            winding=value[:, 8] / (2 * np.pi),
        )
