"""The pass over all rows of a long file: statistics of every error, and the rows that matter.

Each block of rows is compared with the orbit's table by a compiled loop, on as many threads as
there are cores; what is kept of it is a few dozen numbers and a few dozen rows.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.streaming.kernels import LAWS, QUANTITIES, reduce_block, usable_rows
from truefall.validate.streaming.rows import BLOCK, Block, Rows

if TYPE_CHECKING:
    from truefall.reference.table import Table

__all__ = ["Plan", "Screened", "screen"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_SLAB = 16 * BLOCK
_EVEN = 4096
_EARLY = 512
_MOST_OPEN = 20_000
_ULPS = 4.0


@dataclass(frozen=True)
class Plan:
    """What every block is held against; arrays as :func:`.kernels.reduce_block` takes them.

    ``clock`` names the series that is the second clock.  ``spread(times)`` gives what the start's
    digits leave open of position, velocity and clock, (3, n), ``judged(times)`` which rows are
    judged; None where the start is exact.  ``turns(times)`` gives revolutions.  ``always`` are row
    numbers that are kept in any case.
    """

    table: Table
    clock: str | None
    shares: Floats
    tolerances: Floats
    kinds: Ints
    growing: Ints
    orbit: Floats
    chart: int
    light: bool
    spread: Callable[[Floats], Floats] | None
    judged: Callable[[Floats], npt.NDArray[np.bool_]] | None
    turns: Callable[[Floats], Floats] | None
    always: Ints


@dataclass
class _Reduced:
    """What is kept of one block."""

    first: int
    ends: tuple[float, float]
    bad: int
    largest: Floats = field(default_factory=lambda: np.zeros((len(QUANTITIES), 3)))
    where: Ints = field(default_factory=lambda: np.full(len(QUANTITIES), -1))
    laws: Floats = field(default_factory=lambda: np.zeros((len(LAWS), 5)))
    counts: Ints = field(default_factory=lambda: np.zeros((0, 3), np.int64))
    rows: Ints = field(default_factory=lambda: np.zeros(0, np.int64))
    values: dict[str, Floats] = field(default_factory=dict)
    quanta: dict[str, Floats] = field(default_factory=dict)


@dataclass(frozen=True)
class Screened:
    """All rows reduced.

    Attributes
    ----------
    errors : dict
        Largest size, root mean square and row of the largest, by quantity.
    slopes : dict
        Least-squares slope per unit of time of the drifts.
    counts : (m, 3)
        Rows that pass, are open and fail, by the table, for each tolerance.
    rows : (k,)
        The rows kept, ascending.
    values, quanta : dict
        Their numbers, as in :class:`Block`.
    """

    errors: dict[str, tuple[float, float, int]]
    slopes: dict[str, float]
    counts: Ints
    rows: Ints
    values: dict[str, Floats]
    quanta: dict[str, Floats]


def _spare_rows(count: int) -> Ints:
    """Rows kept for pictures and laws of growth: evenly spread, and denser at both ends."""
    even = np.arange(0, count, max(1, count // _EVEN))
    early = np.rint(np.geomspace(1, count, _EARLY)).astype(np.int64) - 1
    return np.unique(np.concatenate([even, early, [count - 1]]))


class _Reducer:
    """Reduces one block; holds scratch space of its own for each thread."""

    def __init__(self, rows: Rows, plan: Plan, first: int, last: int) -> None:
        self.rows, self.plan, self.low, self.high = rows, plan, first, last
        blocks = -(-(last - first) // BLOCK)
        self.room = int(np.clip(_MOST_OPEN // max(blocks, 1), 4, 4096))
        self.kept = np.unique(np.concatenate([first + _spare_rows(last - first), plan.always]))
        self.sense = 1.0

    def __call__(self, ends: tuple[int, int]) -> list[_Reduced]:
        """A slab of blocks, read at once and reduced one by one."""
        first, last = ends
        slab = self.rows.block(first, last)
        scratch = _scratch()
        found = []
        for low in range(first, last, BLOCK):
            part = slice(low - first, min(low + BLOCK, last) - first)
            block = Block(
                {k: v[part] for k, v in slab.values.items()},
                {k: v[part] if v.ndim == 2 else v for k, v in slab.quanta.items()},
            )
            found.append(self._reduce(low, block, scratch))
        return found

    def _reduce(self, first: int, block: Block, scratch: Sequence[Floats]) -> _Reduced:
        plan, values = self.plan, block.values
        time = np.ascontiguousarray(values["time"])
        n, m = time.size, plan.kinds.size
        found = _Reduced(first, (float(time[0]), float(time[-1])), -1)
        found.counts = np.zeros((m, 3), np.int64)
        found.bad = _first_bad(values, self.sense)
        if found.bad >= 0:
            return found
        empty = np.empty((0, 3))
        velocity = values.get("velocity", empty)
        clock = values[plan.clock] if plan.clock is not None else np.empty(0)
        x, v, c = (part[:n] for part in scratch[:3])
        self._expect(time, x, v, c)
        marks = np.full((m, 5), -1)
        open_rows, open_margins = np.full((m, self.room), -1), np.zeros((m, self.room))
        reduce_block(
            first, time, np.ascontiguousarray(values["position"]),
            np.ascontiguousarray(velocity), np.ascontiguousarray(clock), x, v, c, plan.shares,
            self._extra(time, x, v, c), _digits(block, self.rows.head.clock_quantum, n),
            np.ones(1, np.bool_) if plan.judged is None else plan.judged(time),
            np.ones(1) if plan.turns is None else plan.turns(time),
            plan.tolerances, plan.kinds, plan.growing, plan.orbit, plan.chart, plan.light,
            scratch[3], scratch[4], found.largest, found.where, found.laws, found.counts, marks,
            open_rows, open_margins,
        )  # fmt: skip
        inside = self.kept[
            np.searchsorted(self.kept, first) : np.searchsorted(self.kept, first + n)
        ]
        chosen = np.concatenate([inside, found.where, marks.ravel(), open_rows.ravel()])
        found.rows = np.unique(chosen[chosen >= 0])
        pick = found.rows - first
        found.values = {k: a[pick] for k, a in values.items()}
        found.quanta = {
            k: np.broadcast_to(a, values[k].shape)[pick] for k, a in block.quanta.items()
        }
        return found

    def _expect(self, time: Floats, x: Floats, v: Floats, c: Floats) -> None:
        self.plan.table.fill(time, x, v, c)

    def _extra(self, time: Floats, x: Floats, v: Floats, c: Floats) -> Floats:
        """What stamps and the carried start leave open, (3, n) or (3, 1) zeros."""
        quantum = self.rows.head.time_quantum
        if self.plan.spread is None and quantum <= 0:
            return np.zeros((3, 1))
        total = np.zeros((3, time.size))
        if self.plan.spread is not None:
            total += self.plan.spread(time)
        if quantum > 0:
            step = np.maximum(quantum, _ULPS * np.spacing(np.abs(time)))
            moved = np.where(time + step <= self.plan.table.last, time + step, time - step)
            there = (np.empty_like(x), np.empty_like(v), np.empty_like(c))
            self._expect(moved, *there)
            share = quantum / np.abs(moved - time)
            total[0] += share * np.linalg.norm(there[0] - x, axis=1)
            total[1] += share * np.linalg.norm(there[1] - v, axis=1)
            total[2] += share * np.abs(there[2] - c)
        return total


def _scratch() -> tuple[Floats, ...]:
    """Room for expected position, velocity and clock, and for what the kernel works out."""
    shapes = ((BLOCK, 3), (BLOCK, 3), (BLOCK,), (11, BLOCK), (5, BLOCK))
    return tuple(np.empty(shape) for shape in shapes)


def _first_bad(values: dict[str, Floats] | Any, sense: float) -> int:
    """First row of a block that is not finite or out of order, or -1."""
    time, worst = values["time"], -1
    for array in values.values():
        flat = array if array.ndim == 2 else array[:, None]
        row = usable_rows(time, flat, np.nan, sense)
        if row >= 0 and (worst < 0 or row < worst):
            worst = row
    return worst


def _digits(block: Block, clock_quantum: float, n: int) -> Floats:
    """Lengths of the half units of position, velocity, clock, (3, n) or (3, 1)."""
    total = np.zeros((3, n if block.quanta else 1))
    for k, name in enumerate(("position", "velocity")):
        if name in block.quanta:
            total[k] = np.linalg.norm(np.atleast_2d(block.quanta[name]), axis=1)
    total[2] = clock_quantum
    return total


def _slabs(first: int, last: int, size: int) -> Iterator[tuple[int, int]]:
    for low in range(first, last, size):
        yield low, min(low + size, last)


def screen(
    rows: Rows, plan: Plan, first: int, last: int, *, threads: int | None = None, slab: int = _SLAB
) -> Screened:
    """Reduce rows ``first`` to ``last``; the same whatever ``threads`` and ``slab``.

    Parameters
    ----------
    threads : int, optional
        Default: the cores this process may use, at most 8.
    slab : int
        Rows read at a time, a multiple of ``BLOCK``.

    Raises
    ------
    InputError
        For rows that are not finite or whose stamps are out of order.
    """
    cores = threads or min(8, len(os.sched_getaffinity(0)))
    reducer = _Reducer(rows, plan, first, last)
    if last - first > 1:
        begin = rows.block(first, first + 2).values["time"]
        reducer.sense = 1.0 if begin[1] > begin[0] else -1.0
    parts = list(_slabs(first, last, slab))
    merged: list[_Reduced] = []
    before = float("nan")
    with ThreadPoolExecutor(cores) as pool:
        for found in pool.map(reducer, parts):
            for block in found:
                late = block.bad < 0 and reducer.sense * (block.ends[0] - before) <= 0
                if block.bad >= 0 or late:
                    pool.shutdown(cancel_futures=True)
                    _refuse(rows, block.first + max(block.bad, 0), first)
                before = block.ends[1]
                merged.append(block)
    return _merge(merged, plan)


def _refuse(rows: Rows, row: int, first: int) -> None:
    """The sentence for a row that cannot be used."""
    head = rows.head
    values = rows.block(max(row - 1, first), row + 1).values
    for name in head.series:
        last = np.atleast_1d(values[name][-1])
        if not np.all(np.isfinite(last)):
            shown = last[~np.isfinite(last)][0]
            raise InputError(
                f"row {row + 1} of {name} is {shown}: every entry must be a finite number; remove "
                "the row or mend the program that wrote it",
                head.path,
            )
    before, here = values["time"].tolist()
    what = f"row {row + 1} repeats the time {here!r} of row {row}"
    if here != before:
        what = f"row {row + 1} ({here!r}) turns back after row {row} ({before!r})"
    raise InputError(
        f"time: {what}; times must be strictly increasing or strictly decreasing", head.path
    )


def _merge(blocks: Sequence[_Reduced], plan: Plan) -> Screened:
    """One result of all blocks, in the order of their rows."""
    errors: dict[str, tuple[float, float, int]] = {}
    for k, name in enumerate(QUANTITIES):
        seen = [b for b in blocks if b.where[k] >= 0]
        if not seen:
            continue
        best = max(seen, key=lambda b: (b.largest[k, 0], -b.first))
        squares = float(np.sum([b.largest[k, 1] for b in seen]))
        number = float(np.sum([b.largest[k, 2] for b in seen]))
        errors[name] = (
            float(best.largest[k, 0]),
            float(np.sqrt(squares / number)),
            int(best.where[k]),
        )
    slopes = {}
    total = np.sum([b.laws for b in blocks], axis=0)
    for k, name in enumerate(LAWS):
        n, t, v, tt, tv = total[k]
        spread = tt - t * t / n if n > 1 else 0.0
        if n > 1:
            slopes[name] = float((tv - t * v / n) / spread * plan.shares[5]) if spread > 0 else 0.0

    def joined(which: str) -> dict[str, Floats]:
        names = getattr(blocks[0], which)
        return {k: np.concatenate([getattr(b, which)[k] for b in blocks]) for k in names}

    return Screened(
        errors, slopes, np.sum([b.counts for b in blocks], axis=0),
        np.concatenate([b.rows for b in blocks]), joined("values"), joined("quanta"),
    )  # fmt: skip
