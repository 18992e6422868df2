"""What the digits of a start leave open about the orbit later on.

The quantisation of the start is carried along the exact orbit by the state-transition matrix,
here by differences of exact orbits whose starts are moved by 2^-40 of their size.  Six orbits
at a few dozen times cost less than a second; between those times the floor is interpolated.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.orbit_file import OrbitSpec

__all__ = ["carried_floor", "sensitivities"]

Floats = npt.NDArray[np.float64]
_TIMES = 64
_STEP = 2.0**-40


def sensitivities(
    spec: OrbitSpec, orbit: Orbit, times: Floats, *, velocity_too: bool = True
) -> Floats:
    """``d position(t) / d start``, (n, 3, 6): columns position, then velocity.

    Raises
    ------
    InputError
        If a moved start is no orbit.
    """
    position, velocity = np.array(orbit.position), np.array(orbit.velocity)
    base = orbit.at(times)
    columns = np.zeros((times.size, 3, 6))
    for k in range(6):
        if k >= 3 and not velocity_too:
            break
        vector = position if k < 3 else velocity
        moved = vector.copy()
        moved[k % 3] += _STEP * np.linalg.norm(vector)
        step = moved[k % 3] - vector[k % 3]
        if step == 0.0:  # a start at rest
            step = _STEP
            moved[k % 3] = step
        start = (moved, velocity) if k < 3 else (position, moved)
        other = replace(
            spec,
            position=tuple(start[0].tolist()),
            velocity=tuple(start[1].tolist()),
            elements=None,
        ).orbit()
        inside = other.reachable(times)
        states = other.at(times[inside])
        difference = (states.position - base.position[inside]) + (
            states.position_low - base.position_low[inside]
        )
        columns[inside, :, k] = difference / step
        columns[~inside, :, k] = np.inf
    return columns


def carried_floor(spec: OrbitSpec, orbit: Orbit, times: Floats, quantum: Floats) -> Floats:
    """Bound (first order) on the position error that the start's digits can cause, (n,).

    Parameters
    ----------
    quantum : (6,)
        Half units of the last digits of the start's position and velocity.
    """
    if not np.any(quantum):
        return np.zeros(times.size)
    elapsed = np.abs(times - spec.start_time)
    order = np.argsort(elapsed)
    picks = np.unique(np.linspace(0, times.size - 1, min(_TIMES, times.size)).astype(int))
    chosen = order[picks]
    columns = sensitivities(spec, orbit, times[chosen])
    floor = np.sum(np.linalg.norm(columns, axis=1) * quantum, axis=1)
    # the worst so far: an orbit does not forget
    floor = np.maximum.accumulate(floor)
    with np.errstate(divide="ignore"):
        logs = np.log(np.maximum(floor, 1e-300))
    result: Floats = np.exp(np.interp(elapsed, elapsed[chosen], logs))
    return result
