"""What the digits of a file leave open: of its start, carried along the orbit, and of its stamps.

Both are found by differences of exact orbits.  A start is moved by half a unit of its last
digit, component by component, and the moved orbits are followed in the place of a linearised
transition matrix: so the spread saturates at the size of the orbit where it grows
exponentially, instead of overflowing, and stays visible however small the half unit is.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.reference import Orbit, States
    from truefall.validate.orbit_file import OrbitSpec

__all__ = [
    "Spread",
    "carried_spread",
    "end_spread",
    "exact_orbit",
    "fitted_spread",
    "move_start",
    "second_clock",
    "sensitivities",
    "stamp_spread",
]

Floats = npt.NDArray[np.float64]
_TIMES = 64
_FITTED_TIMES = 512
#: Relative step of derivatives: far above float64's 2^-53, far below what is nonlinear.
_STEP = 2.0**-40
#: Smallest move of a start component, in units in its last place; smaller half units scale it.
_ULPS = 4.0
#: Stands for "anywhere" in place of infinity, so that JSON can hold it.
_ANYWHERE = 1e300


@dataclass(frozen=True)
class Spread:
    """How far position, velocity and second clock may lie from the expected ones, (n,) each."""

    position: Floats
    velocity: Floats
    clock: Floats

    @classmethod
    def none(cls, n: int) -> Spread:
        """Nothing is left open."""
        return cls(np.zeros(n), np.zeros(n), np.zeros(n))


def second_clock(states: States) -> tuple[Floats, Floats, Floats]:
    """Value, second word and bound of what a trajectory is compared in as ``clock``.

    Chart time on the proper clock, the affine parameter for light, proper time else.
    """
    for name in ("coordinate_time", "affine", "proper_time"):
        value = getattr(states, name)
        if value is not None:
            return value, getattr(states, f"{name}_low"), getattr(states, f"{name}_bound")
    raise ValueError("these states carry no second clock")


def _difference(a: States, b: States) -> tuple[Floats, Floats, Floats]:
    """``a - b`` in position (n, 3), velocity (n, 3) and second clock (n,), both words."""
    clock_a, clock_b = second_clock(a), second_clock(b)
    return (
        (a.position - b.position) + (a.position_low - b.position_low),
        (a.velocity - b.velocity) + (a.velocity_low - b.velocity_low),
        (clock_a[0] - clock_b[0]) + (clock_a[1] - clock_b[1]),
    )


@lru_cache(maxsize=24)
def _built(*start: Any) -> Orbit:
    """An orbit by all that defines it; building one costs far more than a few of its states."""
    from truefall.reference import Orbit

    system, gm, particle, chart, clock, time, position, velocity = start
    return Orbit(
        system=system, gm=gm, particle=particle, chart=chart, clock=clock, start_time=time,
        position=position, velocity=velocity,
    )  # fmt: skip


def exact_orbit(spec: OrbitSpec) -> Orbit:
    """``spec.orbit()``, remembered for the starts that a fit and its spread come back to.

    Raises
    ------
    InputError
        If the start is no orbit.
    """
    from truefall.reference import StartError

    if spec.elements is not None or spec.position is None or spec.velocity is None:
        return spec.orbit()
    try:
        return _built(
            spec.system, spec.gm, spec.particle, spec.chart, spec.clock, spec.start_time,
            spec.position, spec.velocity,
        )  # fmt: skip
    except StartError:
        return spec.orbit()  # which words the refusal


def move_start(spec: OrbitSpec, orbit: Orbit, component: int, step: float) -> tuple[Orbit, float]:
    """The orbit whose start differs in one of six components, and by how much exactly.

    Raises
    ------
    InputError
        If the moved start is no orbit.
    """
    start = [list(orbit.position), list(orbit.velocity)]
    vector = start[component // 3]
    before = vector[component % 3]
    vector[component % 3] = before + step
    moved = replace(spec, position=tuple(start[0]), velocity=tuple(start[1]), elements=None)
    return exact_orbit(moved), vector[component % 3] - before


def sensitivities(spec: OrbitSpec, orbit: Orbit, times: Floats) -> Floats:
    """``d state(t) / d start``, (n, 7, 6).

    Rows: position (3), velocity (3), second clock; columns: the start's position, velocity.
    NaN where a moved orbit ends before.

    Raises
    ------
    InputError
        If a moved start is no orbit.
    """
    sizes = [float(np.linalg.norm(v)) for v in (orbit.position, orbit.velocity)]
    if spec.elements is not None:  # whose state is not exactly a float64 one
        orbit, _ = move_start(spec, orbit, 0, 0.0)
    base = orbit.at(times)
    columns = np.full((times.size, 7, 6), np.nan)
    for k in range(6):
        other, step = move_start(spec, orbit, k, _STEP * (sizes[k // 3] or sizes[0]))
        inside = other.reachable(times)
        if inside.any():
            here = base if inside.all() else orbit.at(times[inside])
            position, velocity, clock = _difference(other.at(times[inside]), here)
            columns[inside, :, k] = np.column_stack([position, velocity, clock]) / step
    return columns


def _component_spread(
    spec: OrbitSpec, orbit: Orbit, base: States, component: int, quantum: float
) -> Floats:
    """Size of the change in position, velocity, clock, (3, n), by one half unit of the start."""
    value = (*orbit.position, *orbit.velocity)[component]
    step = max(quantum, _ULPS * float(np.spacing(abs(value))))
    found = np.full((3, base.time.size), _ANYWHERE)
    try:
        other, step = move_start(spec, orbit, component, step)
    except InputError:  # the digits do not even tell whether there is an orbit
        return found
    inside = other.reachable(base.time)
    if inside.any():
        here = base if inside.all() else orbit.at(base.time[inside])
        position, velocity, clock = _difference(other.at(base.time[inside]), here)
        share = min(1.0, quantum / abs(step))
        found[0, inside] = share * np.linalg.norm(position, axis=1)
        found[1, inside] = share * np.linalg.norm(velocity, axis=1)
        found[2, inside] = share * np.abs(clock)
    return found


def carried_spread(spec: OrbitSpec, orbit: Orbit, times: Floats, quantum: Floats) -> Spread:
    """What the start's digits leave open about the states at ``times``, all on one side of it.

    Parameters
    ----------
    times : (n,)
    quantum : (6,)
        Half units of the last digits of the start's position and velocity.

    Notes
    -----
    At most 64 of the times are followed; between them the largest spread so far (an orbit
    does not forget) is interpolated linearly, which is too much where it grows exponentially
    and never much too little.
    """
    if not np.any(quantum):
        return Spread.none(times.size)
    elapsed = np.abs(times - spec.start_time)
    order = np.argsort(elapsed)
    picks = np.unique(np.linspace(0, times.size - 1, min(_TIMES, times.size)).astype(int))
    chosen = order[picks]
    base = orbit.at(times[chosen])
    total = np.zeros((3, chosen.size))
    for k in np.flatnonzero(quantum):
        total += _component_spread(spec, orbit, base, int(k), float(quantum[k]))
    worst = np.minimum(np.maximum.accumulate(total, axis=1), _ANYWHERE)
    return Spread(*(np.interp(elapsed, elapsed[chosen], row) for row in worst))


def fitted_spread(spec: OrbitSpec, orbit: Orbit, times: Floats, openness: Floats) -> Spread:
    """What the digits of the fitted rows leave open about the states at ``times``.

    Parameters
    ----------
    openness : (6, m)
        Change of the fitted start by one half unit of each of the ``m`` numbers fitted; they
        count as if all were wrong in the worst way.

    Notes
    -----
    At most 512 of the times are followed; between them the larger neighbour counts.
    """
    if not np.any(openness):
        return Spread.none(times.size)
    picks = np.unique(np.linspace(0, times.size - 1, min(_FITTED_TIMES, times.size)).astype(int))
    changes = sensitivities(spec, orbit, times[picks]) @ openness
    sizes = np.nan_to_num(np.abs(changes).sum(axis=2), nan=_ANYWHERE)
    rows = [np.linalg.norm(sizes[:, :3], axis=1), np.linalg.norm(sizes[:, 3:6], axis=1)]
    right = np.searchsorted(picks, np.arange(times.size))
    left = np.maximum(right - (picks[right] > np.arange(times.size)), 0)
    return Spread(*(np.maximum(row[left], row[right]) for row in [*rows, sizes[:, 6]]))


def stamp_spread(orbit: Orbit, times: Floats, quantum: float) -> Spread:
    """What half a unit of the time stamps' last digit does to the states: ``|v| q_t`` and so on.

    By the exact orbit at moved stamps; a stamp next to the orbit's end is moved the other way.
    """
    if quantum <= 0:
        return Spread.none(times.size)
    step = np.maximum(quantum, _ULPS * np.spacing(np.abs(times)))
    moved = times + step
    moved = np.where(orbit.reachable(moved), moved, times - step)
    usable = orbit.reachable(moved)
    found = np.full((3, times.size), _ANYWHERE)
    if usable.any():
        position, velocity, clock = _difference(orbit.at(moved[usable]), orbit.at(times[usable]))
        share = quantum / np.abs(moved[usable] - times[usable])
        found[0, usable] = share * np.linalg.norm(position, axis=1)
        found[1, usable] = share * np.linalg.norm(velocity, axis=1)
        found[2, usable] = share * np.abs(clock)
    return Spread(*found)


def end_spread(spec: OrbitSpec, orbit: Orbit, quantum: Floats, after: bool) -> float:
    """How far the end of the orbit may lie from where it is expected, as a time."""
    end = orbit.ends_after if after else orbit.ends_before
    if end is None or not np.any(quantum):
        return 0.0
    total = 0.0
    for k in np.flatnonzero(quantum):
        try:
            other, _ = move_start(spec, orbit, int(k), float(quantum[k]))
        except InputError:
            return np.inf
        moved = other.ends_after if after else other.ends_before
        if moved is None:
            return np.inf
        total += abs(moved.time - end.time)
    return total
