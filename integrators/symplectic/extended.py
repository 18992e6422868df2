"""Tao's extended phase space: explicit and symplectic for any Hamiltonian of any chart.

(Tao 2016, Phys. Rev. E 94, 043303; from memory.)  Two copies (q, p) and (x, y) of the state, bound
to each other::

    H(q, y) + H(x, p) + omega sum_i ((q_i - x_i)^2/s_i^2 + s_i^2 (p_i - y_i)^2)/2

The first term moves p and x, the second q and y, the third turns each pair of differences by
``2 omega h``.  The scales ``s_i^2`` = (size of q_i)/(size of p_i) give both differences one unit.
They and omega are taken once, at the start, for the periapsis that Newton's theory has for these
E and L, where the copies part most easily; omega is :data:`BINDING` times the angular rate there
(or the fastest relative change at the start, if that is faster).  The clocks are not bound, since
their momenta are constant.  The second copy is kept as its small distance from the first, so that
compensated sums keep the digits of both.

Symplectic in the doubled space, where the first copy is the answer.  Bound too loosely the copies
part within a few revolutions (in the Cartesian charts 5 is too little and 10 enough; the error
grows about as omega).  Tao's theorem promises long times, not all times.
"""

from __future__ import annotations

from math import sin, sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.rates import rate, scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.methods import Parts, Problem
from truefall.integrators.symplectic.compositions import sequence

__all__ = ["BINDING", "extended_step", "parts_of"]

Integers = npt.NDArray[np.int64]

#: omega in units of the fastest angular rate: Cartesian charts, spherical coordinates.
BINDING = (16.0, 5.0)


@kernel
def _prepare(
    kind: int, variable: int, par: Floats, binding: float, y: Floats, memory: Floats
) -> None:
    """omega and the scales from the start and its periapsis; the copies agree."""
    n = y.size
    half = 2 if kind <= 1 else 3
    rate(kind, variable, par, y, memory[3, :n])
    scales(kind, par, y, memory[4, :n])
    fastest = 0.0
    for i in range(2 * half):
        fastest = max(fastest, abs(memory[3, i]) / memory[4, i])
    for i in range(half):
        memory[1, i] = sqrt(memory[4, i] / memory[4, half + i])
    if kind >= 2 and par[2] > 0.0:
        square = par[1] * par[1] + (par[0] * par[0] - par[1]) * par[2]
        inverse = (par[1] + sqrt(max(square, 0.0))) / par[2]
        fastest = max(fastest, sqrt(par[2]) * inverse * inverse)
        memory[1, 0] = inverse**-0.75
        if kind < 8:
            memory[1, 1] = memory[1, 2] = inverse**-0.75
    memory[0, 0] = 1.0
    memory[0, 1] = binding * fastest


@kernel
def _bind(angle: float, half: int, memory: Floats, change: Floats) -> None:
    """Turn the differences of the copies; their sums stay."""
    c, s = sin(0.5 * angle), sin(angle)
    less = -2.0 * c * c  # cosine minus 1
    for i in range(half):
        size = memory[1, i]
        q, p = memory[2, i] / size, memory[2, half + i] * size
        # differences of the second copy from the first: their halves leave the first
        dq, dp = less * q + s * p, less * p - s * q
        memory[2, i] += dq * size
        memory[2, half + i] += dp / size
        change[i] -= 0.5 * (dq * size)
        change[half + i] -= 0.5 * (dp / size)


@kernel
def extended_step(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, h: float, memory: Floats, change: Floats,
) -> tuple[float, int, float]:  # fmt: skip
    """One step.

    ``memory``: a mark and omega; scales; the second copy minus the first; two rows to work in.
    ``table``: times of the flows, and last omega in units of the fastest angular rate.
    """
    n = y.size
    half = 2 if kind <= 1 else 3
    last = table.shape[0] - 1
    if memory[0, 0] == 0.0:
        _prepare(kind, variable, par, table[last, 0], y, memory)
    apart, place, out = memory[2, :n], memory[3, :n], memory[4, :n]
    change[:] = 0.0
    work = 0
    for k in range(last):
        time = h * table[k, 0]
        part = code[k, 0]
        if part == 2:
            _bind(2.0 * memory[0, 1] * time, half, memory, change)
            continue
        # part 0: H(q, y) moves p and x; part 1: H(x, p) moves q and y
        for i in range(n):
            mixed = (i >= half) if part == 0 else (i < half)
            place[i] = y[i] + (change[i] + apart[i] if mixed else change[i])
        rate(kind, variable, par, place, out)
        work += 1
        for i in range(n):
            step = time * out[i]
            mine = (half <= i < 2 * half) if part == 0 else (i < half or i >= 2 * half)
            if mine:
                change[i] += step
                apart[i] -= step
            else:
                apart[i] += step
    return 0.0, work, h


def parts_of(name: str, problem: Problem) -> Parts:
    """The composition ``name`` in extended phase space."""
    code, table = sequence(name, 3)
    return Parts(
        name="extended",
        step=extended_step,
        memory=(5, max(problem.size, 2)),
        code=code,
        table=np.concatenate([table, [[BINDING[problem.kind == 8]]]]),
        keeps=True,
    )
