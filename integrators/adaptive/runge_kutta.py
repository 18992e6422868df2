"""Explicit Runge-Kutta steps for any table, with up to two error estimates.

The error of 8(5,3) joins two estimates as Hairer, Norsett & Wanner do (Solving Ordinary
Differential Equations I, II.10; from memory): err5^2 / sqrt(err5^2 + err3^2/100).
"""

from __future__ import annotations

from functools import cache
from math import sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.adaptive.tables import TABLES, Table
from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import rate, scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem

__all__ = ["parts_of"]

Integers = npt.NDArray[np.int64]
#: Relative to the sum of the terms' sizes.
ROUNDING = 5e-16


@kernel
def runge_kutta_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step.

    ``table``: rows of a, then b, then the weights of two error estimates.  ``code``: how many
    estimates, and the stage that is the first of the next step (-1 for none).  ``memory``: a
    mark, the stages' rates, the first rate of this step, rows to work in.  What rounding alone can
    make of an estimate does not count as error.
    """
    s, n = table.shape[1], y.size
    place, size = memory[s + 2, :n], memory[s + 3, :n]
    work = s
    if memory[0, 0] == 1.0:
        memory[1, :n] = memory[s + 1, :n]
        work -= 1
    else:
        rate(kind, variable, par, y, memory[1, :n])
    for i in range(1, s):
        for m in range(n):
            total = 0.0
            for j in range(i):
                total += table[i, j] * memory[1 + j, m]
            place[m] = y[m] + h * total
        rate(kind, variable, par, place, memory[1 + i, :n])
    error, other = 0.0, 0.0
    scales(kind, par, y, size)
    for m in range(n):
        total, first, second, noise = 0.0, 0.0, 0.0, 0.0
        for j in range(s):
            total += table[s, j] * memory[1 + j, m]
            first += table[s + 1, j] * memory[1 + j, m]
            second += table[s + 2, j] * memory[1 + j, m]
            noise += abs(table[s + 1, j] * memory[1 + j, m])
        change[m] = h * total
        seen = max(0.0, abs(first) - ROUNDING * noise)
        error = max(error, abs(h) * seen / size[m])
        other = max(other, abs(h * second) / size[m])
        if not np.isfinite(total):
            error = np.inf
    if code[0, 1] >= 0:
        memory[0, 0] = 1.0
        memory[s + 1, :n] = memory[1 + code[0, 1], :n]
    if code[0, 0] == 2 and error > 0.0:
        error *= error / sqrt(error * error + 0.01 * other * other)
    return error / tolerance, work, h


@cache
def _arrays(name: str) -> tuple[Table, Floats, Integers]:
    table = TABLES[name]()
    stages = len(table.b)
    found = np.zeros((stages + 3, stages))
    for i, row in enumerate(table.a):
        found[i, : len(row)] = row
    for i, weights in enumerate((table.b, *table.errors)):
        found[stages + i, : len(weights)] = weights
    return table, found, np.array([[len(table.errors), table.onward]], dtype=np.int64)


def parts_of(name: str, problem: Problem) -> Parts:
    """Coefficients and memory of a table of :data:`TABLES`."""
    table, found, code = _arrays(name)
    if not problem.adaptive:
        found = found.copy()
        found[-2:] = 0.0
    return Parts(
        name="runge_kutta",
        step=runge_kutta_step,
        memory=(len(table.b) + 4, max(problem.size, 1)),
        code=code,
        table=found,
        keeps=True,
        exponent=1.0 / (table.estimate + 1),
    )
