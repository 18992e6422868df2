"""Gauss-Radau collocation of order 15, eight nodes with the first at the start of the step.

(Everhart 1985, in Dynamics of Comets, 185; Rein & Spiegel 2015, MNRAS 446, 1424, for the step
control; from memory.)  The nodes are the roots of P_7 + P_8, found here to 50 digits.  The rate is
a polynomial of degree 7 through its values at the nodes; its stages are iterated to round-off from
the continuation of the step before.  The error is estimated from the polynomial's highest power.
"""

from __future__ import annotations

from decimal import Decimal, localcontext
from functools import cache

import numpy as np

from truefall.integrators.equations.types import Floats
from truefall.integrators.implicit.collocation import DIGITS, collocation_parts, collocation_table
from truefall.integrators.implicit.gauss_legendre import legendre
from truefall.integrators.methods import Parts, Problem

__all__ = ["parts", "radau_nodes", "radau_tableau"]

STAGES = 8


def _inverse(matrix: list[list[Decimal]]) -> list[list[Decimal]]:
    """Gauss and Jordan, largest pivot first."""
    n = len(matrix)
    rows = [[*row, *(Decimal(int(i == j)) for j in range(n))] for i, row in enumerate(matrix)]
    for i in range(n):
        best = max(range(i, n), key=lambda k: abs(rows[k][i]))
        rows[i], rows[best] = rows[best], rows[i]
        rows[i] = [x / rows[i][i] for x in rows[i]]
        for k in range(n):
            if k != i:
                rows[k] = [x - rows[k][i] * y for x, y in zip(rows[k], rows[i], strict=True)]
    return [row[n:] for row in rows]


@cache
def radau_nodes() -> list[Decimal]:
    """Roots of P_7 + P_8 on (0, 1), the first 0."""
    with localcontext() as context:
        context.prec = DIGITS
        rough = np.polynomial.legendre.legroots([0.0] * 7 + [1.0, 1.0])
        nodes = [Decimal(0)]
        for start in sorted(float(x.real) for x in rough)[1:]:
            x = Decimal(start)
            for _ in range(5):
                p = legendre(8, x)
                value = p[7] + p[8]
                slope = (7 * (x * p[7] - p[6]) + 8 * (x * p[8] - p[7])) / (x * x - 1)
                x -= value / slope
            nodes.append((x + 1) / 2)
        return nodes


@cache
def radau_tableau() -> tuple[list[Decimal], list[Decimal], list[list[Decimal]]]:
    """Nodes c, weights b and matrix a: ``sum_j a_ij c_j^k = c_i^(k+1)/(k+1)`` for k = 0 ... 7."""
    c = radau_nodes()
    with localcontext() as context:
        context.prec = DIGITS
        inverse = _inverse([[x**k if k else Decimal(1) for x in c] for k in range(STAGES)])

        def integrals(x: Decimal) -> list[Decimal]:
            powers = [x ** (k + 1) / (k + 1) for k in range(STAGES)]
            return [sum((inverse[j][k] * powers[k] for k in range(STAGES)), Decimal(0))
                    for j in range(STAGES)]  # fmt: skip

        return c, integrals(Decimal(1)), [integrals(x) for x in c]


@cache
def _table() -> Floats:
    c, b, a = radau_tableau()
    with localcontext() as context:
        context.prec = DIGITS
        top = [row[-1] / STAGES for row in _inverse([[x**k if k else Decimal(1) for x in c]
                                                     for k in range(STAGES)])]  # fmt: skip
    return collocation_table(c, b, a, top)


def parts(problem: Problem) -> Parts:
    """Coefficients and memory; steps controlled in the sixteenth root."""
    return collocation_parts(_table(), problem, order=16)
