"""The compiled look at every digit of a long CSV file, and what it says of the columns.

The rules are those of :mod:`truefall.validate.formats.text_digits`; here they are applied to
counts over all entries in place of the entries themselves.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from numba import njit

__all__ = ["DECIMALS", "DIGITS", "FLAGS", "scan"]

Ints = npt.NDArray[np.int64]

#: Decimals from -400 to 400, and digits from 0 to 40, are counted; anything else is left alone.
DECIMALS, DIGITS = 400, 40
#: Columns of ``flags``: padded entries, scientific entries, entries other than a plain zero,
#: entries of 16 and 17 significant digits, longest entry in significant digits.
FLAGS = ("padded", "scientific", "other", "long", "longest")
_LONG = 16
_BAD = -1


@njit(cache=True, error_model="numpy", nogil=True)
def _exponent(data: npt.NDArray[np.uint8], start: int, stop: int) -> tuple[int, int]:
    """The exponent whose ``e`` stands before ``start``, and where it ends; -1 if it is none."""
    i, sign, value = start, 1, 0
    if i < stop and (data[i] == 43 or data[i] == 45):
        sign = -1 if data[i] == 45 else 1
        i += 1
    first = i
    for k in range(first, min(stop, first + 10)):
        if data[k] < 48 or data[k] > 57:
            break
        value = value * 10 + (int(data[k]) - 48)
        i = k + 1
    if i == first or i - first > 9:
        return 0, -1
    return sign * value, i


@njit(cache=True, error_model="numpy", nogil=True)
def _number(data: npt.NDArray[np.uint8], start: int, stop: int, found: Ints) -> int:
    """Measure the decimal number at ``start``; gives back where it ends, -1 if it is none.

    ``found``: decimals, digits without leading zeros, significant digits without zeros before or
    behind, whether the decimals end in zeros, whether there is an exponent.
    """
    i = start
    if i < stop and (data[i] == 43 or data[i] == 45):
        i += 1
    begin, first, last = i, -1, -1
    for i in range(begin, stop + 1):
        if i == stop or data[i] < 48 or data[i] > 57:
            break
        if data[i] != 48:
            last = i
            if first < 0:
                first = i
    point, end = i, i
    if i < stop and data[i] == 46:
        for end in range(i + 1, stop + 1):
            if end == stop or data[end] < 48 or data[end] > 57:
                break
            if data[end] != 48:
                last = end
                if first < 0:
                    first = end
    fraction = max(end - point - 1, 0)
    if (point - begin) + fraction == 0:
        return -1
    shown = end - first - (1 if first < point < end else 0) if first >= 0 else 0
    significant = last - first + 1 - (1 if first < point < last else 0) if first >= 0 else 0
    exponent, after = 0, end
    found[4] = 0
    if end < stop and (data[end] == 101 or data[end] == 69):
        exponent, after = _exponent(data, end + 1, stop)
        found[4] = 1
    found[0], found[1], found[2] = fraction - exponent, shown, significant
    found[3] = 1 if fraction > 1 and data[end - 1] == 48 else 0
    return after


@njit(cache=True, error_model="numpy", nogil=True)
def _tell(found: Ints, size: int, k: int, decimals: Ints, digits: Ints, flags: Ints) -> bool:
    """Count one entry of column ``k``; False if it lies outside what is counted."""
    if abs(found[0]) > DECIMALS or found[1] > DIGITS:
        return False
    zero = 1 if found[1] == 0 else 0  # entries that are zero are counted apart
    decimals[k, zero, found[0] + DECIMALS] += 1
    digits[k, zero, found[1]] += 1
    flags[k, 0] += found[3]
    flags[k, 1] += found[4]
    if zero == 0 or found[4] == 1 or found[0] > 1 or size > 4:
        flags[k, 2] += 1
    if found[2] >= _LONG:
        flags[k, 3] += 1
    flags[k, 4] = max(flags[k, 4], found[2])
    return True


@njit(cache=True, error_model="numpy", nogil=True)
def scan(
    data: npt.NDArray[np.uint8], columns: int, decimals: Ints, digits: Ints, flags: Ints,
    places: Ints, counts: Ints,
) -> int:  # fmt: skip
    """Count the digits of whole lines of comma-separated numbers.

    Parameters
    ----------
    data : (n,) uint8
        Whole lines, the last one ended or not.
    decimals, digits : (columns, 2, 801), (columns, 2, 41)
        Numbers of entries by decimals and by digits, other than zero and zero.
    flags : (columns, 5)
        See :data:`FLAGS`.
    places, counts : (columns, m, 2), (columns,)
        Where the first ``m`` entries of 16 or 17 significant digits lie.

    Returns
    -------
    int
        Rows, or -1 if something is not a plain number or a line has another number of entries.
    """
    found = np.zeros(5, dtype=np.int64)
    column, start, rows, size = 0, 0, 0, data.size
    for _ in range(size + 1):
        if start >= size:
            break
        stop = _number(data, start, size, found)
        if stop < 0 or not _tell(found, stop - start, column, decimals, digits, flags):
            return _BAD
        if found[2] >= _LONG and counts[column] < places.shape[1]:
            places[column, counts[column], 0] = start
            places[column, counts[column], 1] = stop
            counts[column] += 1
        if stop < size and data[stop] == 44:
            column, start = column + 1, stop + 1
            if column == columns or start == size:
                return _BAD
            continue
        if stop < size and data[stop] == 13:
            stop += 1
        if stop < size and data[stop] != 10:
            return _BAD
        if column != columns - 1:
            return _BAD
        column, start, rows = 0, stop + 1, rows + 1
    return rows


def empty_counts(columns: int, most: int) -> tuple[Any, ...]:
    """Arrays for :func:`scan`: decimals, digits, flags, places, counts."""
    return (
        np.zeros((columns, 2, 2 * DECIMALS + 1), np.int64),
        np.zeros((columns, 2, DIGITS + 1), np.int64),
        np.zeros((columns, len(FLAGS)), np.int64),
        np.zeros((columns, most, 2), np.int64),
        np.zeros(columns, np.int64),
    )
