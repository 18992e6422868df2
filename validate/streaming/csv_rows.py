"""Long CSV files: parsed by PyArrow block by block, their digits counted on the way.

A file with anything but plain numbers in it, and any file without PyArrow, is left to the
reader of short files, which names line and column.
"""

from __future__ import annotations

import mmap
import os
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.formats.assemble import arrays_of, check_columns
from truefall.validate.formats.csv_format import leading_lines
from truefall.validate.formats.text_digits import FEW_VALUES, TELLING_DIGITS, is_shortest
from truefall.validate.streaming.rows import Block, Head
from truefall.validate.streaming.text_scan import DECIMALS, FLAGS, empty_counts, scan
from truefall.validate.trajectory import CLOCKS, VECTORS

__all__ = ["CsvRows", "open_csv"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_BYTES = 8 << 20
_SAMPLES = 256
_LONG_GRID = 20
_SHORT_STEP = 1000


@dataclass
class _Counts:
    """What is known of the digits of every column; (columns, ...) arrays."""

    decimals: Ints
    digits: Ints
    flags: Ints
    shortest: npt.NDArray[np.bool_]
    parts: list[Floats] = field(default_factory=list)

    def flag(self, column: int, name: str) -> int:
        """A flag of a column."""
        return int(self.flags[column, FLAGS.index(name)])


@dataclass(frozen=True)
class _Rule:
    """Half units of a column: constant, or by its significant digits (0: exact)."""

    constant: float = 0.0
    digits: int = 0

    def __call__(self, values: Floats) -> Floats:
        if not self.digits:
            return np.full(values.shape, self.constant)
        with np.errstate(divide="ignore"):
            leading = np.floor(np.log10(np.abs(values)))
        quanta = 0.5 * 10.0 ** (leading - (self.digits - 1))
        return np.where(values == 0.0, 0.0, quanta)

    @property
    def exact(self) -> bool:
        """Whether the column carries no quantisation."""
        return not (self.digits or self.constant)


class CsvRows:
    """Parsed rows in memory, with the rules by which their digits count."""

    def __init__(
        self, head: Head, arrays: Mapping[str, Floats], rules: Mapping[str, _Rule]
    ) -> None:
        self.head = head
        self._arrays = arrays
        self._rules = rules

    def __enter__(self) -> CsvRows:
        return self

    def __exit__(self, *_: object) -> None:
        """Nothing is held open."""

    def block(self, first: int, last: int) -> Block:
        """Rows ``first`` to ``last``."""
        values = {k: v[first:last] for k, v in self._arrays.items()}
        quanta = {}
        for name in (n for n in VECTORS if n in values):
            rules = [self._rules[c] for c in VECTORS[name]]
            if not all(rule.exact for rule in rules):
                quanta[name] = np.column_stack(
                    [rule(values[name][:, k]) for k, rule in enumerate(rules)]
                )
        return Block(values, quanta)


def _slices(data: mmap.mmap, start: int) -> Iterator[tuple[int, int]]:
    """Parts of whole lines."""
    size = len(data)
    for _ in range(size // _BYTES + 2):
        if start >= size:
            return
        end = data.find(b"\n", min(start + _BYTES, size))
        stop = size if end < 0 else end + 1
        yield start, stop
        start = stop


def _parse(path: Path, ends: tuple[int, int], names: list[str]) -> tuple[_Counts, Floats] | None:
    """Counts and numbers (columns, rows) of a part of the file, or None."""
    import pyarrow as pa
    from pyarrow import csv

    with path.open("rb") as file:
        raw = os.pread(file.fileno(), ends[1] - ends[0], ends[0])
    decimals, digits, flags, places, counts = empty_counts(len(names), _SAMPLES)
    rows = scan(np.frombuffer(raw, np.uint8), len(names), decimals, digits, flags, places, counts)
    if rows < 0:
        return None
    try:
        table = csv.read_csv(
            pa.BufferReader(raw),
            read_options=csv.ReadOptions(
                column_names=names, use_threads=False, block_size=len(raw) + 1
            ),
            convert_options=csv.ConvertOptions(column_types=dict.fromkeys(names, pa.float64())),
        )
    except pa.ArrowInvalid:
        return None
    if table.num_rows != rows or any(c.null_count for c in table.columns):
        return None
    values = np.array([column.to_numpy() for column in table.columns])
    if not np.isfinite(values).all():
        return None
    shortest = np.array(
        [
            all(is_shortest(raw[a:b].decode()) for a, b in places[k, : counts[k]].tolist())
            for k in range(len(names))
        ]
    )
    shortest &= (flags[:, 0] == 0) & (flags[:, 4] <= TELLING_DIGITS)
    return _Counts(decimals, digits, flags, shortest), values


def _exact_stamps(values: Floats, decimals: int) -> bool:
    """Whether time stamps of so many decimals are meant exactly.

    Each is a float64 as it stands, or they are evenly spaced by a step of at most three digits,
    or over more than twenty rows; decided in whole numbers of the last decimal.
    """
    if not 0 <= decimals <= 15 or np.abs(values).max() * 10.0**decimals >= 2.0**53:
        return False
    units = np.rint(values * 10.0**decimals).astype(np.int64)
    if not np.any(units % 5**decimals):
        return True
    steps = np.diff(units)
    even = bool(steps.size) and bool(np.all(steps == steps[0]))
    return even and (values.size > _LONG_GRID or abs(int(steps[0])) < _SHORT_STEP)


def _rule(counts: _Counts, k: int) -> _Rule:
    """The half units of a column that is not exact: by decimals or by significant digits."""
    which = 0 if counts.digits[k, 0].any() else 1
    decimals, digits = counts.decimals[k, which], counts.digits[k, which]
    most_decimals = int(np.flatnonzero(decimals)[-1]) - DECIMALS
    most_digits = int(np.flatnonzero(digits)[-1])
    full_decimals, full_digits = int(decimals[most_decimals + DECIMALS]), int(digits[most_digits])
    scientific = counts.flag(k, "scientific") > 0
    if full_decimals > full_digits or (full_decimals == full_digits and not scientific):
        return _Rule(constant=0.5 * 10.0**-most_decimals)
    return _Rule(digits=most_digits)


def _rules(names: list[str], counts: _Counts, arrays: Mapping[str, Floats]) -> dict[str, _Rule]:
    """The rule of every column."""
    longest = {n: counts.flag(k, "longest") for k, n in enumerate(names)}
    shortest = dict(zip(names, counts.shortest.tolist(), strict=True))
    others = [n for n in names if n != "time"]
    vouched = all(shortest[n] for n in others) and any(longest[n] >= TELLING_DIGITS for n in others)

    def exact(k: int, name: str) -> bool:
        if shortest[name] and longest[name] >= TELLING_DIGITS:
            return True
        if shortest[name] and vouched:
            clock = name == "time" or name in CLOCKS
            few = clock or longest[name] >= TELLING_DIGITS - 1
            return few or np.unique(arrays[name][: 1 << 16]).size <= FEW_VALUES
        if name == "time":
            shown = np.flatnonzero(counts.decimals[k].any(axis=0))
            if _exact_stamps(arrays["time"], int(shown[-1]) - DECIMALS):
                return True
        return counts.flag(k, "other") == 0

    return {n: _Rule() if exact(k, n) else _rule(counts, k) for k, n in enumerate(names)}


def _read(path: Path, start: int, names: list[str]) -> tuple[_Counts, dict[str, Floats]] | None:
    total: _Counts | None = None
    parts: list[Floats] = []
    cores = min(8, len(os.sched_getaffinity(0)))
    with (
        path.open("rb") as file,
        mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ) as data,
        ThreadPoolExecutor(cores) as pool,
    ):
        for found in pool.map(lambda ends: _parse(path, ends, names), list(_slices(data, start))):
            if found is None:
                pool.shutdown(cancel_futures=True)
                return None
            counts, values = found
            parts.append(values)
            if total is None:
                total = counts
                continue
            total.decimals += counts.decimals
            total.digits += counts.digits
            total.flags[:, :4] += counts.flags[:, :4]
            total.flags[:, 4] = np.maximum(total.flags[:, 4], counts.flags[:, 4])
            total.shortest &= counts.shortest
    if total is None:
        return None
    columns = {}
    for k, name in enumerate(names):
        columns[name] = np.concatenate([part[k] for part in parts])
    return total, columns


def open_csv(path: Path, complete: Callable[[dict[str, Any]], dict[str, Any]]) -> CsvRows | None:
    """The rows of a long CSV file, or None if the reader of short files should have it.

    Raises
    ------
    InputError
        For a header that is no list of known columns, or metadata that cannot be used.
    """
    try:
        import pyarrow  # noqa: F401
    except ImportError:
        return None
    leading = leading_lines(path)
    if leading is None:
        return None
    metadata, names, start = leading
    check_columns(names, path)
    found = _read(path, start, names)
    if found is None:
        return None
    counts, columns = found
    rules = _rules(names, counts, columns)
    arrays = arrays_of(columns)
    own = next((c for c in CLOCKS if c in columns), None)
    head = Head(
        str(path), str(metadata.get("name", path.stem)), columns["time"].size, tuple(arrays),
        complete(metadata), float(rules["time"](columns["time"]).max()),
        0.0 if own is None else float(rules[own](columns[own]).max()),
    )  # fmt: skip
    return CsvRows(head, arrays, rules)
