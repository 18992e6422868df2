"""Coefficients of the compositions: consistency, symmetry, order, against published digits."""

from __future__ import annotations

from math import factorial

import numpy as np
import pytest

from truefall.integrators.symplectic.compositions import ORDERS, fractions, sequence

#: Every order condition holds to this.
SMALL = 1e-14


def _times_exponential(levels, letter, coefficient):
    """Words times exp(c X): a series in words of several letters, level n with shape (L,)*n."""
    out = [level.copy() for level in levels]
    for n in range(len(levels)):
        for k in range(1, n + 1):
            place = (Ellipsis, *([letter] * k))
            out[n][place] += levels[n - k] * (coefficient**k / factorial(k))
    return out


def _worst_condition(name, letters, order):
    """How far the product of all flows is from exp(A + B + ...), up to words of length order.

    The coefficient of every word of length n in exp of the sum is 1/n!; this is the whole set of
    order conditions for parts that do not commute, and shares no formula with the code.
    """
    levels = [np.zeros((letters,) * n, dtype=np.longdouble) for n in range(order + 1)]
    levels[0][()] = 1
    code, table = sequence(name, letters)
    for part, time in zip(code[:, 0], table[:, 0], strict=True):
        levels = _times_exponential(levels, int(part), np.longdouble(time))
    return max(float(np.abs(level - 1.0 / factorial(n)).max()) for n, level in enumerate(levels))


@pytest.mark.parametrize("name", ORDERS)
def test_two_parts_meet_every_order_condition(name):
    assert _worst_condition(name, 2, ORDERS[name]) < SMALL


@pytest.mark.parametrize("name", [n for n in ORDERS if ORDERS[n] <= 6])
def test_the_order_stays_with_more_parts(name):
    """Three letters, and four up to order four: map and adjoint in turn, also for S6 and S10."""
    assert _worst_condition(name, 3, ORDERS[name]) < SMALL
    assert _worst_condition(name, 4, min(ORDERS[name], 4)) < SMALL


@pytest.mark.parametrize("name", ORDERS)
def test_the_order_is_not_higher_and_the_check_can_fail(name):
    """Conditions one order up are missed by far."""
    if ORDERS[name] < 8:
        assert _worst_condition(name, 2, ORDERS[name] + 1) > 1e4 * SMALL


@pytest.mark.parametrize("name", ORDERS)
def test_sums_and_symmetry(name):
    alpha = np.array(fractions(name))
    assert abs(alpha.sum() - 1.0) < SMALL
    assert np.array_equal(alpha, alpha[::-1])
    for parts in (2, 3, 4):
        code, table = sequence(name, parts)
        assert np.array_equal(code, code[::-1])
        assert np.abs(table - table[::-1]).max() < SMALL
        for part in range(parts):
            assert abs(table[code == part].sum() - 1.0) < SMALL


def test_published_middle_coefficients_close_the_sums():
    """Middle weights as printed (Yoshida 1990, Kahan & Li 1997, McLachlan 1995): not used."""
    printed = {
        "yoshida-4": -1.7024143839193153,
        "suzuki-4": 1.0 - 4.0 * 0.41449077179437574,
        "yoshida-6": 1.31518632068391121889,
        "kahan-li-6": 0.79854399093482996340,
        "kahan-li-8": -0.60550853383003451170,
        "mclachlan-8": -0.79688793935291635402,
    }
    for name, middle in printed.items():
        alpha = fractions(name)
        assert 2.0 * alpha[len(alpha) // 2] == pytest.approx(middle, abs=2e-15)


def test_closed_forms_of_fourth_order():
    """1/(2 - 2^(1/3)) and 1/(4 - 4^(1/3)), sixteen digits from the literature."""
    assert 2.0 * fractions("yoshida-4")[0] == pytest.approx(1.3512071919596578, abs=1e-15)
    assert 2.0 * fractions("suzuki-4")[0] == pytest.approx(0.41449077179437574, abs=1e-16)


def test_pairs_come_back_for_two_parts():
    """S6 with two parts is the splitting that Blanes & Moan 2002 printed."""
    code, table = sequence("blanes-moan-4", 2)
    assert code[:, 0].tolist() == [0, 1] * 6 + [0]
    a = [0.0792036964311957, 0.353172906049774, -0.0420650803577195]
    b = [0.209515106613362, -0.143851773179818]
    assert table[[0, 2, 4], 0] == pytest.approx(a, abs=1e-15)
    assert table[[1, 3], 0] == pytest.approx(b, abs=1e-15)
