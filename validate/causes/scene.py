"""A checked trajectory as the causes see it: residuals and their floors, GM = c = 1."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.reference.units import length_in, time_in
from truefall.validate.causes.flight import MOST_STEPS, Law, Sample, fly, steps_of

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["Scene", "scene_of"]

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_EPS = float(np.finfo(np.float64).eps)
#: Step of the start's differences: far from rounding, far from the next order.
_MOVE = 1e-7


@dataclass(frozen=True, eq=False)
class Scene:
    """Everything in units of GM/c^2, c and GM/c^3 of the declared GM; ``n`` rows.

    Attributes
    ----------
    result : CheckResult
    length, time, speed : float
        The units, in those of the file.
    elapsed : (n,)
        Time since the start.
    expected, obtained, residual : Sample
        ``residual`` is obtained minus expected, exact to rounding; NaN columns where the file
        has none.
    start : (6,)
        Position and velocity that the file, or its orbit file, declares.
    shared : bool
        Whether the start is the file's own first row: then what spoils the output spoils it too.
    fitted : bool
        Whether it was fitted to the rows.
    usable : (n,) bool
        Rows that may be explained: judged, finite.
    """

    result: CheckResult
    length: float
    time: float
    speed: float
    elapsed: Floats
    expected: Sample
    obtained: Sample
    residual: Sample
    start: Floats
    shared: bool
    fitted: bool
    usable: npt.NDArray[np.bool_]
    law: Law

    def __len__(self) -> int:
        return int(self.elapsed.size)

    @property
    def has_velocity(self) -> bool:
        return bool(np.isfinite(self.residual.velocity).any())

    @property
    def has_clock(self) -> bool:
        return bool(np.isfinite(self.residual.clock).any())

    @cached_property
    def revolutions(self) -> Floats:
        assert self.result.comparison is not None
        return self.result.comparison.revolutions

    def natural(self, kind: str) -> float:
        """A change of a parameter of some kind that would change the whole orbit."""
        r, v = (float(np.linalg.norm(s)) for s in (self.start[:3], self.start[3:]))
        scale = {
            "length": r, "time": r**1.5, "speed": v, "acceleration": r**-2, "rate": r**-1.5,
            "drag": 1 / r, "cube": r, "fourth": r * r,
        }.get(kind, 1.0)  # fmt: skip
        if kind.startswith("method "):
            scale = r ** float(kind.split()[1])
        return float(scale / (1.0 + float(self.revolutions.max())))

    @cached_property
    def coarse(self) -> bool:
        """Whether the file's digits, not arithmetic, are the floor of its positions."""
        comparison = self.result.comparison
        assert comparison is not None
        digits = float(np.median(comparison.position_guard.quantisation)) / self.length
        return digits / 3 > 0.5 * float(np.median(self.floor[0]))

    @cached_property
    def base(self) -> Sample:
        """The faultless flight, by the same arithmetic as the faulty ones."""
        return fly(self.law, self.start[:3], self.start[3:], self.elapsed)

    @cached_property
    def patience(self) -> int:
        """Steps after which a flight is given up: many times what the faultless one takes."""
        used = steps_of(self.law, self.start[:3], self.start[3:], self.elapsed)
        return min(3 * used + 1000, MOST_STEPS)

    @cached_property
    def transition(self) -> Floats:
        """``d state / d start`` at the rows, (n, 7, 6)."""
        return self.transition_at(self.elapsed)

    def transition_at(self, times: Floats) -> Floats:
        """``d state / d start``, (k, 7, 6), by central differences of flights."""
        columns = np.empty((times.size, 7, 6))
        for k in range(6):
            ends = []
            step = _MOVE * float(np.linalg.norm(self.start[:3] if k < 3 else self.start[3:]))
            for sign in (1.0, -1.0):
                moved = self.start.copy()
                moved[k] += sign * step
                ends.append(fly(self.law, moved[:3], moved[3:], times, self.patience))
            change = ends[0].minus(ends[1])
            columns[:, :, k] = np.column_stack([change.position, change.velocity, change.clock]) / (
                2 * step
            )
        return columns

    @cached_property
    def floor(self) -> tuple[Floats, Floats, Floats]:
        """Standard deviation of one component of position, velocity, clock, (n,) each.

        The guard's parts as uniform distributions, the rounding of float64 states, and what
        rounding at every step does along the orbit (Brouwer 1937: phase errors grow as t^3/2).
        """
        comparison = self.result.comparison
        assert comparison is not None
        sizes = np.repeat([np.linalg.norm(self.start[:3]), np.linalg.norm(self.start[3:])], 3)
        with np.errstate(invalid="ignore"):
            carried = _EPS * np.sqrt(np.sum((self.transition * sizes) ** 2, axis=2))
        carried = np.nan_to_num(carried, nan=np.inf) * np.sqrt(1.0 + self.revolutions)[:, None]
        found = []
        for guard, unit, values, spread in (
            (comparison.position_guard, self.length, self.expected.position, carried[:, :3]),
            (comparison.velocity_guard, self.speed, self.expected.velocity, carried[:, 3:6]),
            (
                comparison.clock_guard,
                self._clock_unit,
                self.expected.clock[:, None],
                carried[:, 6:],
            ),
        ):
            size = np.linalg.norm(values, axis=1)
            # a size that passes through zero is computed from numbers that do not
            least = 2 * _EPS * np.maximum(size, 1e-3 * np.nanmax(size, initial=0.0)) + 1e-300
            if guard is not None:
                digits = (guard.digits / 3 + guard.stamps + guard.carried + guard.bound) / unit
                least = np.hypot(least, digits)
            found.append(np.hypot(least, 0.3 * spread.max(axis=1)))
        return found[0], found[1], found[2]

    @property
    def _clock_unit(self) -> float:
        return self.length if self.law.light else self.time


