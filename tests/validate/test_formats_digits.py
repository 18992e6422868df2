"""How many digits a text column carries: the rule of text_digits, case by case."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import pytest

from truefall.validate.formats.text_digits import NUMBER, file_quanta

RNG = np.random.default_rng(11)
WIDE = (RNG.normal(size=60) * 10.0 ** RNG.integers(-3, 4, 60)).tolist()
NARROW = RNG.uniform(1.0, 9.9, 60).tolist()
GRID = [10.0 * k for k in range(60)]


def _quanta(column: Sequence[str], name: str = "x", **others: Sequence[str]) -> np.ndarray:
    texts = {name: list(column), **{k: list(v) for k, v in others.items()}}
    assert all(NUMBER.fullmatch(t) for t in column)
    values = {k: np.array([float(t) for t in v]) for k, v in texts.items()}
    return file_quanta(texts, values)[name]


def _honest(column: Sequence[str], truth: Sequence[float], quanta: np.ndarray) -> None:
    """No entry is farther from the number it was rounded from than its quantum."""
    for text, value, quantum in zip(column, truth, quanta.tolist(), strict=True):
        assert abs(float(text) - value) <= quantum * (1 + 1e-9) + abs(value) * 2.3e-16


@pytest.mark.parametrize("form", [repr, lambda v: repr(v).upper(), lambda v: repr(v) + ""])
def test_shortest_form_carries_none(form: Callable[[float], str]) -> None:
    """What repr prints, in either case of the exponent, is the float64 itself."""
    assert not _quanta([form(v) for v in WIDE]).any()


def test_short_entries_are_vouched_for_by_long_ones() -> None:
    """A constant speed in a file of full digits is exact; in a file of few digits it is not."""
    full, few = [repr(v) for v in NARROW], [f"{v:.6g}" for v in NARROW]
    constant = ["0.4"] * 60

    assert not _quanta(constant, "vy", x=full).any()
    assert np.all(_quanta(constant, "vy", x=few) == 0.05)


def test_a_rounded_column_is_not_vouched_for() -> None:
    """Times printed in full say nothing of nine-digit positions, nor does another column."""
    full, few = [repr(v) for v in NARROW], [f"{v:.9g}" for v in NARROW]

    assert _quanta(few, "x", time=full).all()
    assert _quanta(few, "x", y=full).all()


@pytest.mark.parametrize("digits", [3, 6, 9, 12, 15, 16, 17])
@pytest.mark.parametrize("values", [WIDE, NARROW], ids=["wide", "narrow"])
@pytest.mark.parametrize("form", ["e", "g"])
def test_significant_digits(digits: int, values: list[float], form: str) -> None:
    """Half a unit of the last significant digit of each entry, for padded and trimmed columns."""
    column = [f"{v:.{digits - 1 if form == 'e' else digits}{form}}" for v in values]
    quanta = _quanta(column)
    expected = [0.5 * 10.0 ** (int(f"{float(t):.16e}".split("e")[1]) - digits + 1) for t in column]

    assert quanta == pytest.approx(expected, rel=1e-12)
    _honest(column, values, quanta)


@pytest.mark.parametrize("decimals", [0, 1, 6, 12])
@pytest.mark.parametrize("trimmed", [False, True])
def test_fixed_point(decimals: int, trimmed: bool) -> None:
    """Half a unit of the last decimal, also where the last zeros were dropped."""
    column = [
        repr(round(v, decimals)) if trimmed and decimals else f"{v:.{decimals}f}" for v in WIDE
    ]
    quanta = _quanta(column)

    assert quanta == pytest.approx(np.full(60, 0.5 * 10.0**-decimals))
    _honest(column, WIDE, quanta)


def test_powers_of_ten_have_the_right_last_digit() -> None:
    """Just below a power of ten the logarithm rounds up; the digits do not."""
    column = ["9.99999999999999e+02", "1.00000000000000e+03", "1.23456789012345e-05"]

    assert _quanta(column) == pytest.approx([0.5e-12, 0.5e-11, 0.5e-19])


def test_zeros() -> None:
    """Plain zeros are exact; padded decimals are not; significant digits round nothing to zero."""
    assert not _quanta(["0.0", "-0.0", "0"]).any()
    assert np.all(_quanta(["0.000", "0.000"]) == 0.0005)
    assert _quanta(["0.000e+00", "1.234e+00"]).tolist() == [0.0, 0.0005]


@pytest.mark.parametrize(
    "stamps",
    [
        ["0.0", "10.0", "20.0", "30.0"],
        ["0", "7", "9"],
        ["0.0", "0.5"],
        ["0.0", "0.1", "0.2", "0.3"],
        ["0.000000", "0.100000", "0.200000"],
        ["0.0", "0.5", "2.25", "10.0"],
        ["0.00000000e+00", "1.00000000e+01"],
        ["-3.0", "-2.9", "-2.8"],
        [f"{0.12345 * k:.5f}" for k in range(40)],
    ],
)
def test_stamps_meant_exactly(stamps: list[str]) -> None:
    """Whole numbers, dyadic fractions, even steps that a person chose, long even grids."""
    assert not _quanta(stamps, "time", x=[f"{v:.6e}" for v in NARROW[: len(stamps)]]).any()


@pytest.mark.parametrize(
    ("stamps", "quantum"),
    [
        ([f"{np.pi * k / 2:.6f}" for k in range(12)], 5e-7),
        ([f"{np.pi * k:.6f}" for k in range(3)], 5e-7),
        ([f"{v:.3f}" for v in sorted(NARROW)], 5e-4),
        (["0.000", "0.137", "0.452"], 5e-4),
    ],
)
def test_rounded_stamps(stamps: list[str], quantum: float) -> None:
    """Stamps of a grid that the digits do not hold carry their last unit."""
    quanta = _quanta(stamps, "time", x=[f"{v:.6e}" for v in NARROW[: len(stamps)]])

    assert quanta.max() == pytest.approx(quantum)


def test_stamps_of_a_full_file_are_exact() -> None:
    """In a file of shortest forms the stamps are too, few digits or not."""
    stamps = ["0.1", "0.7", "3.3", "12.9"]

    assert not _quanta(stamps, "time", x=[repr(v) for v in WIDE[:4]]).any()


@pytest.mark.parametrize(
    "text", ["", ".", "+", "1e", "1_0", "0x1", "1,5", "nan", "inf", "1d3", "١"]
)
def test_number_refuses(text: str) -> None:
    """Only ASCII decimal numbers pass."""
    assert NUMBER.fullmatch(text) is None
