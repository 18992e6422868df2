"""Gauss-Legendre collocation, order 2 s, symplectic; stages iterated to round-off.

(Hairer, Lubich & Wanner, Geometric Numerical Integration, II.1 and VIII.6 for the iteration with
compensated sums; from memory.)  The first guess of the stages continues the collocation
polynomial of the step before.
"""

from __future__ import annotations

from decimal import Decimal, localcontext
from functools import cache

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import rate, scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem

__all__ = ["gauss_legendre_tableau", "parts", "two_words"]

Integers = npt.NDArray[np.int64]
#: Decimal digits in which coefficients are found.
DIGITS = 60


def _legendre(last: int, x: Decimal) -> list[Decimal]:
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
                p = _legendre(stages, x)
                slope = stages * (x * p[-1] - p[-2]) / (x * x - 1)
                x -= p[-1] / slope
            p = _legendre(stages, x)
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


def two_words(values: list[Decimal]) -> tuple[Floats, Floats]:
    """The nearest float64 of each value, and what is left."""
    high = np.array([float(v) for v in values])
    with localcontext() as context:
        context.prec = DIGITS
        low = np.array([float(v - Decimal(float(h))) for v, h in zip(values, high, strict=True)])
    return high, low


@kernel
def gauss_legendre_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step.

    ``table``: rows of a, then of its second words, then b, its second words, and the matrix that
    continues the stages of the step before (for equal steps).  ``memory``: a row with a mark
    and the step, the stages' rates, two rows to work in.
    """
    s, n = table.shape[1], y.size
    work = 1
    if memory[0, 0] == 1.0 and memory[0, 1] == h:
        for i in range(s):
            for m in range(n):
                total = 0.0
                for j in range(s):
                    total += table[2 * s + 2 + i, j] * memory[1 + j, m]
                memory[1 + s + i, m] = total
        for i in range(s):
            memory[1 + i, :n] = memory[1 + s + i, :n]
    else:
        rate(kind, variable, par, y, change)
        for i in range(s):
            memory[1 + i, :n] = change
    size, place = memory[1 + 2 * s, :n], memory[2 + 2 * s, :n]
    scales(kind, par, y, size)
    last, settled = np.inf, False
    for _ in range(200):
        moved = 0.0
        for i in range(s):
            for m in range(n):
                total, low = 0.0, 0.0
                for j in range(s):
                    total += table[i, j] * memory[1 + j, m]
                    low += table[s + i, j] * memory[1 + j, m]
                place[m] = y[m] + h * (total + low)
            rate(kind, variable, par, place, memory[1 + s + i, :n])
        work += s
        for i in range(s):
            for m in range(n):
                d = memory[1 + s + i, m] - memory[1 + i, m]
                moved = max(moved, abs(h * d) / size[m])
                memory[1 + i, m] += d
        if moved == 0.0 or (moved >= last and moved < 1e-12):
            settled = True
            break
        if not moved < 1e6:
            break
        last = moved
    for m in range(n):
        total, low = 0.0, 0.0
        for j in range(s):
            total += table[2 * s, j] * memory[1 + j, m]
            low += table[2 * s + 1, j] * memory[1 + j, m]
        change[m] = h * (total + low)
    memory[0, 0], memory[0, 1] = 1.0, h
    return (0.0 if settled else np.nan), work, h


@cache
def _table(stages: int) -> Floats:
    c, b, a = gauss_legendre_tableau(stages)
    rows = [two_words(row) for row in a]
    weights = two_words(b)
    onward = []
    for node in c:
        with localcontext() as context:
            context.prec = DIGITS
            at, row = node + 1, []
            for j, own in enumerate(c):
                value = Decimal(1)
                for k, other in enumerate(c):
                    if k != j:
                        value *= (at - other) / (own - other)
                row.append(float(value))
            onward.append(np.array(row))
    return np.array([r[0] for r in rows] + [r[1] for r in rows] + [*weights] + onward)


def parts(problem: Problem) -> Parts:
    """Coefficients and memory for ``order / 2`` stages."""
    stages = problem.order // 2
    return Parts(
        name="gauss_legendre",
        step=gauss_legendre_step,
        memory=(2 * stages + 3, max(problem.size, 2)),
        table=_table(stages),
        keeps=True,
    )
