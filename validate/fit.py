"""The start that fits a whole trajectory best: for files without velocities or with few digits.

Gauss-Newton on the six numbers of the start with sensitivities from the exact solution, first
on a short arc, then on arcs four times as long until the file is covered: a poor first guess
of the velocity never has to explain many revolutions at once.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.reference.states import EndReached
from truefall.validate.carry import sensitivities
from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.trajectory import Trajectory

__all__ = ["fit_start"]

Floats = npt.NDArray[np.float64]
_ROWS = 40
_FIRST_ARC = 8
_ITERATIONS = 12
_ARC_GROWTH = 4


def _first_velocity(trajectory: Trajectory) -> Floats:
    """Velocity of the first row: as given, or from a polynomial through the first rows."""
    if trajectory.velocity is not None:
        return np.array(trajectory.velocity[0])
    n = min(9, len(trajectory))
    t = trajectory.time[:n] - trajectory.time[0]
    scale = abs(t[-1])
    slopes = [
        np.polyfit(t / scale, trajectory.position[:n, k], n - 1)[-2] / scale for k in range(3)
    ]
    return np.array(slopes)


def _residual(spec: OrbitSpec, times: Floats, position: Floats) -> Floats | None:
    try:
        orbit = spec.orbit()
        states = orbit.at(times)
    except (InputError, EndReached):
        return None
    return (position - states.position) - states.position_low


def _moved(spec: OrbitSpec, start: Floats) -> OrbitSpec:
    return replace(
        spec, position=tuple(start[:3].tolist()), velocity=tuple(start[3:].tolist()), elements=None
    )


def _refine(spec: OrbitSpec, start: Floats, times: Floats, position: Floats) -> Floats:
    """Gauss-Newton with halved steps until the sum of squares stops falling."""
    residual = _residual(_moved(spec, start), times, position)
    if residual is None:
        raise InputError("--fit: the first guess of the start is no orbit that covers the file")
    cost = float(np.sum(residual**2))
    light = spec.particle == "light"
    size = np.repeat([np.linalg.norm(start[:3]), max(float(np.linalg.norm(start[3:])), 1e-30)], 3)
    for _ in range(_ITERATIONS):
        here = _moved(spec, start)
        columns = sensitivities(here, here.orbit(), times).reshape(-1, 6) * size
        known = np.isfinite(columns).all(axis=1)  # a moved start may plunge before the last row
        # light: the size of the direction means nothing, the pseudo-inverse leaves it alone
        step = np.linalg.lstsq(
            columns[known], residual.ravel()[known], rcond=1e-14 if not light else 1e-10
        )[0]
        for _ in range(12):
            trial = start + step * size
            new = _residual(_moved(spec, trial), times, position)
            if new is not None and float(np.sum(new**2)) < cost:
                break
            step = step / 2
        else:
            return start
        gained = cost - float(np.sum(new**2))
        start, residual, cost = trial, new, float(np.sum(new**2))
        if gained <= 1e-6 * cost:
            return start
    return start


def fit_start(spec: OrbitSpec, trajectory: Trajectory) -> OrbitSpec:
    """The spec with the start, at the first row's time, that fits the positions best.

    Raises
    ------
    InputError
        If there are fewer than four rows, or no orbit near the file's first rows exists.
    """
    n = len(trajectory)
    if n < 4:
        raise InputError(f"--fit needs at least four rows, and the file has {n}", trajectory.path)
    spec = replace(spec, start_time=float(trajectory.time[0]))
    start = np.concatenate([trajectory.position[0], _first_velocity(trajectory)])
    arc = min(_FIRST_ARC, n)
    for _ in range(64):
        rows = np.unique(np.linspace(0, arc - 1, min(arc, _ROWS)).astype(int))
        start = _refine(spec, start, trajectory.time[rows], trajectory.position[rows])
        if arc == n:
            break
        arc = min(_ARC_GROWTH * arc, n)
    return _moved(spec, start)
