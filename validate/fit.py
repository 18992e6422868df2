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
#: Rows used of a first arc, and of the whole file.
_ROWS = 40
_LAST_ROWS = 200
_FIRST_ARC = 8
_ITERATIONS = 12
_ARC_GROWTH = 4
_HALVINGS = 12
#: Steps, relative to the start: near enough for a longer arc, and lost in float64.
_NEAR = 1e-7
_ROUNDING = 1e-14


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


def _refine(
    spec: OrbitSpec, start: Floats, times: Floats, position: Floats, enough: float
) -> Floats:
    """Gauss-Newton with halved steps, until a step is shorter than ``enough`` or gains nothing.

    Steps are measured in the size of position and velocity.
    """
    residual = _residual(_moved(spec, start), times, position)
    if residual is None:
        raise InputError(
            "--fit: the first rows give no start whose orbit covers the file; check the units and "
            "gm, or give a start (--orbit)",
            spec.path,
        )
    cost = float(np.sum(residual**2))
    size = np.repeat([np.linalg.norm(start[:3]), max(float(np.linalg.norm(start[3:])), 1e-30)], 3)
    for _ in range(_ITERATIONS):
        step = _step(spec, start, times, residual, size)
        length = float(np.abs(step).max())
        found = _improve(spec, start, step * size, times, position, cost, length < _ROUNDING)
        if found is None:
            return start
        start, residual = found
        before, cost = cost, float(np.sum(residual**2))
        if length < enough or before - cost <= 1e-6 * cost:
            return start
    return start


def _step(spec: OrbitSpec, start: Floats, times: Floats, residual: Floats, size: Floats) -> Floats:
    """The Gauss-Newton step, in units of ``size``."""
    here = _moved(spec, start)
    columns = sensitivities(here, here.orbit(), times).reshape(-1, 6) * size
    known = np.isfinite(columns).all(axis=1)  # a moved start may plunge before the last row
    # light: the size of the direction means nothing, the pseudo-inverse leaves it alone
    cut = 1e-10 if spec.particle == "light" else 1e-14
    step: Floats = np.linalg.lstsq(columns[known], residual.ravel()[known], rcond=cut)[0]
    return step


def _improve(
    spec: OrbitSpec,
    start: Floats,
    step: Floats,
    times: Floats,
    position: Floats,
    cost: float,
    once: bool,
) -> tuple[Floats, Floats] | None:
    """A start with a smaller sum of squares, and its residual; the step is halved until then."""
    for _ in range(1 if once else _HALVINGS):
        trial = start + step
        residual = _residual(_moved(spec, trial), times, position)
        if residual is not None and float(np.sum(residual**2)) < cost:
            return trial, residual
        step = step / 2
    return None


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
        last = arc == n
        count = min(arc, _LAST_ROWS if last else _ROWS)
        rows = np.unique(np.linspace(0, arc - 1, count).astype(int))
        start = _refine(
            spec, start, trajectory.time[rows], trajectory.position[rows],
            _ROUNDING if last else _NEAR,
        )  # fmt: skip
        if last:
            break
        arc = min(_ARC_GROWTH * arc, n)
    return _moved(spec, start)
