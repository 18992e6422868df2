"""The start that fits a whole trajectory best: for files without velocities or with few digits.

Gauss-Newton on the six numbers of the start with sensitivities from the exact solution, first
on a short arc, then on arcs four times as long until the file is covered: a poor first guess
of the velocity never has to explain many revolutions at once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.reference.states import EndReached
from truefall.validate.carry import exact_orbit, sensitivities, stamp_spread
from truefall.validate.errors import InputError
from truefall.validate.guess import kepler_guesses, polynomial_guesses

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
#: A step that leaves more than this share of the sum of squares is the last: of a guess (one that
#: converges slowly is not the one), and of the whole file.
_GUESS = 0.3
_WHOLE = 1 - 1e-6
_HALVINGS = 5
#: Relative error of a first arc that needs no better guess, and of a file that is no fit at all.
_GOOD = 1e-3
_FOLLOWS = 0.1
#: Relative error of a guess from which Gauss-Newton does not come back.
_HOPELESS = 1.5
#: Steps, relative to the start: near enough for a longer arc, and lost in float64.
_NEAR = 1e-7
_ROUNDING = 1e-14


def _residual(spec: OrbitSpec, times: Floats, position: Floats) -> Floats | None:
    try:
        orbit = exact_orbit(spec)
        states = orbit.at(times)
    except (InputError, EndReached):
        return None
    return (position - states.position) - states.position_low


def _moved(spec: OrbitSpec, start: Floats) -> OrbitSpec:
    return replace(
        spec, position=tuple(start[:3].tolist()), velocity=tuple(start[3:].tolist()), elements=None
    )


def _refine(
    spec: OrbitSpec,
    start: Floats,
    times: Floats,
    position: Floats,
    enough: float,
    slow: float,
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
        if length < enough or cost > slow * before:
            return start
    return start


def _step(spec: OrbitSpec, start: Floats, times: Floats, residual: Floats, size: Floats) -> Floats:
    """The Gauss-Newton step, in units of ``size``."""
    here = _moved(spec, start)
    columns = sensitivities(here, exact_orbit(here), times)[:, :3].reshape(-1, 6) * size
    known = np.isfinite(columns).all(axis=1)  # a moved start may plunge before the last row
    cut = _cut(spec)
    return np.asarray(
        np.linalg.lstsq(columns[known], residual.ravel()[known], rcond=cut)[0], dtype=np.float64
    )


def _cut(spec: OrbitSpec) -> float:
    """Singular values that count as zero.

    Of light the size of the direction means nothing: the pseudo-inverse leaves it alone.
    """
    return 1e-10 if spec.particle == "light" else 1e-14


def _openness(spec: OrbitSpec, trajectory: Trajectory, rows: npt.NDArray[np.intp]) -> Floats:
    """Change of the fitted start by half a unit of each fitted number, and by its own rounding.

    Returns
    -------
    (6, m) array
        The last six columns are half a unit of float64 of the start's own numbers.
    """
    quantum = trajectory.quantisation
    units = np.broadcast_to(quantum.position, trajectory.position.shape)[rows]
    times = trajectory.time[rows]
    orbit = exact_orbit(spec)
    units = units + stamp_spread(orbit, times, quantum.time).position[:, None]
    start = np.array([*orbit.position, *orbit.velocity])
    rounding = np.diag(np.spacing(np.abs(start)) / 2)
    if not (np.any(units) or quantum.time):
        return rounding
    size = np.repeat([np.linalg.norm(start[:3]), max(float(np.linalg.norm(start[3:])), 1e-30)], 3)
    columns = sensitivities(spec, orbit, times)[:, :3].reshape(-1, 6) * size
    known = np.isfinite(columns).all(axis=1)
    gain = np.linalg.pinv(columns[known], rcond=_cut(spec)) * size[:, None]
    return np.hstack([gain * units.ravel()[known], rounding])


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


def _best_of(
    spec: OrbitSpec, trajectory: Trajectory, velocities: Sequence[Floats], arc: int, tries: int
) -> tuple[Floats | None, float]:
    """The start that fits the first ``arc`` rows best, and its error relative to the radius.

    The guesses nearest to the rows are refined, ``tries`` of them.
    """
    times, position = trajectory.time[:arc], trajectory.position[:arc]
    scale = float(np.linalg.norm(position, axis=1).mean()) * np.sqrt(arc)
    ranked = []
    for velocity in velocities:
        start = np.concatenate([position[0], velocity])
        residual = _residual(_moved(spec, start), times, position)
        left = np.inf if residual is None else float(np.linalg.norm(residual)) / scale
        if left < _HOPELESS:
            ranked.append((left, start))
    ranked.sort(key=lambda pair: pair[0])
    best, error = None, np.inf
    for _, guess in ranked[:tries]:
        start = _refine(spec, guess, times, position, _NEAR, _GUESS)
        residual = _residual(_moved(spec, start), times, position)
        left = np.inf if residual is None else float(np.linalg.norm(residual)) / scale
        if left < error:
            best, error = start, left
        if error < _GOOD:
            break
    return best, error


def _first_start(spec: OrbitSpec, trajectory: Trajectory) -> Floats:
    """A start whose orbit follows the first rows."""
    arc = min(_FIRST_ARC, len(trajectory))
    if trajectory.velocity is not None:
        best, error = _best_of(spec, trajectory, [trajectory.velocity[0]], arc, 1)
    else:
        best, error = _best_of(spec, trajectory, polynomial_guesses(trajectory), arc, 2)
        if error > _GOOD and spec.particle == "massive":
            fan, _ = _best_of(spec, trajectory, kepler_guesses(trajectory), 4, 5)
            if fan is not None:
                other, left = _best_of(spec, trajectory, [fan[3:]], arc, 1)
                best, error = (other, left) if left < error else (best, error)
    if best is None or error > _FOLLOWS:
        raise InputError(
            "--fit: no start was found whose orbit follows the first rows; check the units and gm, "
            "or give a start (--orbit)",
            trajectory.path,
        )
    return best


def fit_start(spec: OrbitSpec, trajectory: Trajectory) -> tuple[OrbitSpec, Floats]:
    """The spec with the start, at the first row's time, that fits the positions best.

    Returns
    -------
    spec : OrbitSpec
    openness : (6, m)
        Change of that start by half a unit of each fitted number (see ``fitted_spread``).

    Raises
    ------
    InputError
        If there are fewer than four rows, no orbit near the file's first rows exists, or none
        was found that follows the file.
    """
    n = len(trajectory)
    if n < 4:
        raise InputError(f"--fit needs at least four rows, and the file has {n}", trajectory.path)
    spec = replace(spec, start_time=float(trajectory.time[0]))
    start = _first_start(spec, trajectory)
    arc, rows = min(_FIRST_ARC, n), np.arange(0)
    for _ in range(64):
        last = arc == n
        count = min(arc, _LAST_ROWS if last else _ROWS)
        rows = np.unique(np.linspace(0, arc - 1, count).astype(int))
        start = _refine(
            spec, start, trajectory.time[rows], trajectory.position[rows],
            _ROUNDING if last else _NEAR, _WHOLE if last else _GUESS,
        )  # fmt: skip
        if last:
            break
        arc = min(_ARC_GROWTH * arc, n)
    fitted = _moved(spec, start)
    residual = _residual(fitted, trajectory.time[rows], trajectory.position[rows])
    size = np.linalg.norm(trajectory.position[rows], axis=1)
    if residual is None or np.median(np.linalg.norm(residual, axis=1) / size) > _FOLLOWS:
        raise InputError(
            "--fit: no start was found whose orbit stays within 10 % of the rows; the file may "
            "have too few rows a revolution, other units or another gm; give a start (--orbit)",
            trajectory.path,
        )
    return fitted, _openness(fitted, trajectory, rows)
