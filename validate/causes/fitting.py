"""Weighted least squares of a plan's parameters against a trajectory."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.fault import Fault
from truefall.validate.causes.plan import Flyer, first_plan, predicted
from truefall.validate.causes.scene import Scene

__all__ = ["Fit", "Problem", "columns_of", "fit", "glance", "numbers_of"]

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]

_ITERATIONS = 8
_LEAST_ROWS = 12
#: A residual beyond this share of the radius is too far for one linear step.
_FAR = 0.03
#: Of a row that a plan does not reach, this multiple of its residual is counted.
_UNREACHED = 2.0
_GAIN = 1e-3
#: Larger numbers are none: their squares must not overflow.
_HUGE = 1e140


class Problem:
    """Residuals of some rows in units of their floor, for any faults together.

    Velocities and second clocks count where the file has them.
    """

    def __init__(self, scene: Scene, rows: Rows, flyer: Flyer | None = None) -> None:
        self.scene, self.rows, self.flyer = scene, rows, flyer
        self.floor = [f[rows] for f in scene.floor]
        self.zero = self._stack(
            scene.residual.position[rows], scene.residual.velocity[rows], scene.residual.clock[rows]
        )
        self.count = self.zero.size
        self.cost = float(self.zero @ self.zero)

    def part(self, count: int) -> Problem:
        """The same for the rows nearest to the start."""
        near = np.argsort(np.abs(self.scene.elapsed[self.rows]), kind="stable")[:count]
        return Problem(self.scene, np.sort(self.rows[near]), self.flyer)

    def _stack(self, position: Floats, velocity: Floats, clock: Floats) -> Floats:
        parts = [(position / self.floor[0][:, None]).ravel()]
        if self.scene.has_velocity:
            parts.append((velocity / self.floor[1][:, None]).ravel())
        if self.scene.has_clock:
            parts.append(clock / self.floor[2])
        return np.concatenate(parts)

    def changes(self, faults: Sequence[Fault], numbers: Floats) -> tuple[Floats, Floats, Floats]:
        """What the faults do to position, velocity and clock of the rows."""
        plan, used = first_plan(self.scene), 0
        for fault in faults:
            share = numbers[used : used + len(fault.parameters)]
            plan = fault.apply(plan, self.scene, tuple(share.tolist()))
            used += share.size
        sample = predicted(self.scene, plan, self.rows, self.flyer)
        known = self.scene.expected
        return (
            sample.position - known.position[self.rows],
            sample.velocity - known.velocity[self.rows],
            sample.clock - known.clock[self.rows],
        )

    def remainder(self, faults: Sequence[Fault], numbers: Floats) -> Floats:
        """What is left of the stacked residual; rows not reached count double."""
        with np.errstate(over="ignore", invalid="ignore"):
            left = self.zero - self._stack(*self.changes(faults, numbers))
        return np.where(np.abs(left) < _HUGE, left, _UNREACHED * self.zero)


@dataclass(frozen=True)
class Fit:
    """``numbers`` of all faults in turn, ``covariance`` in units of the floor, ``cost`` left."""

    faults: tuple[Fault, ...]
    numbers: Floats
    covariance: Floats
    cost: float
    left: Floats


def _jacobian(
    problem: Problem, faults: Sequence[Fault], numbers: Floats, left: Floats, first: int = 0
) -> Floats:
    """Derivatives of what is left by the numbers from ``first`` on."""
    scene = problem.scene
    steps = [p.step * scene.natural(p.kind) for f in faults for p in f.parameters]
    columns = np.empty((left.size, len(steps) - first))
    for k, step in enumerate(steps):
        if k < first:
            continue
        moved = numbers.copy()
        step = max(step, 1e-7 * abs(moved[k]))
        moved[k] += step
        columns[:, k - first] = (problem.remainder(faults, moved) - left) / step
    return np.clip(columns, -_HUGE, _HUGE)


def _covariance(columns: Floats) -> Floats:
    if not columns.shape[1]:
        return np.zeros((0, 0))
    size = np.linalg.norm(columns, axis=0)
    size = np.where(size > 0, size, 1.0)
    inverse = np.linalg.pinv(columns / size, rcond=1e-11)
    return np.asarray(inverse @ inverse.T / np.outer(size, size))


def _descend(
    problem: Problem, faults: Sequence[Fault], numbers: Floats, iterations: int
) -> tuple[Floats, Floats, Floats]:
    """Gauss-Newton with halved steps: numbers, what is left, the last Jacobian."""
    left = problem.remainder(faults, numbers)
    columns = np.zeros((left.size, numbers.size))
    for _ in range(iterations if numbers.size else 0):
        columns = _jacobian(problem, faults, numbers, left)
        size = np.linalg.norm(columns, axis=0)
        if not np.all(np.isfinite(size)) or not size.any():
            break
        size = np.where(size > 0, size, 1.0)
        step = np.linalg.lstsq(columns / size, -left, rcond=1e-11)[0] / size
        cost = float(left @ left)
        for _ in range(5):
            trial = problem.remainder(faults, numbers + step)
            if float(trial @ trial) < cost:
                break
            step = step / 3
        else:
            break
        numbers, left = numbers + step, trial
        gained = cost - float(left @ left)
        if gained < _GAIN * cost:
            break
    return numbers, left, columns


def _arcs(problem: Problem, k: int) -> list[int]:
    """Numbers of rows, nearest to the start first, on which to fit in turn."""
    scene, rows = problem.scene, problem.rows
    share = np.linalg.norm(scene.residual.position[rows], axis=1)
    share = share / np.linalg.norm(scene.expected.position[rows], axis=1)
    if k == 0 or not share.max() > _FAR:
        return [rows.size]
    order = np.argsort(np.abs(scene.elapsed[rows]), kind="stable")
    near = int(np.argmax(np.maximum.accumulate(share[order]) > _FAR))
    count = min(max(near, _LEAST_ROWS), rows.size)
    arcs = []
    while count < rows.size:
        arcs.append(count)
        count *= 3
    return [*arcs, rows.size]


def columns_of(problem: Problem, found: Fit) -> Floats:
    """What the numbers of a fit do to the residual."""
    return _jacobian(problem, found.faults, found.numbers, found.left)


def glance(
    problem: Problem, faults: Sequence[Fault], known: Floats | None = None,
    columns_known: Floats | None = None,
) -> float:  # fmt: skip
    """The cost that faults leave as far as one linear step tells; cheap.

    ``known`` holds numbers already fitted of all faults but the last, ``columns_known`` what
    those do to the residual.
    """
    last = faults[-1]
    k = len(last.parameters)
    before = np.zeros(0) if known is None else known
    best = np.inf
    for own in [np.zeros(k), *(np.array(g) for g in last.guesses(problem.scene))]:
        guess = np.concatenate([before, own])
        try:
            left = problem.remainder(faults, guess)
            best = min(best, float(left @ left))
            columns = _jacobian(problem, faults, guess, left, before.size)
        except (ValueError, ArithmeticError):
            continue
        if columns_known is not None:
            columns = np.hstack([columns_known, columns])
        if columns.shape[1]:
            size = np.linalg.norm(columns, axis=0)
            size = np.where(np.isfinite(size) & (size > 0), size, 1.0)
            scaled = np.nan_to_num(columns / size)
            step = np.linalg.lstsq(scaled, -left, rcond=1e-11)[0]
            rest = left + scaled @ step
            best = min(best, float(rest @ rest))
    return best


def fit(
    problem: Problem, faults: Sequence[Fault], *, numbers: Floats | None = None,
    iterations: int = _ITERATIONS,
) -> Fit | None:  # fmt: skip
    """The numbers that explain most; None where the faults make no sense together.

    A residual as large as the orbit is fitted on short arcs first.
    """
    k = sum(len(f.parameters) for f in faults)
    best: Fit | None = None
    if numbers is not None:
        guesses = [numbers]
    else:
        guesses = [np.zeros(k)]
        options = [tuple(f.guesses(problem.scene)) for f in faults]
        if len(faults) == 1:
            guesses += [np.array(g, dtype=np.float64) for g in options[0]]
    for guess in guesses:
        try:
            start, arcs = guess, _arcs(problem, k) if numbers is None else [problem.rows.size]
            for count in arcs:
                whole = count == problem.rows.size
                part = problem if whole else problem.part(count)
                start, left, columns = _descend(part, faults, start, iterations)
        except (ValueError, ArithmeticError):
            continue
        cost = float(left @ left)
        if best is None or cost < best.cost:
            best = Fit(tuple(faults), start, _covariance(columns), cost, left)
    return best


def numbers_of(fit_: Fit) -> list[tuple[Floats, Floats]]:
    """Numbers and variances of each fault of a fit in turn."""
    cuts = reduce(lambda a, f: [*a, a[-1] + len(f.parameters)], fit_.faults, [0])
    variance = np.diag(fit_.covariance) if fit_.covariance.size else np.zeros(0)
    return [(fit_.numbers[a:b], variance[a:b]) for a, b in pairwise(cuts)]