def scene_of(result: CheckResult) -> Scene | None:
    """The scene of a check; None where nothing was compared."""
    trajectory, expected, comparison = result.trajectory, result.expected, result.comparison
    spec, orbit = result.spec, result.orbit
    if trajectory is None or expected is None or comparison is None:
        return None
    if spec is None or orbit is None or len(trajectory) < 3:
        return None
    length, time = length_in(spec.system, spec.gm), time_in(spec.system, spec.gm)
    speed = length / time
    light = spec.particle == "light"
    clock_unit = length if light else time
    n = len(trajectory)
    nothing = np.full(n, np.nan)
    second = (
        trajectory.affine
        if light
        else trajectory.coordinate_time
        if spec.clock == "proper"
        else trajectory.proper_time
    )
    velocity = np.full((n, 3), np.nan)
    velocity_error = velocity
    if trajectory.velocity is not None and expected.velocity is not None:
        velocity = trajectory.velocity / speed
        low = 0.0 if expected.velocity_low is None else expected.velocity_low
        velocity_error = ((trajectory.velocity - expected.velocity) - low) / speed
    error = comparison.clock_error
    wanted = expected.velocity if expected.velocity is not None else velocity * speed
    usable = np.isfinite(comparison.distance)
    if result.floor is not None and result.floor.predictable_until is not None:
        elapsed = np.abs(trajectory.time - spec.start_time)
        usable &= elapsed < abs(result.floor.predictable_until - spec.start_time)
    start_velocity = orbit.velocity_used if light else orbit.velocity
    return Scene(
        result=result, length=length, time=time, speed=speed,
        elapsed=(trajectory.time - spec.start_time) / time,
        expected=Sample(
            expected.position / length, wanted / speed,
            nothing if expected.clock is None else expected.clock / clock_unit,
        ),
        obtained=Sample(
            trajectory.position / length, velocity,
            nothing if second is None else second / clock_unit,
        ),
        residual=Sample(
            comparison.position_error / length, velocity_error,
            nothing if error is None else error / clock_unit,
        ),
        start=np.concatenate(
            [np.array(orbit.position) / length, np.array(start_velocity) / speed]
        ),
        shared=result.start_from == "first row",
        fitted=result.start_from == "fit",
        usable=usable,
        law=Law(spec.chart, light=light, proper=spec.clock == "proper"),
    )  # fmt: skip
