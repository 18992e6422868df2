"""Kernels of the methods in double-double."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from truefall.integrators.arithmetic import add, multiply
from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats
from truefall.integrators.series import run_tape_in_two_words

__all__ = ["collocation_in_two_words", "horner_in_two_words"]

Integers = npt.NDArray[np.int64]


@kernel
def horner_in_two_words(
    s: Floats, t: Floats, order: int, theta: float, theta_low: float, out: Floats,
    out_low: Floats,
) -> None:  # fmt: skip
    """The series without its constant term at a point, for the rows of the state."""
    for i in range(out.size):
        p, e = s[i, order], t[i, order]
        for k in range(order - 1, 0, -1):
            p, e = multiply(p, e, theta, theta_low)
            p, e = add(p, e, s[i, k], t[i, k])
        out[i], out_low[i] = multiply(p, e, theta, theta_low)


@kernel
def _rate(
    lines: Integers, literals: Floats, results: Integers, par: Floats, par_low: Floats,
    s: Floats, t: Floats, out: Floats, out_low: Floats,
) -> None:  # fmt: skip
    run_tape_in_two_words(lines, literals, par, par_low, s, t, 0, 1.0)
    for i in range(results.size):
        out[i], out_low[i] = s[results[i], 0], t[results[i], 0]


@kernel
def _weighted(
    table: Floats, table_low: Floats, row: int, k: Floats, k_low: Floats, column: int
) -> tuple[float, float]:
    """A row of coefficients times the stages' rates."""
    total, low = 0.0, 0.0
    for j in range(table.shape[1]):
        p, e = multiply(table[row, j], table_low[row, j], k[j, column], k_low[j, column])
        total, low = add(total, low, p, e)
    return total, low


@kernel
def collocation_in_two_words(
    lines: Integers, literals: Floats, results: Integers, par: Floats, par_low: Floats,
    table: Floats, table_low: Floats, y: Floats, y_low: Floats, h: float, h_low: float,
    k: Floats, k_low: Floats, out: Floats, out_low: Floats,
) -> int:  # fmt: skip
    """The change over a step; evaluations, negative if the stages do not settle.

    ``table``: rows of a and then b; ``k`` the stages' rates, whose values so far are the guess.
    """
    stages, n = k.shape
    s, t = np.zeros((lines[-1, 1] + 2, 1)), np.zeros((lines[-1, 1] + 2, 1))
    new, new_low = np.zeros((stages, n)), np.zeros((stages, n))
    last, evaluations, settled = np.inf, 0, False
    for _ in range(400):
        moved, size = 0.0, 0.0
        for i in range(stages):
            for m in range(n):
                p, e = _weighted(table, table_low, i, k, k_low, m)
                p, e = multiply(p, e, h, h_low)
                s[m, 0], t[m, 0] = add(y[m], y_low[m], p, e)
            _rate(lines, literals, results, par, par_low, s, t, new[i], new_low[i])
        evaluations += stages
        for i in range(stages):
            for m in range(n):
                d = (new[i, m] - k[i, m]) + (new_low[i, m] - k_low[i, m])
                moved, size = max(moved, abs(d)), max(size, abs(new[i, m]))
                k[i, m], k_low[i, m] = new[i, m], new_low[i, m]
        if moved == 0.0 or (moved >= last and moved < 1e-27 * size):
            settled = True
            break
        if not moved < 1e60:
            break
        last = moved
    for m in range(n):
        p, e = _weighted(table, table_low, stages, k, k_low, m)
        out[m], out_low[m] = multiply(p, e, h, h_low)
    return evaluations if settled else -evaluations
