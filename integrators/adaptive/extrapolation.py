"""Gragg-Bulirsch-Stoer: the modified midpoint rule extrapolated in h^2, order 2 k.

(Gragg 1965, SIAM J. Numer. Anal. 2, 384; Bulirsch & Stoer 1966, Numer. Math. 8, 1; Hairer,
Norsett & Wanner, Solving Ordinary Differential Equations I, II.9; from memory.)  The order stays
as chosen; the step is controlled by the difference of the last two columns.  Substeps 2, 4, 6, ...
without the smoothing step, as Deuflhard advises; what is extrapolated are changes, not states, so
that the digits of small steps are kept.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import rate, scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem

__all__ = ["parts"]

Integers = npt.NDArray[np.int64]
#: What rounding makes of a column, relative to the change; it does not count as error.
ROUNDING = 1e-15


@kernel
def _midpoint(
    kind: int, variable: int, par: Floats, y: Floats, h: float, count: int, first: Floats,
    work: Floats, out: Floats,
) -> None:  # fmt: skip
    """Change over ``h`` by ``count`` midpoint substeps; ``first`` is the rate at y."""
    n = y.size
    d = h / count
    for m in range(n):
        work[0, m] = 0.0
        work[1, m] = d * first[m]
        work[3, m] = y[m] + work[1, m]
    for _ in range(1, count):
        rate(kind, variable, par, work[3, :n], work[2, :n])
        for m in range(n):
            new = work[0, m] + 2.0 * d * work[2, m]
            work[0, m] = work[1, m]
            work[1, m] = new
            work[3, m] = y[m] + new
    out[:n] = work[1, :n]


@kernel
def extrapolation_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step of ``code[0, 0]`` columns.  ``memory``: the columns, then six rows to work in."""
    columns, n = code[0, 0], y.size
    first, size = memory[columns, :n], memory[columns + 1, :n]
    work, evaluations, error = memory[columns + 2 :], 1, 0.0
    rate(kind, variable, par, y, first)
    scales(kind, par, y, size)
    for k in range(columns):
        count = 2 * (k + 1)
        _midpoint(kind, variable, par, y, h, count, first, work, memory[k])
        evaluations += count - 1
        for j in range(k - 1, -1, -1):
            ratio = count / (2.0 * (j + 1))
            factor = 1.0 / (ratio * ratio - 1.0)
            for m in range(n):
                d = (memory[j + 1, m] - memory[j, m]) * factor
                if j == 0 and k == columns - 1:
                    seen = max(0.0, abs(d) - ROUNDING * abs(memory[j + 1, m]))
                    error = max(error, seen / size[m])
                memory[j, m] = memory[j + 1, m] + d
    total = 0.0
    for m in range(n):
        change[m] = memory[0, m]
        total += change[m]
    if not np.isfinite(total):
        error = np.inf
    return (error / tolerance if code[0, 1] == 1 else error * 0.0), evaluations, h


def parts(problem: Problem) -> Parts:
    """Memory for ``order / 2`` columns."""
    columns = problem.order // 2
    return Parts(
        name="extrapolation",
        step=extrapolation_step,
        memory=(columns + 6, problem.size),
        code=np.array([[columns, int(problem.adaptive)]], dtype=np.int64),
        exponent=1.0 / (2 * columns - 1),
    )
