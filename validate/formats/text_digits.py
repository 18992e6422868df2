"""How many digits a text column really carries.

The digits of a column are the most significant digits (in a fixed-point column: decimals) of
any entry in it, and each entry is then uncertain by half a unit of the last one.  Two kinds of
column carry no quantisation:

- columns in the shortest form that round-trips (what ``repr`` prints).  Every entry must be its
  own shortest form, and digits enough to tell (16 or 17) must occur in the column, or somewhere
  in a file whose columns are all in that form: a column rounded to nine digits also consists of
  shortest forms, and is not meant by that;
- time stamps on an exact grid: whole numbers, or decimals that are evenly spaced to the last
  digit, which rounded stamps of an uneven grid are not; and columns of plain zeros.
"""

from __future__ import annotations

import re
from decimal import Decimal
from itertools import pairwise

import numpy as np
import numpy.typing as npt

__all__ = ["NUMBER", "column_quantisation", "file_is_shortest"]

NUMBER = re.compile(r"([+-]?)(\d*)(?:\.(\d*))?(?:[eE]([+-]?\d+))?", re.ASCII)
_TELLING_DIGITS = 16

Floats = npt.NDArray[np.float64]


def _parts(text: str) -> tuple[str, int, int, bool]:
    """Significant digits as written, number of decimals, exponent, and whether it has one."""
    match = NUMBER.fullmatch(text)
    if match is None:
        raise ValueError(text)
    whole, fraction, exponent = match[2], match[3] or "", match[4]
    digits = (whole + fraction).lstrip("0")
    return digits, len(fraction), int(exponent or 0), exponent is not None


def _is_shortest(text: str, value: float) -> bool:
    return repr(value) == text or _parts(text)[0].rstrip("0") == _parts(repr(value))[0].rstrip("0")


def _shortest_column(texts: list[str], values: Floats) -> bool:
    return all(_is_shortest(t, v) for t, v in zip(texts, values.tolist(), strict=True))


def _most_digits(texts: list[str]) -> int:
    return max((len(_parts(t)[0].rstrip("0")) for t in texts), default=0)


def _has_padding(texts: list[str]) -> bool:
    """Whether some entry is padded with zeros, as fixed formats do ("1.250000")."""
    for text in texts:
        digits, decimals, _, scientific = _parts(text)
        if digits != digits.rstrip("0") and (decimals > 1 or scientific):
            return True
    return False


def file_is_shortest(columns: dict[str, list[str]], values: dict[str, Floats]) -> bool:
    """Whether every column is in shortest form and one of them has digits enough to tell."""
    telling = False
    for name, texts in columns.items():
        if _has_padding(texts) or not _shortest_column(texts, values[name]):
            return False
        telling = telling or _most_digits(texts) >= _TELLING_DIGITS
    return telling


def _on_exact_grid(texts: list[str]) -> bool:
    numbers = [Decimal(t) for t in texts]
    if all(x == x.to_integral_value() for x in numbers):
        return True
    steps = {b - a for a, b in pairwise(numbers)}
    return len(numbers) > 2 and len(steps) == 1


def column_quantisation(
    texts: list[str], values: Floats, *, shortest_file: bool, stamps: bool
) -> Floats:
    """Half a unit of the last digit of every entry of a column, (n,); zeros if exact."""
    exact = np.zeros(values.size)
    if shortest_file or (not values.any() and all(t.lstrip("+-") in ("0", "0.0") for t in texts)):
        return exact
    shortest = not _has_padding(texts) and _shortest_column(texts, values)
    if shortest and _most_digits(texts) >= _TELLING_DIGITS:
        return exact
    if stamps and _on_exact_grid(texts):
        return exact
    parts = [_parts(t) for t in texts]
    decimals = {p[1] for p in parts}
    if not any(p[3] for p in parts) and len(decimals) == 1:  # fixed point
        return np.full(values.size, 0.5 * 10.0 ** -decimals.pop())
    digits = max(len(p[0]) for p in parts)
    with np.errstate(divide="ignore", invalid="ignore"):
        power = np.floor(np.log10(np.abs(values)))
    quanta: Floats = 0.5 * 10.0 ** (power - (digits - 1))
    return np.where(values == 0.0, 0.0, quanta)  # floating digits round no number to zero
