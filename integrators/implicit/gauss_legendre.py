"""Gauss-Legendre collocation, order 2 s, symplectic.

(Hairer, Lubich & Wanner, Geometric Numerical Integration, II.1; from memory.)
"""

from __future__ import annotations

from decimal import Decimal, localcontext
from functools import cache

import numpy as np

from truefall.integrators.equations.types import Floats
from truefall.integrators.implicit.collocation import DIGITS, collocation_parts, collocation_table
from truefall.integrators.methods import Parts, Problem

__all__ = ["gauss_legendre_tableau", "legendre", "parts"]


def legendre(last: int, x: Decimal) -> list[Decimal]:
    """P_0 ... P_last at a point, by Bonnet's recurrence."""
    values = [Decimal(1), x]
    for k in range(1, last):
        values.append(((2 * k + 1) * x * values[k] - k * values[k - 1]) / (k + 1))
    return values


@cache
def gauss_legendre_tableau(
    stages: int,
) -> tuple[list[Decimal], list[Decimal], list[list[Decimal]]]:
    """Nodes c, weights b and matrix a of the collocation method at Legendre's roots, 50 digits.

    Order ``2 stages``.  The matrix is the integral of Lagrange's polynomials, written with
    Legendre's, so that nothing cancels::

        a_ij = b_j (x_i + 1 + sum_k P_k(x_j) (P_(k+1) - P_(k-1))(x_i))/2,  k = 1 ... stages - 1
    """
    with localcontext() as context:
        context.prec = DIGITS
        roots, values, b = [], [], []
        for rough in np.polynomial.legendre.leggauss(stages)[0]:
            x = Decimal(float(rough)) if stages % 2 == 0 or abs(rough) > 1e-9 else Decimal(0)
            for _ in range(4):
                p = legendre(stages, x)
                slope = stages * (x * p[-1] - p[-2]) / (x * x - 1)
                x -= p[-1] / slope
            p = legendre(stages, x)
            roots.append(x)
            values.append(p)
            b.append((1 - x * x) / (stages * p[-2]) ** 2)
        a = []
        for x, p in zip(roots, values, strict=True):
            row = []
            for weight, q in zip(b, values, strict=True):
                parts_ = (q[k] * (p[k + 1] - p[k - 1]) for k in range(1, stages))
                row.append(weight * (x + 1 + sum(parts_, Decimal(0))) / 2)
            a.append(row)
        return [(x + 1) / 2 for x in roots], b, a


@cache
def _table(stages: int) -> Floats:
    c, b, a = gauss_legendre_tableau(stages)
    return collocation_table(c, b, a)


def parts(problem: Problem) -> Parts:
    """Coefficients and memory for ``order / 2`` stages."""
    stages = problem.order // 2
    return collocation_parts(_table(stages), problem)
