"""How many digits a text column really carries.

The digits of a column are the most significant digits (in a fixed-point column: decimals) of
any entry in it, and each entry is then uncertain by half a unit of the last one.  A column is
fixed-point if more of its entries reach the most decimals than reach the most significant
digits, which also tells values rounded to so many decimals whose last zeros were dropped.

Two kinds of column carry no quantisation:

- Columns in the shortest form that round-trips (what ``repr`` prints): every entry is the
  shortest text of its own float64.  So are the entries of a column rounded to nine digits;
  therefore some entry must also have 17 digits, which nobody rounds to and which 43 % of all
  float64 numbers need in shortest form.  Where all columns of a file but ``time`` are in that
  form, one such entry in any of them vouches for the clocks, for columns with entries of 16
  digits and for columns of at most three different values (a speed that stays 0.4).
- Time stamps meant exactly, as few digits are when a person or a loop chose them: every entry
  is a float64 as it stands (whole numbers, halves, quarters; of numbers rounded to two
  decimals one in 25 is), or the stamps are evenly spaced to the last digit by a step of at most
  three digits or over more than twenty rows (the rounded stamps of another grid are not).

Plain zeros (``0``, ``0.0``) are exact too: planar orbits have a column of them.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from decimal import Decimal, localcontext
from fractions import Fraction
from itertools import pairwise

import numpy as np
import numpy.typing as npt

__all__ = ["FEW_VALUES", "NUMBER", "TELLING_DIGITS", "file_quanta", "is_shortest"]

#: An ASCII decimal number: no underscores, no hexadecimal, no nan or inf.
NUMBER = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]{1,9})?")
TELLING_DIGITS = 17
FEW_VALUES = 3
_CLOCKS = frozenset({"time", "proper_time", "coordinate_time", "affine"})
_SHORT_STEP_DIGITS = 3
_LONG_GRID = 20
_PLAIN_ZEROS = frozenset({"0", "0.0", "-0.0", "+0.0", "-0", "+0"})

Floats = npt.NDArray[np.float64]


def _split(text: str) -> tuple[str, str, int]:
    """Digits before the point, digits after it, exponent."""
    mantissa, _, exponent = text.lstrip("+-").lower().partition("e")
    whole, _, fraction = mantissa.partition(".")
    return whole, fraction, int(exponent or 0)


def _significant(text: str) -> str:
    """The significant digits, without zeros before or behind."""
    whole, fraction, _ = _split(text)
    return (whole + fraction).strip("0")


def _padded(text: str) -> bool:
    """Whether the decimals end in zeros, as fixed formats leave them ("1.250000")."""
    fraction = _split(text)[1]
    return len(fraction) > 1 and fraction.endswith("0")


def is_shortest(text: str) -> bool:
    """Whether a text has no more digits than its float64 needs to be told from all others."""
    shortest = repr(float(text))
    return text == shortest or not (
        _padded(text) or len(_significant(text)) > len(_significant(shortest))
    )


def _in_shortest_form(texts: Sequence[str]) -> bool:
    return all(map(is_shortest, texts))


def _most_digits(texts: Sequence[str]) -> int:
    return max(len(_significant(t)) for t in texts)


def _exact_stamps(texts: Sequence[str], values: Floats) -> bool:
    if any(abs(_split(t)[2]) > 400 for t in texts):
        return False
    with localcontext() as context:
        context.prec = 1000
        if all(Fraction(t) == Fraction(v) for t, v in zip(texts, values.tolist(), strict=True)):
            return True
        steps = {b - a for a, b in pairwise(map(Decimal, texts))}
    if len(steps) != 1:
        return False
    return len(texts) > _LONG_GRID or len(_significant(str(steps.pop()))) <= _SHORT_STEP_DIGITS


def _half_units(texts: Sequence[str], values: Floats, fixed: bool) -> Floats:
    """Half a unit of the last digit of every entry, by the column's digits or decimals."""
    decimals: list[int] = []
    digits: list[int] = []
    leading: list[int] = []
    scientific = False
    for text in texts:
        whole, fraction, exponent = _split(text)
        shown = (whole + fraction).lstrip("0")
        scientific = scientific or "e" in text or "E" in text
        decimals.append(len(fraction) - exponent)
        digits.append(len(shown))
        leading.append(len(shown) - 1 - len(fraction) + exponent)
    nonzero = [k for k, d in enumerate(digits) if d] or range(len(texts))
    most_decimals = max(decimals[k] for k in nonzero)
    most_digits = max(digits[k] for k in nonzero)
    full_decimals = sum(decimals[k] == most_decimals for k in nonzero)
    full_digits = sum(digits[k] == most_digits for k in nonzero)
    if fixed or full_decimals > full_digits or (full_decimals == full_digits and not scientific):
        return np.full(values.size, 0.5 * 10.0**-most_decimals)
    quanta: Floats = 0.5 * 10.0 ** (np.array(leading, dtype=np.float64) - (most_digits - 1))
    return np.where(values == 0.0, 0.0, quanta)  # significant digits round no number to zero


def file_quanta(
    texts: Mapping[str, Sequence[str]],
    values: Mapping[str, Floats],
    *,
    fixed: frozenset[str] = frozenset(),
) -> dict[str, Floats]:
    """Half a unit of the last digit of every entry of every column; zeros where exact.

    Parameters
    ----------
    texts : mapping of column name to n texts
        Each matches :data:`NUMBER`.
    values : mapping of column name to (n,) float64
    fixed : set of str
        Columns known to be fixed-point.

    Returns
    -------
    dict of column name to (n,) float64
        In the column's own unit.
    """
    shortest = {name: _in_shortest_form(texts[name]) for name in texts}
    most = {name: _most_digits(texts[name]) if shortest[name] else 0 for name in texts}
    others = [name for name in texts if name != "time"]
    vouched = all(shortest[name] for name in others) and any(
        most[name] >= TELLING_DIGITS for name in others
    )

    def exact(name: str, column: Sequence[str]) -> bool:
        if shortest[name] and most[name] >= TELLING_DIGITS:
            return True
        if shortest[name] and vouched:
            return (
                name in _CLOCKS
                or most[name] >= TELLING_DIGITS - 1
                or len(set(column)) <= FEW_VALUES
            )
        if name == "time" and _exact_stamps(column, values[name]):
            return True
        return _PLAIN_ZEROS.issuperset(column)

    return {
        name: np.zeros(values[name].size)
        if exact(name, column)
        else _half_units(column, values[name], name in fixed)
        for name, column in texts.items()
    }
