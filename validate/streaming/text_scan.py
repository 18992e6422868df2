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
# The two functions below are written into their caller: a call with several arrays costs more
# than what they do.
_BAD = -1
_NONE = 1_000_000_000


@njit(cache=True, error_model="numpy", nogil=True)
def _exponent(data: npt.NDArray[np.uint8], start: int, stop: int) -> int:
    """The exponent between ``start`` and ``stop``; 10**9 if it is none."""
    i, sign, value = start, 1, 0
    if i < stop and (data[i] == 43 or data[i] == 45):
        sign = -1 if data[i] == 45 else 1
        i += 1
    if i == stop or stop - i > 9:
        return _NONE
    for k in range(i, stop):
        if data[k] < 48 or data[k] > 57:
            return _NONE
        value = value * 10 + int(data[k]) - 48
    return sign * value


@njit(error_model="numpy", nogil=True, inline="always")
def _number(data: npt.NDArray[np.uint8], start: int, stop: int, found: Ints) -> bool:
    """Measure the decimal number between ``start`` and ``stop``; False if it is none.

    ``found``: decimals, digits without leading zeros, significant digits without zeros before or
    behind, whether the decimals end in zeros, whether there is an exponent.  The digits in the
    middle are not looked at: who parses the number does that.
    """
    begin = start
    if begin < stop and (data[begin] == 43 or data[begin] == 45):
        begin += 1
    end = stop
    for k in range(stop - 1, max(begin, stop - 12) - 1, -1):
        if data[k] == 101 or data[k] == 69:
            end = k
            break
    point = end
    for k in range(begin, end):
        if data[k] == 46:
            point = k
            break
        if data[k] < 48 or data[k] > 57:
            return False
    fraction = max(end - point - 1, 0)
    if (point - begin) + fraction == 0:
        return False
    first, last = end, begin - 1
    for k in range(begin, end):
        if data[k] != 48 and data[k] != 46:
            first = k
            break
    for k in range(end - 1, begin - 1, -1):
        if data[k] != 48 and data[k] != 46:
            last = k
            break
    shown = end - first - (1 if first < point < end else 0)
    significant = max(last - first + 1 - (1 if first < point < last else 0), 0)
    exponent = 0
    found[4] = 0
    if end < stop:
        exponent = _exponent(data, end + 1, stop)
        if exponent == _NONE:
            return False
        found[4] = 1
    found[0], found[1], found[2] = fraction - exponent, shown, significant
    found[3] = 1 if fraction > 1 and data[end - 1] == 48 else 0
    return True


@njit(error_model="numpy", nogil=True, inline="always")
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
    for i in range(size + 1):
        if i < size and data[i] != 44 and data[i] != 10:
            continue
        if i == size and start == size and column == 0:
            break
        line = i == size or data[i] == 10
        stop = i - 1 if line and i > start and data[i - 1] == 13 else i
        if column == columns or not _number(data, start, stop, found):
            return _BAD
        if not _tell(found, stop - start, column, decimals, digits, flags):
            return _BAD
        if found[2] >= _LONG and counts[column] < places.shape[1]:
            places[column, counts[column], 0] = start
            places[column, counts[column], 1] = stop
            counts[column] += 1
        start, column = i + 1, column + 1
        if line:
            if column != columns:
                return _BAD
            column, rows = 0, rows + 1
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
