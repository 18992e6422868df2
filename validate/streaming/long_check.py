"""What a long file is held against, and which of its rows are then judged like a short one's."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.validate.budget import parse_budget
from truefall.validate.carry import exact_orbit
from truefall.validate.check import (
    CheckResult,
    beyond_end,
    compared,
    exact_expected,
    radius_of,
    verdict_of,
)
from truefall.validate.compare import picked
from truefall.validate.growth import growth_of
from truefall.validate.judging import (
    floor_of,
    judgements_of,
    margins_of,
    position_tolerance,
    whole_file,
)
from truefall.validate.screening import decisive_rows, replaced, table_of, tabled_expected
from truefall.validate.streaming.plan import plan_of
from truefall.validate.streaming.rows import Block, Rows, as_trajectory
from truefall.validate.streaming.screen import Plan, Screened, screen
from truefall.validate.streaming.totals import Totals

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.reference.table import Table
    from truefall.validate.budget import Budget
    from truefall.validate.compare import Comparison, Expected
    from truefall.validate.drift import Drift
    from truefall.validate.starts import Start
    from truefall.validate.trajectory import Trajectory

__all__ = ["check_rows", "reachable_rows"]

Floats = npt.NDArray[np.float64]

_RANDOM = 16


def time_at(rows: Rows, row: int) -> float:
    """The time stamp of one row."""
    return float(rows.block(row, row + 1).values["time"][0])


def reachable_rows(rows: Rows, orbit: Orbit) -> tuple[int, int]:
    """The rows that the orbit reaches, first and last (excluded), by bisection of the stamps."""
    count = rows.head.count
    if orbit.ends_before is None and orbit.ends_after is None:
        return 0, count

    def inside(row: int) -> bool:
        return bool(orbit.reachable(np.array([time_at(rows, row)]))[0])

    # the rows that are reached are consecutive: find one of them, then both edges
    known = next((r for r in (0, count - 1) if inside(r)), None)
    if known is None:
        known = _nearest(rows, orbit.start_time)
        if not inside(known):
            return 0, 0
    first, low = known, -1
    while first - low > 1:
        middle = (first + low) // 2
        first, low = (middle, low) if inside(middle) else (first, middle)
    last, high = known, count
    while high - last > 1:
        middle = (last + high) // 2
        last, high = (middle, high) if inside(middle) else (last, middle)
    return first, last + 1


def _nearest(rows: Rows, time: float) -> int:
    """The row whose stamp is nearest to a time, by bisection."""
    low, high = 0, rows.head.count - 1
    rising = time_at(rows, high) > time_at(rows, low)
    while high - low > 1:
        middle = (low + high) // 2
        if (time_at(rows, middle) <= time) == rising:
            low = middle
        else:
            high = middle
    return min((low, high), key=lambda row: abs(time_at(rows, row) - time))


def screen_rows(
    rows: Rows, start: Start, orbit: Orbit, table: Table, budget: Budget, first: int, last: int,
    **how: int,
) -> tuple[Screened, Plan]:  # fmt: skip
    """Screen rows ``first`` to ``last`` of a long file against the table of its orbit."""
    rng = np.random.default_rng(last - first)
    always = np.unique(np.concatenate([rng.integers(first, last, _RANDOM), [first, last - 1]]))
    ends = time_at(rows, first), time_at(rows, last - 1)
    plan = plan_of(rows, start, orbit, table, budget, ends, always)
    return screen(rows, plan, first, last, **how), plan


def _edges(rows: Rows, first: int, last: int) -> Block:
    """The rows beside the reachable ones, and the last of the file: where an orbit may end."""
    count = rows.head.count
    picks = sorted({r for r in (0, first - 1, first, last - 1, last, count - 1) if 0 <= r < count})
    parts = [rows.block(r, r + 1) for r in picks]
    return Block({k: np.concatenate([p.values[k] for p in parts]) for k in parts[0].values})


def check_rows(rows: Rows, start: Start, **how: int) -> CheckResult | None:
    """Judge a long file: all rows against the orbit's table, those that matter exactly.

    Parameters
    ----------
    how
        ``threads`` and ``slab`` of :func:`.screen.screen`; they change nothing but the time.

    Returns
    -------
    CheckResult or None
        None where the orbit has no table.

    Raises
    ------
    InputError
        If it cannot be judged at all.
    """
    head, spec = rows.head, start.spec
    budget = parse_budget(head.metadata.get("budget", {}), spec.system, head.path)
    orbit = exact_orbit(spec)
    first, last = reachable_rows(rows, orbit)
    beyond, past = "not-judged", ""
    if last - first < head.count:
        edges = as_trajectory(rows, _edges(rows, first, last))
        inside = orbit.reachable(edges.time)
        beyond, past = beyond_end(spec, orbit, edges, inside, start.half_units)
        past = _renumbered(past, rows, first, last)
    result = CheckResult(
        head.path, head.name, beyond, past, None, spec, orbit, samples=head.count,
        start_from=start.source,
    )  # fmt: skip
    if first == last:
        return result
    table = table_of(orbit, time_at(rows, first), time_at(rows, last - 1))
    if table is None:
        return None
    screened, plan = screen_rows(rows, start, orbit, table, budget, first, last, **how)
    kept = as_trajectory(rows, Block(screened.values, screened.quanta))
    return _judged_rows(result, kept, start, orbit, table, budget, screened, plan, (first, last))


def _judged_rows(
    result: CheckResult, kept: Trajectory, start: Start, orbit: Orbit, table: Table,
    budget: Budget, screened: Screened, plan: Plan, ends: tuple[int, int],
) -> CheckResult:  # fmt: skip
    """The rows kept, judged like those of a short file, and what that says of all."""
    spec = start.spec
    tabled = tabled_expected(orbit, table, kept.time)
    rough = compared(kept, start, orbit, tabled)
    always = np.searchsorted(screened.rows, plan.always)
    rows = decisive_rows(rough, margins_of(rough, budget), always)
    expected = replaced(tabled, rows, exact_expected(orbit, kept.time[rows]))
    share = _table_share(tabled, expected, rows)
    comparison = _with_slopes(compared(kept, start, orbit, expected), screened.slopes)
    light = spec.particle == "light"
    limit = position_tolerance(comparison, budget, radius_of(spec, expected))
    floor, judged = floor_of(comparison, limit)
    judgements = whole_file(
        judgements_of(comparison, budget, judged, kept.path, light),
        judgements_of(rough, budget, judged, kept.path, light),
        judgements_of(picked(comparison, rows, len(kept)), budget, judged[rows], kept.path, light),
        screened.counts, screened.rows, rows, ends[1] - ends[0],
    )  # fmt: skip
    beyond, past = result.verdict, result.reason
    verdict, reason = verdict_of(kept, result.samples, start, judgements, beyond, past)
    guard = comparison.position_guard.total
    return replace(
        result, verdict=verdict, reason=reason, trajectory=kept, certified=int(rows.size),
        expected=expected, comparison=comparison, judgements=tuple(judgements),
        tolerances=budget.flat(), floor=floor,
        growth=growth_of(kept.time, comparison.distance, guard, spec.start_time),
        totals=Totals(
            screened.rows, screened.errors, screened.slopes, *ends, _RANDOM, share
        ),
    )  # fmt: skip


def _table_share(tabled: Expected, exact: Expected, rows: npt.NDArray[np.int64]) -> float:
    """Largest position error of the table at rows that are known exactly, by its bound.

    Raises
    ------
    ArithmeticError
        If the table's bound does not hold there: then nothing that rests on it may be reported.
    """
    error = (tabled.position[rows] - exact.position[rows]) - exact.position_low[rows]
    bound = np.linalg.norm(tabled.position_bound[rows], axis=1)
    share = float(np.max(np.linalg.norm(error, axis=1) / bound))
    if share > 1:
        raise ArithmeticError(f"the table of this orbit is {share:.2g} times its bound off")
    return share


def _with_slopes(comparison: Comparison, slopes: Mapping[str, float]) -> Comparison:
    """A comparison whose drifts carry the slopes of all rows."""
    drifts = comparison.drifts

    def sloped(drift: Drift | None, name: str) -> Drift | None:
        return replace(drift, slope=slopes.get(name, 0.0)) if drift is not None else None

    changed = replace(
        drifts,
        energy=sloped(drifts.energy, "energy"),
        angular_momentum=sloped(drifts.angular_momentum, "angular_momentum"),
        norm=sloped(drifts.norm, "norm"),
    )
    return replace(comparison, drifts=changed)


def _renumbered(sentence: str, rows: Rows, first: int, last: int) -> str:
    """The sentence about an end, with the number that its row has in the file."""
    row = last if last < rows.head.count else first - 1
    if first == last:
        row = 0
    return re.sub(r"row \d+ has", f"row {row + 1} has", sentence)
