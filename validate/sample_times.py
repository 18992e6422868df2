"""The times of an orbit file's [samples], exact where they are a rule."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import Any

from truefall.validate.errors import InputError
from truefall.validate.metadata_values import number, refuse_unknown, shown

__all__ = ["check_times", "sample_times"]

_MOST_SAMPLES = 10_000_000
_SAMPLES = ("times", "first", "last", "count", "from_file")


def check_times(times: Sequence[float], where: str, what: str = "samples.times") -> None:
    """Refuse times that are neither strictly increasing nor strictly decreasing."""
    if len(times) < 2:
        return
    rising = times[1] > times[0]
    for k in range(1, len(times)):
        if times[k] == times[k - 1]:
            raise InputError(
                f"{what}: row {k + 1} repeats the time {times[k]!r} of row {k}; times must be "
                "strictly increasing or strictly decreasing",
                where,
            )
        if (times[k] > times[k - 1]) != rising:
            raise InputError(
                f"{what}: row {k + 1} ({times[k]!r}) turns back after row {k} "
                f"({times[k - 1]!r}); times must be strictly increasing or strictly decreasing",
                where,
            )


def sample_times(table: Mapping[str, Any], where: str) -> tuple[float, ...]:
    """The times that a [samples] table asks for, each a float64, strictly monotonic.

    Raises
    ------
    InputError
        Naming the key, or the row at which times repeat or turn back.
    """
    refuse_unknown(table, _SAMPLES, "[samples]", where)
    ways = [k for k in ("times", "from_file") if k in table]
    if any(k in table for k in ("first", "last", "count")):
        ways.append("first/last/count")
    if len(ways) != 1:
        raise InputError(
            "[samples] must give exactly one of: times; first, last and count; from_file", where
        )
    if ways[0] == "times":
        values = table["times"]
        if not isinstance(values, Sequence) or isinstance(values, str) or not values:
            raise InputError("samples.times must be a list of numbers", where)
        times = tuple(number(t, f"samples.times[{k}]", where) for k, t in enumerate(values))
    elif ways[0] == "from_file":
        times = _times_file(table["from_file"], where)
    else:
        times = _regular_times(table, where)
    check_times(times, where)
    return times


def _regular_times(table: Mapping[str, Any], where: str) -> tuple[float, ...]:
    """Time i is the float64 nearest to first + i (last - first)/(count - 1), taken exactly."""
    missing = [k for k in ("first", "last", "count") if k not in table]
    if missing:
        raise InputError(f"[samples] lacks {', '.join(missing)}", where)
    count = table["count"]
    if isinstance(count, bool) or not isinstance(count, int) or not 2 <= count <= _MOST_SAMPLES:
        raise InputError(
            f"samples.count must be a whole number from 2 to {_MOST_SAMPLES}, not {shown(count)}",
            where,
        )
    first = Fraction(number(table["first"], "samples.first", where))
    step = (Fraction(number(table["last"], "samples.last", where)) - first) / (count - 1)
    if step == 0:
        raise InputError("samples.first and samples.last must differ", where)
    base, over = first, step.denominator * first.denominator
    a, b = base.numerator * step.denominator, step.numerator * base.denominator
    return tuple((a + k * b) / over for k in range(count))


def _times_file(name: Any, where: str) -> tuple[float, ...]:
    from truefall.validate.formats.csv_format import read_times
    from truefall.validate.formats.files import check_readable

    if not isinstance(name, str):
        raise InputError(f"samples.from_file must be a path, not {shown(name)}", where)
    path = Path(where).parent / name
    check_readable(path)
    return tuple(read_times(path))
