"""Long files: every row by the table, the rows that decide by the exact solution.

A file of many thousand rows is first compared with the polynomial table of its orbit, whose
error bound is a few units in the last place.  The rows that could decide the verdict (the
largest errors, the rows that the table's bound leaves undecided) and sixteen random ones are
then computed exactly and put in place of the table's values.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.compare import Comparison, Expected

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.reference.table import Table

__all__ = [
    "MANY_ROWS",
    "decisive_rows",
    "replaced",
    "table_azimuth",
    "table_of",
    "tabled_expected",
]

Floats = npt.NDArray[np.float64]

#: From this many rows on a table pays, the compiler's start included.
MANY_ROWS = 10_000
_MOST_EXACT = 4000


def table_of(orbit: Orbit, first: float, last: float) -> Table | None:
    """A table of the orbit between two times, or None where none can be made."""
    from truefall.reference.table import build_table

    try:
        table = build_table(orbit, min(first, last), max(first, last))
        table.at(np.array([first, last]))
    except (ArithmeticError, RuntimeError):
        # no fit to float64, or no folder in which the compiler may keep its output: the exact
        # solution serves as well, only slower
        return None
    return table


def tabled_expected(orbit: Orbit, table: Table, times: Floats) -> Expected:
    """Expected values from a table of the orbit."""
    position, velocity, clock = table.at(times)

    def bound(vectors: Floats, share: float) -> Floats:
        size = np.linalg.norm(vectors, axis=1, keepdims=True)
        return np.broadcast_to(size * share, vectors.shape)

    # the clock's error is measured against its piece's readings, at most twice the width off
    width = table.clock_width()
    speeds = np.linalg.norm(velocity, axis=1)
    fastest = np.maximum(speeds, table.slow)[:, None]
    return Expected(
        position=position,
        position_low=np.zeros_like(position),
        position_bound=bound(position, float(table.error[0])),
        velocity=velocity,
        velocity_low=np.zeros_like(velocity),
        velocity_bound=np.broadcast_to(fastest * table.error[1], velocity.shape),
        clock=clock,
        clock_low=np.zeros_like(clock),
        clock_bound=float(table.error[2]) * (np.abs(clock) + 2 * width),
        azimuth=table_azimuth(orbit, table, times),
        normal=orbit.angular_momentum_direction,
    )


def table_azimuth(orbit: Orbit, table: Table, times: Floats) -> Floats:
    """Azimuth since the start, good to a small part of a turn: for budgets per revolution.

    Linear between exact values at the table's edges, which are a third of a radian apart at
    most.
    """
    from truefall.reference.table_source import azimuths

    at_edges = azimuths(orbit, table.edges)
    elapsed = times - orbit.start_time
    length = float(table.period[0])
    if length == 0.0:
        return np.interp(elapsed, table.edges, at_edges)
    per_period = orbit.azimuth_per_radial_period
    swept = 2 * np.pi if per_period is None else per_period.value  # a circle: one turn
    turns = np.floor((elapsed - table.edges[0]) / length)
    total: Floats = turns * swept + np.interp(elapsed - turns * length, table.edges, at_edges)
    return total


def decisive_rows(
    comparison: Comparison,
    margins: Sequence[tuple[Floats, Floats]],
    always: npt.NDArray[np.int64],
) -> npt.NDArray[np.int64]:
    """Rows to be computed exactly: the largest errors, what is undecided, and random ones.

    Parameters
    ----------
    comparison : Comparison
        Against the table.
    always : (k,)
        Rows that are computed exactly in any case (the random ones).
    margins : sequence of (margin, guard) arrays
        Of each tolerance, (n,) each.  The rows closest to it, and those that the guard leaves
        undecided (a few thousand at most), are among the result.
    """
    n = comparison.time.size
    errors = [comparison.distance, comparison.radial, comparison.along, comparison.cross]
    errors += [e for e in (comparison.velocity_error, comparison.clock_error) if e is not None]
    rows = [always, np.array([0, n - 1])]
    rows += [np.array([int(np.argmax(np.abs(e)))]) for e in errors]
    for margin, guard in margins:
        open_ = np.flatnonzero(np.abs(margin) <= guard)
        if open_.size > _MOST_EXACT:
            open_ = open_[np.argsort(np.abs(margin[open_]))[:_MOST_EXACT]]
        rows += [open_, np.array([int(np.argmin(margin)), int(np.argmin(np.abs(margin)))])]
    return np.unique(np.concatenate(rows).astype(np.int64))


def replaced(table: Expected, rows: npt.NDArray[np.int64], exact: Expected) -> Expected:
    """The table's values with some rows replaced by exact ones."""

    def put(old: Floats | None, new: Floats | None) -> Floats | None:
        if old is None or new is None:
            return old
        merged = np.array(old)
        merged[rows] = new
        return merged

    names = [
        f"{series}{kind}"
        for series in ("position", "velocity", "clock")
        for kind in ("", "_low", "_bound")
    ]
    changes: dict[str, Any] = {
        name: put(getattr(table, name), getattr(exact, name)) for name in names
    }
    return replace(table, **changes)
