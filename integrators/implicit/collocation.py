"""Steps of collocation methods: stages iterated until rounding alone moves them.

(Hairer, Lubich & Wanner, Geometric Numerical Integration, II.1 and VIII.6; Hairer, McLachlan &
Razakarivony 2008, BIT 48, 231, for coefficients in two words, without which the energy drifts;
from memory.)  The first guess of the stages continues the collocation polynomial of the step
before, by barycentric weights, so that it serves steps of any length.
"""

from __future__ import annotations

from collections.abc import Sequence
from decimal import Decimal, localcontext

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import rate, scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem

__all__ = ["DIGITS", "collocation_parts", "collocation_step", "collocation_table", "two_words"]

Integers = npt.NDArray[np.int64]
#: Decimal digits in which coefficients are found.
DIGITS = 60


def two_words(values: Sequence[Decimal]) -> tuple[Floats, Floats]:
    """The nearest float64 of each value, and what is left."""
    high = np.array([float(v) for v in values])
    with localcontext() as context:
        context.prec = DIGITS
        low = np.array([float(v - Decimal(float(h))) for v, h in zip(values, high, strict=True)])
    return high, low


def collocation_table(
    c: Sequence[Decimal],
    b: Sequence[Decimal],
    a: Sequence[Sequence[Decimal]],
    error: Sequence[Decimal] | None = None,
) -> Floats:
    """Rows of a, then of its second words, then b, its second words, c, barycentric weights, error.

    Parameters
    ----------
    c, b, error : (s,)
        Nodes; weights; weights of the error estimate.
    a : (s, s)
    """
    rows = [two_words(row) for row in a]
    barycentric = []
    with localcontext() as context:
        context.prec = DIGITS
        for j, own in enumerate(c):
            value = Decimal(1)
            for k, other in enumerate(c):
                if k != j:
                    value /= own - other
            barycentric.append(float(value))
    last = [0.0] * len(c) if error is None else [float(x) for x in error]
    return np.array(
        [r[0] for r in rows] + [r[1] for r in rows] + [*two_words(b)]
        + [np.array([float(x) for x in c]), np.array(barycentric), np.array(last)]
    )  # fmt: skip


@kernel
def _continue(table: Floats, ratio: float, n: int, stages: Floats, new: Floats) -> None:
    """The rates of the last step's polynomial at the nodes of a step ``ratio`` times as long."""
    s = table.shape[1]
    nodes, weights = table[2 * s + 2], table[2 * s + 3]
    for i in range(s):
        x = 1.0 + nodes[i] * ratio
        below = 0.0
        new[i, :n] = 0.0
        for j in range(s):
            weight = weights[j] / (x - nodes[j])
            below += weight
            for m in range(n):
                new[i, m] += weight * stages[j, m]
        for m in range(n):
            new[i, m] /= below
    for i in range(s):
        stages[i, :n] = new[i, :n]


@kernel
def _iterate(
    kind: int, variable: int, par: Floats, table: Floats, y: Floats, h: float, memory: Floats,
    place: Floats, size: Floats,
) -> tuple[bool, int]:  # fmt: skip
    """Put the stages through the equations until they settle; whether they did, and the work."""
    s, n = table.shape[1], y.size
    last, work = np.inf, 0
    for _ in range(300):
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
            return True, work
        if not moved < 1e6:
            return False, work
        last = moved
    return False, work


@kernel
def collocation_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step; table as of :func:`collocation_table`.

    ``memory``: a row with a mark and the last step, the stages' rates, rows to work in.  With
    ``code[0, 0]`` 1 the error is estimated from the highest power of the polynomial: the method
    converges with twice the order of that term, so its square is held against the tolerance.
    """
    s, n = table.shape[1], y.size
    place, size = memory[1 + 2 * s, :n], memory[2 + 2 * s, :n]
    work = 0
    ratio = h / memory[0, 1] if memory[0, 0] == 1.0 else 0.0
    if 0.0 < ratio < 3.0:
        _continue(table, ratio, n, memory[1 : 1 + s], memory[1 + s : 1 + 2 * s])
    else:
        rate(kind, variable, par, y, change)
        work = 1
        for i in range(s):
            memory[1 + i, :n] = change
    scales(kind, par, y, size)
    settled, evaluations = _iterate(kind, variable, par, table, y, h, memory, place, size)
    error = 0.0
    for m in range(n):
        total, low, top = 0.0, 0.0, 0.0
        for j in range(s):
            total += table[2 * s, j] * memory[1 + j, m]
            low += table[2 * s + 1, j] * memory[1 + j, m]
            top += table[2 * s + 4, j] * memory[1 + j, m]
        change[m] = h * (total + low)
        error = max(error, abs(h * top) / size[m])
    memory[0, 0], memory[0, 1] = 1.0, h
    if code[0, 0] == 1:
        error *= error / tolerance
    else:
        error = 0.0
    return (error if settled else np.nan), work + evaluations, h


def collocation_parts(table: Floats, problem: Problem, order: int = 0) -> Parts:
    """Parts of a collocation method; ``order`` of the step control where there is one."""
    stages = table.shape[1]
    return Parts(
        name="collocation",
        step=collocation_step,
        memory=(2 * stages + 3, max(problem.size, 2)),
        code=np.array([[int(problem.adaptive and order > 0)]], dtype=np.int64),
        table=table,
        keeps=True,
        exponent=1.0 / max(order, 1),
    )
