"""Explicit splittings of the Schwarzschild Hamiltonian in spherical areal coordinates.

Four parts (Wang, Sun, Liu & Wu 2021, ApJ 907, 66), from the outermost::

    p_theta^2/(2 r^2),   -p_r^2/r,   p_r^2/2,   p_phi^2/(2 r^2 sin^2 theta) - E^2 r/(2 (r - 2))

and three (Zhou, Zhang, Liu & Wu 2022, ApJ 927, 160; which terms are joined is from memory), the
first and third of these being one: ``p_r^2/2 + p_theta^2/(2 r^2)`` is free motion in a plane.
Every flow is written as increments, so that the digits of a compensated sum are kept; the flow of
``-p_r^2/r`` conserves it, with ``c^3 = 1 - 3 p_r h/r^2``: ``r' = r c^2``, ``p_r' = p_r c``.
The chart's time and the particle's clock run with the potential, where r stands still.
The whole sphere but its poles; massive and light alike (the rest mass is a constant of H).
"""

from __future__ import annotations

from math import atan2, cos, sin, sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem
from truefall.integrators.symplectic.compositions import sequence

__all__ = ["four_parts", "splitting_step", "three_parts"]

Integers = npt.NDArray[np.int64]

#: Numbers of the flows in the kernel, outermost first.
_FOUR = (0, 1, 2, 3)
_THREE = (1, 4, 3)


@kernel
def _angular(h: float, y: Floats, change: Floats) -> None:
    """The flow of ``p_theta^2/(2 r^2)``."""
    r, p = y[0] + change[0], y[4] + change[4]
    turn = h * p / (r * r)
    change[1] += turn
    change[3] += turn * p / r


@kernel
def _mixed(h: float, y: Floats, change: Floats) -> None:
    """The flow of ``-p_r^2/r``."""
    r, p = y[0] + change[0], y[3] + change[3]
    q = 3.0 * p * h / (r * r)
    c = (1.0 - q) ** (1.0 / 3.0)
    less = -q / (1.0 + c + c * c)
    change[0] += r * (less * (c + 1.0))
    change[3] += p * less


@kernel
def _free(h: float, y: Floats, change: Floats) -> None:
    """The flow of ``p_r^2/2 + p_theta^2/(2 r^2)``: a straight line in a plane."""
    r, p, turning = y[0] + change[0], y[3] + change[3], y[4] + change[4]
    across = turning / r
    x, z = r + h * p, h * across
    end = sqrt(x * x + z * z)
    change[0] += h * (2.0 * r * p + h * (p * p + across * across)) / (end + r)
    change[1] += atan2(z, x)
    if x > 0.0:
        change[3] += z * (across - p * z / (x + end)) / end
    else:
        change[3] += (p * (x - end) + across * z) / end


@kernel
def _potential(h: float, energy: float, y: Floats, change: Floats) -> None:
    """The flow of the terms without ``p_r`` and ``p_theta``; both clocks run here."""
    r, theta = y[0] + change[0], y[1] + change[1]
    s = sin(theta)
    g = 1.0 / (r - 2.0)
    spin = y[5] / (s * s)
    turn = h * spin / (r * r)
    change[2] += turn
    change[3] += turn * y[5] / r - h * ((energy * g) * (energy * g))
    change[4] += turn * y[5] * (cos(theta) / s)
    change[6] += h * (energy * (1.0 + 2.0 * g))
    change[7] += h


@kernel
def splitting_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step: the flows of ``code`` for the times of ``table``."""
    change[:] = 0.0
    for k in range(code.shape[0]):
        time = h * table[k, 0]
        part = code[k, 0]
        if part == 0:
            _angular(time, y, change)
        elif part == 1:
            _mixed(time, y, change)
        elif part == 2:
            change[0] += time * (y[3] + change[3])
        elif part == 3:
            _potential(time, par[0], y, change)
        else:
            _free(time, y, change)
    return 0.0, code.shape[0], h


def _parts(name: str, numbers: tuple[int, ...]) -> Parts:
    code, table = sequence(name, len(numbers))
    return Parts(
        name="splitting",
        step=splitting_step,
        memory=(1, 1),
        code=np.array(numbers, dtype=np.int64)[code],
        table=table,
    )


def four_parts(name: str, problem: Problem) -> Parts:
    """The four-part splitting, composed."""
    return _parts(name, _FOUR)


def three_parts(name: str, problem: Problem) -> Parts:
    """The three-part splitting, composed."""
    return _parts(name, _THREE)
