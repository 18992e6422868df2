"""From a comparison and a budget to judgements, and the floor under them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from truefall.validate.budget import Budget, Judgement, judge
from truefall.validate.compare import Comparison, Guard
from truefall.validate.drift import Drift
from truefall.validate.errors import InputError

__all__ = [
    "Floor",
    "floor_of",
    "judgements_of",
    "margins_of",
    "position_tolerance",
    "tightest",
    "whole_file",
]

Floats = npt.NDArray[np.float64]
_DEFAULT_SHARE = 0.01  # of r, for predictable_until without a position budget


@dataclass(frozen=True)
class Floor:
    """Below which nothing can be said about positions.

    ``position`` is the largest guard among the rows that are judged, ``source`` what most of
    it comes from, ``predictable_until`` the time up to which the start's digits determine the
    orbit (None: throughout).
    """

    position: float
    source: str
    predictable_until: float | None


def position_tolerance(comparison: Comparison, budget: Budget, radius: Floats) -> Floats:
    """The tightest position tolerance at each row, (n,); 1 % of ``radius`` without a budget."""
    return tightest(budget, comparison.revolutions, radius)


def tightest(budget: Budget, revolutions: Floats, radius: Floats) -> Floats:
    """The tightest position tolerance after so many revolutions, (n,), or 1 % of ``radius``."""
    limit = np.full(radius.size, np.inf)
    if "position" in budget.absolute:
        limit = np.full(radius.size, budget.absolute["position"])
    if "position" in budget.per_revolution:
        growing = budget.per_revolution["position"] * np.maximum(revolutions, 1.0)
        limit = np.minimum(limit, growing)
    return np.where(np.isfinite(limit), limit, _DEFAULT_SHARE * radius)


def floor_of(comparison: Comparison, limit: Floats) -> tuple[Floor, npt.NDArray[np.bool_]]:
    """The floor, and which rows may be judged, (n,) bool.

    Parameters
    ----------
    limit : (n,)
        From :func:`position_tolerance`: rows from where the carried quantisation of the start
        exceeds it are not judged.
    """
    guard = comparison.position_guard
    beyond = np.logical_or.accumulate(guard.carried > limit)
    judged = ~beyond
    until = None
    if beyond.any():
        until = _crossing(comparison.time, guard.carried / limit, int(np.argmax(beyond)))
    shown = np.where(judged, guard.total, -1.0) if judged.any() else guard.total
    row = int(np.argmax(shown))
    return Floor(float(guard.total[row]), guard.source(row), until), judged


def _crossing(time: Floats, ratio: Floats, row: int) -> float:
    """When the ratio passes 1 between the row before and ``row``, linear in its logarithm."""
    if row == 0 or ratio[row - 1] <= 0:
        return float(time[row])
    low, high = np.log(ratio[row - 1]), np.log(ratio[row])
    return float(time[row - 1] + (time[row] - time[row - 1]) * (-low / (high - low)))


def _of_drift(drift: Drift | None) -> tuple[Floats, Guard] | None:
    if drift is None:
        return None
    zero = np.zeros(drift.values.size)
    return np.abs(drift.values), Guard(zero, drift.guard, zero, zero, zero)


def _series(comparison: Comparison) -> dict[str, tuple[Floats, Guard] | None]:
    """Deviation and guard of each quantity; None where the file says nothing about it."""
    c = comparison
    velocity = clock = None
    if c.velocity_error is not None and c.velocity_guard is not None:
        velocity = (c.velocity_error, c.velocity_guard)
    if c.clock_error is not None and c.clock_guard is not None:
        clock = (np.abs(c.clock_error), c.clock_guard)
    return {
        "position": (c.distance, c.position_guard),
        "velocity": velocity,
        "clock": clock,
        "energy": _of_drift(c.drifts.energy),
        "angular_momentum": _of_drift(c.drifts.angular_momentum),
    }


def judgements_of(
    comparison: Comparison,
    budget: Budget,
    judged: npt.NDArray[np.bool_],
    where: str,
    light: bool,
) -> list[Judgement]:
    """One judgement for each tolerance of the budget.

    Raises
    ------
    InputError
        If the file has nothing by which a tolerance could be judged.
    """
    series = _series(comparison)
    found = []
    for quantity, tolerance in budget.absolute.items():
        limit = np.full(judged.size, tolerance)
        found.append(_one(comparison, quantity, limit, series, judged, where, light))
    for quantity, tolerance in budget.per_revolution.items():
        limit = tolerance * np.maximum(comparison.revolutions, 1.0)
        judgement = _one(comparison, quantity, limit, series, judged, where, light)
        found.append(replace(judgement, quantity=f"per_revolution.{quantity}"))
    return found


def whole_file(
    judgements: Sequence[Judgement],
    rough: Sequence[Judgement],
    proven: Sequence[Judgement],
    counts: npt.NDArray[np.int64],
    rows: npt.NDArray[np.int64],
    certified: npt.NDArray[np.int64],
    total: int,
) -> list[Judgement]:
    """Judgements of some rows of a long file, told of all its rows.

    Parameters
    ----------
    judgements, rough : sequence of Judgement
        Of the rows in memory, by exact and by table values.
    proven : sequence of Judgement
        Of the rows with exact values alone, ``rows[certified]`` in the file: where they have the
        outcome of the whole, the worst of them is the row that is reported.
    counts : (m, 3)
        All rows by their outcome against the table: pass, open, fail; those not judged left out.
    rows : (k,)
        Numbers in the file of the rows in memory.
    total : int
        Rows compared.
    """
    found = []
    for exact, table, proof, (passes, open_, fails) in zip(
        judgements, rough, proven, counts.tolist(), strict=True
    ):
        unjudged = total - passes - open_ - fails
        # rows in memory count by their exact outcome, all others by the table's
        undecided = exact.undecided_rows - exact.unjudged_rows
        undecided += max(0, open_ - (table.undecided_rows - table.unjudged_rows))
        failing = exact.failing_rows + max(0, fails - table.failing_rows)
        settled = undecided == 0 and unjudged == 0
        outcome = "fail" if failing else "pass" if settled else "undecided"
        shown, row = exact, int(rows[exact.row])
        if proof.outcome == outcome:
            shown, row = proof, int(rows[certified[proof.row]])
        found.append(
            replace(
                shown, outcome=outcome, row=row,
                undecided_rows=undecided + unjudged, failing_rows=failing,
                unjudged_rows=unjudged,
            )
        )  # fmt: skip
    return found


def margins_of(comparison: Comparison, budget: Budget) -> list[tuple[Floats, Floats]]:
    """Distance from each tolerance that the file has columns for, and the guard, (n,) each."""
    series = _series(comparison)
    growing = np.maximum(comparison.revolutions, 1.0)
    limits = [(q, np.full(growing.size, t)) for q, t in budget.absolute.items()]
    limits += [(q, t * growing) for q, t in budget.per_revolution.items()]
    found = []
    for quantity, limit in limits:
        pair = series[quantity]
        if pair is not None:
            found.append((limit - pair[0], pair[1].total))
    return found


def _one(
    comparison: Comparison,
    quantity: str,
    limit: Floats,
    series: Mapping[str, tuple[Floats, Guard] | None],
    judged: npt.NDArray[np.bool_],
    where: str,
    light: bool,
) -> Judgement:
    pair = series[quantity]
    if pair is None:
        if light and quantity == "energy":
            raise InputError(
                "there is a budget for energy, but light has E = 1 by the scaling of its affine "
                "parameter; drop that budget, angular_momentum (L/E) says what energy would",
                where,
            )
        needed = "second clock (proper_time; affine for light; coordinate_time on the proper clock)"
        if quantity != "clock":
            needed = "velocities (vx, vy, vz)"
        raise InputError(
            f"there is a budget for {quantity}, but the file has no {needed} to judge it by; add "
            "the columns or drop that budget",
            where,
        )
    return judge(quantity, limit, *pair, comparison.time, judged)
