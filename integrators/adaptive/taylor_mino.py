"""Taylor series of the orbit in Mino time, written out for speed: the areal chart.

The same series as the tape of ``equations/mino.py`` would give, from these relations::

    w' = mu + L^2 (3 u^2 - u),   r u = 1,   q (1 - 2 u) = 1,
    lambda' = r^2,   T' = E r^2 q = E (r^2 + 2 r + 4 q)

The rotation n' = m, m' = -L^2 n has its cosine and sine for a series.
"""

from __future__ import annotations

from math import sin, sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.adaptive.taylor import decay, natural_unit, power_of_two
from truefall.integrators.arithmetic import two_product, two_sum
from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem

__all__ = ["parts", "taylor_mino_inside", "taylor_mino_step"]

Integers = npt.NDArray[np.int64]

# Rows of the memory: u, w, T, lambda, r, q, units.
_ROWS = 7


@kernel
def mino_orbit(par: Floats, s: Floats, order: int, unit: float) -> None:
    """Coefficients 1 to ``order`` of u, w, T, lambda from coefficient 0.

    Products by symmetry, pair by pair, all in one loop, in which a step spends its time.
    """
    energy, mu, square = par[0], par[1], par[2]
    u, w, time, clock, r, q = s[0], s[1], s[2], s[3], s[4], s[5]
    r[0], q[0] = 1.0 / u[0], 1.0 / (1.0 - 2.0 * u[0])
    for k in range(order):
        uu, rr, ur, uq = 0.0, 0.0, 0.0, 0.0
        for m in range(1, (k + 1) // 2):
            uu += u[m] * u[k - m]
            rr += r[m] * r[k - m]
            ur += u[m] * r[k - m] + u[k - m] * r[m]
            uq += u[m] * q[k - m] + u[k - m] * q[m]
        uu, rr = 2.0 * uu, 2.0 * rr
        if k == 0:
            uu, rr = u[0] * u[0], r[0] * r[0]
        else:
            if k % 2 == 0:
                m = k // 2
                uu += u[m] * u[m]
                rr += r[m] * r[m]
                ur += u[m] * r[m]
                uq += u[m] * q[m]
            r[k] = -r[0] * (ur + u[k] * r[0])
            q[k] = 2.0 * q[0] * (uq + u[k] * q[0])
            uu += 2.0 * u[0] * u[k]
            rr += 2.0 * r[0] * r[k]
        force = square * (3.0 * uu - u[k])
        # Divided, not multiplied by 1/(k + 1): that number's rounding would be the same in every
        # step, and the energy would drift.
        n = k + 1.0
        w[k + 1] = unit * (mu + force if k == 0 else force) / n
        u[k + 1] = unit * w[k] / n
        clock[k + 1] = unit * rr / n
        time[k + 1] = unit * energy * (rr + 2.0 * r[k] + 4.0 * q[k]) / n


@kernel
def _unrolled(square: float, e: float, f: float) -> float:
    """What (1 + e)^2 + L^2 f^2 = 1 asks to be added to e, the cosine less one, as a second word.

    Steps of the same length recur; the same rounding of e in each would stretch or shrink the
    directions steadily.
    """
    p, p_low = two_product(e, e)
    q, q_low = two_product(f, f)
    s, s_low = two_product(square, q)
    total, rest = two_sum(s, p)
    total, other = two_sum(total, 2.0 * e)
    over = total + (rest + other + s_low + p_low + square * q_low)
    return -0.5 * over / (1.0 + e)


@kernel
def _change(
    s: Floats, y: Floats, par: Floats, order: int, part: float, theta: float, out: Floats
) -> None:  # fmt: skip
    """The change of the whole state (10,) at ``theta`` into the step, ``part`` of the unit."""
    a, b, c, d = 0.0, 0.0, 0.0, 0.0
    for k in range(order, 0, -1):
        a = (a + s[0, k]) * part
        b = (b + s[1, k]) * part
        c = (c + s[2, k]) * part
        d = (d + s[3, k]) * part
    out[0], out[1], out[8], out[9] = a, b, c, d
    square, spin = par[2], sqrt(par[2])
    half = sin(0.5 * spin * theta)
    e = -2.0 * half * half
    f = sin(spin * theta) / spin if spin > 0.0 else theta
    low = _unrolled(square, e, f)
    for i in range(3):
        out[2 + i] = e * y[2 + i] + f * y[5 + i] + low * y[2 + i]
        out[5 + i] = e * y[5 + i] - square * (f * y[2 + i]) + low * y[5 + i]


@kernel
def taylor_mino_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step; ``table[0, 0]`` 1 asks for a step chosen here.

    The series are in powers of (s/unit); the last row of ``memory`` keeps this unit and the next.
    """
    order = memory.shape[1] - 1
    units = memory[-1]
    if units[1] == 0.0:
        units[1] = power_of_two(natural_unit(kind, variable, par, y, change, np.zeros(y.size)))
    units[0] = units[1]
    memory[0, 0], memory[1, 0], memory[2, 0], memory[3, 0] = y[0], y[1], y[8], y[9]
    mino_orbit(par, memory, order, units[0])
    if table[0, 0] == 1.0:
        scales(kind, par, y, change)
        change[2], change[3] = change[8], change[9]
        own = units[0] * decay(memory, change, 4, order, tolerance)
        if own < abs(h):
            h = own if h > 0.0 else -own
    if h != 0.0 and np.isfinite(h):
        units[1] = power_of_two(abs(h))
    _change(memory, y, par, order, h / units[0], h, change)
    return 0.0, 1, h


@kernel
def taylor_mino_inside(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, theta: float, before: Floats, memory: Floats, scratch: Floats, change: Floats,
) -> int:  # fmt: skip
    """The change at a point of the step from the series just made."""
    _change(memory, y, par, memory.shape[1] - 1, theta / memory[-1, 0], theta, change)
    return 0


def parts(problem: Problem) -> Parts:
    """Memory for the series."""
    return Parts(
        name="taylor_mino",
        step=taylor_mino_step,
        memory=(_ROWS, problem.order + 1),
        table=np.array([[1.0 if problem.adaptive else 0.0]]),
        dense=taylor_mino_inside,
        exponent=1.0 / problem.order,
        chooses=True,
    )
