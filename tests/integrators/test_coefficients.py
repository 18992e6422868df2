"""Coefficients: conditions to 1e-14, roots and weights recomputed, published values."""

from __future__ import annotations

from fractions import Fraction
from functools import cache

import mpmath
import numpy as np
import pytest

from truefall.integrators.adaptive.gauss_radau import radau_nodes, radau_tableau
from truefall.integrators.adaptive.tables import TABLES
from truefall.integrators.implicit.gauss_legendre import gauss_legendre_tableau

#: Conditions on coefficients in float64.
CONDITION = 1e-14
#: Published to 30 digits (Everhart 1985; Rein & Spiegel 2015, MNRAS 446, 1424); the printed
#: strings are wrong from the 27th digit on, so only 26 are held.
RADAU = (
    "0.0562625605369221464656521910323", "0.180240691736892364987579942809",
    "0.352624717113169637373907770171", "0.547153626330555383001448557652",
    "0.734210177215410531523210607",
)  # fmt: skip


@cache
def trees(order):
    """Rooted trees with that many nodes, each the sorted tuple of its branches."""
    if order == 1:
        return ((),)
    found = set()

    def grow(left, largest, branches):
        if left == 0:
            found.add(tuple(sorted(branches)))
            return
        for size in range(min(left, largest), 0, -1):
            for tree in trees(size):
                grow(left - size, size, (*branches, tree))

    grow(order - 1, order - 1, ())
    return tuple(sorted(found))


@cache
def nodes(tree):
    return 1 + sum(nodes(branch) for branch in tree)


@cache
def density(tree):
    """Butcher's gamma."""
    value = nodes(tree)
    for branch in tree:
        value *= density(branch)
    return value


def residual(a, weights, order):
    """Largest failure of the conditions of exactly this order (Hairer, Norsett & Wanner II.2)."""
    stages = len(weights)
    matrix = np.zeros((stages, stages))
    for i, row in enumerate(a):
        matrix[i, : len(row)] = row
    known = {}

    def elementary(tree):
        if tree not in known:
            value = np.ones(stages)
            for branch in tree:
                value = value * (matrix @ elementary(branch))
            known[tree] = value
        return known[tree]

    return max(abs(float(weights @ elementary(t)) - 1 / density(t)) for t in trees(order))


def test_the_number_of_trees_is_the_known_one():
    """1, 1, 2, 4, 9, 20, 48, 115, 286, 719 (Cayley 1857)."""
    assert [len(trees(n)) for n in range(1, 11)] == [1, 1, 2, 4, 9, 20, 48, 115, 286, 719]


@pytest.mark.parametrize("name", TABLES)
def test_explicit_tables_satisfy_all_conditions_of_their_order_and_not_the_next(name):
    """Sums of terms of size up to 50 (the ninth-order table) carry their rounding."""
    table = TABLES[name]()
    b = np.array(table.b)
    size = max(1.0, max(abs(x) for row in table.a for x in row))

    for order in range(1, table.order + 1):
        assert residual(table.a, b, order) < CONDITION * size
    assert residual(table.a, b, table.order + 1) > 1e-9


@pytest.mark.parametrize("name", [n for n in TABLES if TABLES[n]().errors])
def test_error_estimates_compare_with_a_solution_of_the_order_stated(name):
    """b less the estimate's weights is a method of that order; for 8(5,3) of orders 5 and 3."""
    table = TABLES[name]()
    b = np.array(table.b)
    size = max(1.0, max(abs(x) for row in table.a for x in row))
    orders = (5, 3) if name == "dormand-prince-8" else (table.estimate,)
    for weights, last in zip(table.errors, orders, strict=True):
        weaker = b - np.resize(np.array([*weights, *[0.0] * (len(b) - len(weights))]), len(b))
        for order in range(1, last + 1):
            assert residual(table.a, weaker, order) < 10 * CONDITION * size
        assert residual(table.a, weaker, last + 1) > 1e-6


def test_the_rows_sum_to_the_nodes_where_a_stage_is_the_next_steps_first():
    """Rows that are to be b are b."""
    for table in (make() for make in TABLES.values()):
        if table.onward >= 0:
            row = np.array(table.a[table.onward])
            assert np.abs(row - np.array(table.b)[: row.size]).max() == 0.0


@pytest.mark.parametrize("stages", range(1, 9))
def test_gauss_legendre_coefficients(stages):
    """B(2s), C(s) and symplecticity, and the nodes against mpmath's roots, to 40 digits."""
    c, b, a = gauss_legendre_tableau(stages)
    with mpmath.workdps(50):
        c, b = [mpmath.mpf(str(x)) for x in c], [mpmath.mpf(str(x)) for x in b]
        a = [[mpmath.mpf(str(x)) for x in row] for row in a]
        tiny = mpmath.mpf(10) ** -40
        for k in range(1, 2 * stages + 1):
            assert abs(mpmath.fdot(b, [x ** (k - 1) for x in c]) - mpmath.mpf(1) / k) < tiny
        for k in range(1, stages + 1):
            for x, row in zip(c, a, strict=True):
                assert abs(mpmath.fdot(row, [z ** (k - 1) for z in c]) - x**k / k) < tiny
        for i in range(stages):
            assert abs(mpmath.legendre(stages, 2 * c[i] - 1)) < tiny
            for j in range(stages):
                assert abs(b[i] * a[i][j] + b[j] * a[j][i] - b[i] * b[j]) < tiny


def test_the_two_stage_nodes_are_the_published_ones():
    """1/2 -+ sqrt(3)/6 (Hairer, Lubich & Wanner II.1, from memory)."""
    c, _, a = gauss_legendre_tableau(2)

    assert [float(x) for x in c] == pytest.approx([0.211324865405187, 0.788675134594813], abs=1e-15)
    assert float(a[0][1]) == pytest.approx(0.25 - np.sqrt(3) / 6, abs=1e-15)


def test_gauss_radau_coefficients():
    """Roots of P7 + P8 by mpmath; B(15) and C(8); the published nodes as far as they are right."""
    c, b, a = radau_tableau()
    with mpmath.workdps(50):
        tiny = mpmath.mpf(10) ** -38
        nodes_ = [mpmath.mpf(str(x)) for x in c]
        for x in nodes_:
            assert abs(mpmath.legendre(7, 2 * x - 1) + mpmath.legendre(8, 2 * x - 1)) < tiny
        for k in range(1, 16):
            total = mpmath.fdot([mpmath.mpf(str(x)) for x in b], [x ** (k - 1) for x in nodes_])
            assert abs(total - mpmath.mpf(1) / k) < tiny
        for k in range(1, 9):
            for x, row in zip(nodes_, a, strict=True):
                total = mpmath.fdot(
                    [mpmath.mpf(str(z)) for z in row], [z ** (k - 1) for z in nodes_]
                )
                assert abs(total - x**k / k) < tiny
    for obtained, printed in zip(radau_nodes()[1:], RADAU, strict=False):
        assert abs(Fraction(obtained) - Fraction(printed)) < Fraction(1, 10**26)
