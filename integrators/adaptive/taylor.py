"""Taylor series of any order; the step from the series' own decay.

(Jorba & Zou 2005, Exp. Math. 14, 99; from memory.)  The step is the largest at which the last two
terms stay below the tolerance, each component measured against its scale.
"""

from __future__ import annotations

from math import floor, log2

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import rate, scales
from truefall.integrators.equations.tapes import rate_tape
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem
from truefall.integrators.series import taylor

__all__ = ["decay", "natural_unit", "parts", "power_of_two"]

Integers = npt.NDArray[np.int64]


@kernel
def decay(s: Floats, size: Floats, count: int, order: int, tolerance: float) -> float:
    """The step at which the last two terms of every row reach the tolerance."""
    found = np.inf
    for k in range(order - 1, order + 1):
        largest = 0.0
        for i in range(count):
            largest = max(largest, abs(s[i, k]) / size[i])
        if largest > 0.0:
            found = min(found, (tolerance / largest) ** (1.0 / k))
    return found


@kernel
def power_of_two(size: float) -> float:
    """The power of two next below a positive number: dividing by it rounds nothing."""
    return float(2.0 ** floor(log2(size)))


@kernel
def natural_unit(
    kind: int, variable: int, par: Floats, y: Floats, out: Floats, size: Floats
) -> float:  # fmt: skip
    """The time in which the fastest component changes by its scale."""
    rate(kind, variable, par, y, out)
    scales(kind, par, y, size)
    fastest = 1e-300
    for i in range(y.size):
        fastest = max(fastest, abs(out[i]) / size[i])
    return 1.0 / fastest


@kernel
def taylor_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step; code and literals are the tape's.

    ``memory`` (rows + 1, order + 1) keeps the series in powers of (sigma/unit), and in its last
    row this unit and the next.  A last row of ``table`` that begins with 1 asks for a step chosen
    here.
    """
    order = memory.shape[1] - 1
    units = memory[-1]
    if units[1] == 0.0:
        units[1] = power_of_two(natural_unit(kind, variable, par, y, change, np.zeros(y.size)))
    units[0] = units[1]
    for i in range(y.size):
        memory[i, 0] = y[i]
    taylor(code, table[0], par, memory, order, units[0])
    if table[1, 0] == 1.0:
        scales(kind, par, y, change)
        own = units[0] * decay(memory, change, y.size, order, tolerance)
        if own < abs(h):
            h = own if h > 0.0 else -own
    if h != 0.0 and np.isfinite(h):
        units[1] = power_of_two(abs(h))
    horner(memory, y.size, order, h / units[0], change)
    return 0.0, 1, h


@kernel
def horner(s: Floats, count: int, order: int, theta: float, change: Floats) -> None:
    """The series without its constant term at a point."""
    for i in range(count):
        total = s[i, order]
        for k in range(order - 1, 0, -1):
            total = total * theta + s[i, k]
        change[i] = total * theta


@kernel
def taylor_inside(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, theta: float, before: Floats, memory: Floats, scratch: Floats, change: Floats,
) -> int:  # fmt: skip
    """The change at a point of the step from the series just made."""
    horner(memory, y.size, memory.shape[1] - 1, theta / memory[-1, 0], change)
    return 0


def parts(problem: Problem) -> Parts:
    """Tape, literals and memory for a problem."""
    tape = rate_tape(problem.kind, problem.variable, problem.size)
    table = np.zeros((2, max(1, tape.literals.size)))
    table[0, : tape.literals.size] = tape.literals
    table[1, 0] = 1.0 if problem.adaptive else 0.0
    return Parts(
        name="taylor",
        step=taylor_step,
        memory=(tape.rows + 1, problem.order + 1),
        code=tape.integrating(),
        table=table,
        dense=taylor_inside,
        exponent=1.0 / problem.order,
        chooses=True,
    )
