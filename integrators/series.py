"""Running a tape on truncated power series, one order at a time, in float64 and in two words.

``s`` holds a series in each row; running a tape at order ``k`` sets coefficient ``k`` of every
row of the tape from coefficients ``0 ... k`` of its operands (Moore 1966, Interval Analysis,
chapter 11; Jorba & Zou 2005, Exp. Math. 14, 99; from memory).
"""

from __future__ import annotations

from math import atan2, cos, sin, sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.arithmetic import (
    add,
    angle,
    cosine_and_sine,
    divide,
    multiply,
    root,
    two_sum,
)
from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats

__all__ = [
    "evaluate",
    "evaluate_in_two_words",
    "evaluate_many",
    "run_tape",
    "run_tape_in_two_words",
    "taylor",
]
__all__ += ["taylor_in_two_words"]

Integers = npt.NDArray[np.int64]


@kernel
def run_tape(
    lines: Integers, literals: Floats, par: Floats, s: Floats, k: int, unit: float
) -> None:  # fmt: skip
    """Set coefficient ``k`` of every row of a tape; operations as numbered in tape.py.

    Powers are of (sigma/unit), so that coefficients neither overflow nor vanish.  The sums stand
    here in full: a call for each would cost more than the sum.
    """
    for line in range(lines.shape[0]):
        op, out, i, j, at = (
            lines[line, 0], lines[line, 1], lines[line, 2], lines[line, 3], lines[line, 4],
        )  # fmt: skip
        if op == 0:
            even, odd = 0.0, 0.0
            for m in range(0, k, 2):
                even += s[i, m] * s[j, k - m]
                odd += s[i, m + 1] * s[j, k - m - 1]
            if k % 2 == 0:
                even += s[i, k] * s[j, 0]
            s[out, k] = even + odd
        elif op == 1 or (op == 3 and k > 0):
            row, first = (i, 0) if op == 1 else (out, 1)
            total = 0.0
            for m in range(first, (k + 1) // 2):
                total += s[row, m] * s[row, k - m]
            total *= 2.0
            if k % 2 == 0:
                total += s[row, k // 2] * s[row, k // 2]
            s[out, k] = total if op == 1 else 0.5 * (s[i, k] - total) / s[out, 0]
        elif op == 2:
            even, odd = s[i, k], 0.0
            for m in range(0, k - 1, 2):
                even -= s[out, m] * s[j, k - m]
                odd += s[out, m + 1] * s[j, k - m - 1]
            if k % 2 == 1:
                even -= s[out, k - 1] * s[j, 1]
            s[out, k] = (even - odd) / s[j, 0]
        elif op == 3:
            s[out, 0] = sqrt(s[i, 0])
        elif op == 4:
            value = literals[at + 2] if k == 0 else 0.0
            if i >= 0:
                value += literals[at] * s[i, k]
            if j >= 0:
                value += literals[at + 1] * s[j, k]
            s[out, k] = value
        elif op == 5:
            s[out, k] = s[i, k] * s[j, 0]
        elif op == 6:
            s[out, k] = par[i] if k == 0 else 0.0
        elif op == 8:
            s[out, k] = atan2(s[i, k], s[j, k])
        elif op == 9:
            s[out, k + 1] = unit * s[i, k] / (k + 1.0)
        elif k == 0:
            s[out, 0] = cos(s[i, 0])
            s[out + 1, 0] = sin(s[i, 0])
        else:
            c, d = 0.0, 0.0
            for m in range(1, k + 1):
                c -= m * s[i, m] * s[out + 1, k - m]
                d += m * s[i, m] * s[out, k - m]
            s[out, k] = c / k
            s[out + 1, k] = d / k


@kernel
def taylor(
    lines: Integers, literals: Floats, par: Floats, s: Floats, order: int, unit: float
) -> None:  # fmt: skip
    """Coefficients 1 to ``order`` of the state's rows from coefficient 0."""
    for k in range(order):
        run_tape(lines, literals, par, s, k, unit)


@kernel
def evaluate(
    lines: Integers, literals: Floats, results: Integers, par: Floats, given: Floats, out: Floats
) -> None:
    """Fill ``out`` (n, results) from ``given`` (n, operands), row by row, at order 0."""
    s = np.empty((lines[-1, 1] + 2, 1))
    for row in range(given.shape[0]):
        for i in range(given.shape[1]):
            s[i, 0] = given[row, i]
        run_tape(lines, literals, par, s, 0, 1.0)
        for i in range(results.size):
            out[row, i] = s[results[i], 0]


@kernel
def evaluate_many(
    lines: Integers, literals: Floats, results: Integers, pars: Floats, given: Floats,
    out: Floats, first: int, end: int,
) -> None:  # fmt: skip
    """As :func:`evaluate` for many orbits, (m, n, operands) to (m, n, results)."""
    for o in range(first, end):
        evaluate(lines, literals, results, pars[o], given[o], out[o])


@kernel
def _dot_in_two_words(
    s: Floats, t: Floats, i: int, j: int, first: int, last: int, k: int
) -> tuple[float, float]:
    total, low = 0.0, 0.0
    for m in range(first, last):
        p, e = multiply(s[i, m], t[i, m], s[j, k - m], t[j, k - m])
        total, low = add(total, low, p, e)
    return total, low


@kernel
def _square_in_two_words(s: Floats, t: Floats, i: int, first: int, k: int) -> tuple[float, float]:
    total, low = _dot_in_two_words(s, t, i, i, first, (k + 1) // 2, k)
    total, low = 2.0 * total, 2.0 * low
    if k % 2 == 0 and k // 2 >= first:
        m = k // 2
        p, e = multiply(s[i, m], t[i, m], s[i, m], t[i, m])
        total, low = add(total, low, p, e)
    return total, low


@kernel
def _circle_in_two_words(s: Floats, t: Floats, out: int, i: int, k: int) -> None:
    """Cosine and sine of row ``i``."""
    if k == 0:
        c, cl, d, dl = cosine_and_sine(s[i, 0], t[i, 0])
    else:
        c, cl, d, dl = 0.0, 0.0, 0.0, 0.0
        for m in range(1, k + 1):
            q, ql = multiply(s[i, m], t[i, m], float(m), 0.0)
            p, e = multiply(q, ql, s[out + 1, k - m], t[out + 1, k - m])
            c, cl = add(c, cl, -p, -e)
            p, e = multiply(q, ql, s[out, k - m], t[out, k - m])
            d, dl = add(d, dl, p, e)
        c, cl = divide(c, cl, float(k), 0.0)
        d, dl = divide(d, dl, float(k), 0.0)
    s[out, k], t[out, k] = c, cl
    s[out + 1, k], t[out + 1, k] = d, dl


@kernel
def _linear_in_two_words(
    literals: Floats, at: int, s: Floats, t: Floats, i: int, j: int, k: int
) -> tuple[float, float]:
    value, low = (literals[at + 2] if k == 0 else 0.0), 0.0
    if i >= 0:
        p, e = multiply(s[i, k], t[i, k], literals[at], 0.0)
        value, low = add(value, low, p, e)
    if j >= 0:
        p, e = multiply(s[j, k], t[j, k], literals[at + 1], 0.0)
        value, low = add(value, low, p, e)
    return value, low


@kernel
def run_tape_in_two_words(
    lines: Integers,
    literals: Floats,
    par: Floats,
    par_low: Floats,
    s: Floats,
    t: Floats,
    k: int,
    unit: float,
) -> None:
    """As :func:`run_tape`; ``t`` holds the second words; ``unit`` is a power of two."""
    for line in range(lines.shape[0]):
        op, out, i, j, at = (
            lines[line, 0], lines[line, 1], lines[line, 2], lines[line, 3], lines[line, 4],
        )  # fmt: skip
        value, low = 0.0, 0.0
        if op == 0:
            value, low = _dot_in_two_words(s, t, i, j, 0, k + 1, k)
        elif op == 1:
            value, low = _square_in_two_words(s, t, i, 0, k)
        elif op == 2:
            p, e = _dot_in_two_words(s, t, out, j, 0, k, k)
            p, e = add(s[i, k], t[i, k], -p, -e)
            value, low = divide(p, e, s[j, 0], t[j, 0])
        elif op == 3 and k == 0:
            value, low = root(s[i, 0], t[i, 0])
        elif op == 3:
            p, e = _square_in_two_words(s, t, out, 1, k)
            p, e = add(s[i, k], t[i, k], -p, -e)
            value, low = divide(0.5 * p, 0.5 * e, s[out, 0], t[out, 0])
        elif op == 4:
            value, low = _linear_in_two_words(literals, at, s, t, i, j, k)
        elif op == 5:
            value, low = multiply(s[i, k], t[i, k], s[j, 0], t[j, 0])
        elif op == 6 and k == 0:
            value, low = par[i], par_low[i]
        elif op == 8:
            value, low = angle(s[i, k], t[i, k], s[j, k], t[j, k])
        if op == 9:
            s[out, k + 1], t[out, k + 1] = divide(s[i, k] * unit, t[i, k] * unit, k + 1.0, 0.0)
        elif op == 7:
            _circle_in_two_words(s, t, out, i, k)
        else:
            s[out, k], t[out, k] = two_sum(value, low)


@kernel
def taylor_in_two_words(
    lines: Integers,
    literals: Floats,
    par: Floats,
    par_low: Floats,
    s: Floats,
    t: Floats,
    order: int,
    unit: float,
) -> None:
    """As :func:`taylor`; ``t`` holds the second words."""
    for k in range(order):
        run_tape_in_two_words(lines, literals, par, par_low, s, t, k, unit)


@kernel
def evaluate_in_two_words(
    lines: Integers,
    literals: Floats,
    results: Integers,
    par: Floats,
    par_low: Floats,
    given: Floats,
    given_low: Floats,
    out: Floats,
    out_low: Floats,
) -> None:
    """As :func:`evaluate`; second words in the arrays named low."""
    s = np.zeros((lines[-1, 1] + 2, 1))
    t = np.zeros((lines[-1, 1] + 2, 1))
    for row in range(given.shape[0]):
        for i in range(given.shape[1]):
            s[i, 0], t[i, 0] = given[row, i], given_low[row, i]
        run_tape_in_two_words(lines, literals, par, par_low, s, t, 0, 1.0)
        for i in range(results.size):
            out[row, i], out_low[row, i] = s[results[i], 0], t[results[i], 0]
