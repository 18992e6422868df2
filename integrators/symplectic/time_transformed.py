"""Leapfrogs whose step shrinks where the orbit is fast, composed to order 2 to 8.

In Cartesian areal coordinates a geodesic is Newton's motion in proper time (or an affine
parameter) with one term more, so that its Hamiltonian is a sum of two parts::

    v^2/2 - U(r),   U = mu/r + L^2/r^3      (L a constant, mu = 1 for particles, 0 for light)

With ``B = U - v^2/2`` fixed at the start, ``f(v^2/2 + B) - f(U)`` has the same orbits in a time
sigma with ``d lambda = f'(U) d sigma``, and leapfrog solves it: the drift moves x by
``f'(v^2/2 + B) v h`` and the kick v by ``f'(U) grad U h``.  For particles f is the logarithm
(Mikkola & Tanikawa 1999, Celest. Mech. 74, 287; Preto & Tremaine 1999, AJ 118, 2532; from memory),
so that ``d lambda = r/(1 + L^2/r^2) d sigma`` and a Kepler orbit is an exact conic, wrong in time
only; for light ``f'(U) = (L^2/U)^(1/3)``, that is ``d lambda = r d sigma``.

The equations in Mino time (``d lambda = r^2 d sigma``) are such a sum without further ado::

    w^2/2 + (1 - 2 u)(mu + L^2 u^2)/2 - E^2/2 = 0

and the direction turns by L h, exactly.  The chart's time is a quadrature along the kicks.
"""

from __future__ import annotations

from math import sin, sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem
from truefall.integrators.symplectic.compositions import sequence

__all__ = ["cartesian_step", "mino_step", "parts_of"]

Integers = npt.NDArray[np.int64]


@kernel
def _pace(mu: float, square: float, value: float) -> float:
    """``f'`` at U or at ``v^2/2 + B``; a radial ray has no U and goes on in its own parameter."""
    if mu > 0.0:
        return float(1.0 / value)
    if square == 0.0:
        return 1.0
    return float((square / value) ** (1.0 / 3.0))


@kernel
def _velocity(y: Floats, mu: float, square: float, memory: Floats) -> None:
    """The velocity dx/d lambda from the momenta, and B, at the start of a run."""
    r = sqrt(y[0] * y[0] + y[1] * y[1] + y[2] * y[2])
    along = (y[0] * y[3] + y[1] * y[4] + y[2] * y[5]) / r
    pull = 2.0 * along / (r * r)
    total = 0.0
    for i in range(3):
        memory[1, i] = y[3 + i] - pull * y[i]
        memory[2, i] = 0.0
        total += memory[1, i] * memory[1, i]
    memory[0, 0] = 1.0
    memory[0, 1] = (mu + square / (r * r)) / r - 0.5 * total


@kernel
def _momenta(y: Floats, memory: Floats, change: Floats) -> None:
    """Add the step's change to the velocity and say what it means for the momenta."""
    x0, x1, x2 = y[0] + change[0], y[1] + change[1], y[2] + change[2]
    for i in range(3):
        moved = memory[3, i] + memory[2, i]
        s = memory[1, i] + moved
        t = s - memory[1, i]
        memory[2, i] = (memory[1, i] - (s - t)) + (moved - t)
        memory[1, i] = s
    r = sqrt(x0 * x0 + x1 * x1 + x2 * x2)
    along = (x0 * memory[1, 0] + x1 * memory[1, 1] + x2 * memory[1, 2]) / r
    push = 2.0 * along / ((r - 2.0) * r)
    change[3] = (memory[1, 0] - y[3]) + push * x0
    change[4] = (memory[1, 1] - y[4]) + push * x1
    change[5] = (memory[1, 2] - y[5]) + push * x2


@kernel
def cartesian_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step.  ``memory``: a mark and B; the velocity; its carry; its change in this step."""
    mu, square = par[1], par[2]
    if memory[0, 0] == 0.0:
        _velocity(y, mu, square, memory)
    change[:] = 0.0
    memory[3, :3] = 0.0
    for k in range(code.shape[0]):
        time = h * table[k, 0]
        if code[k, 0] == 0:
            v0, v1 = memory[1, 0] + memory[3, 0], memory[1, 1] + memory[3, 1]
            v2 = memory[1, 2] + memory[3, 2]
            energy = 0.5 * (v0 * v0 + v1 * v1 + v2 * v2) + memory[0, 1]
            time *= _pace(mu, square, energy)
            change[0] += time * v0
            change[1] += time * v1
            change[2] += time * v2
            change[7] += time
        else:
            x0, x1, x2 = y[0] + change[0], y[1] + change[1], y[2] + change[2]
            area = x0 * x0 + x1 * x1 + x2 * x2
            r = sqrt(area)
            bend = square / area
            time *= _pace(mu, square, (mu + bend) / r)
            pull = time * (mu + 3.0 * bend) / (area * r)
            memory[3, 0] -= pull * x0
            memory[3, 1] -= pull * x1
            memory[3, 2] -= pull * x2
            change[6] += time * (par[0] * (1.0 + 2.0 / (r - 2.0)))
    _momenta(y, memory, change)
    return 0.0, code.shape[0], h


@kernel
def mino_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step in Mino time; y = (u, w, n, dn/ds, T, lambda)."""
    mu, square = par[1], par[2]
    change[:] = 0.0
    for k in range(code.shape[0]):
        time = h * table[k, 0]
        if code[k, 0] == 0:
            change[0] += time * (y[1] + change[1])
        else:
            u = y[0] + change[0]
            area = 1.0 / (u * u)
            change[1] += time * (mu + square * (3.0 * (u * u) - u))
            change[8] += time * (par[0] * (area / (1.0 - 2.0 * u)))
            change[9] += time * area
    size = sqrt(square)
    turn = size * h
    half, whole = sin(0.5 * turn), sin(turn)
    less = -2.0 * half * half  # cosine minus 1
    for i in range(2, 5):
        if size > 0.0:
            change[i] = less * y[i] + (whole / size) * y[i + 3]
        change[i + 3] = less * y[i + 3] - (whole * size) * y[i]
    return 0.0, code.shape[0], h


def parts_of(name: str, problem: Problem) -> Parts:
    """The composition ``name`` of drift and kick for the equations."""
    code, table = sequence(name, 2)
    if problem.kind == 9:
        return Parts("mino_leapfrog", mino_step, (1, 1), code, table)
    return Parts("leapfrog", cartesian_step, (4, 3), code, table, keeps=True)
