"""Every set of equations behind one number: what the methods call.

``kind`` and ``variable`` are the numbers of :mod:`truefall.integrators.index`; ``par`` holds E,
mu (1 for particles, 0 for light) and L^2.  One set more is one branch in each function below.
"""

from __future__ import annotations

from math import cos, sin, sqrt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.cartesian import cartesian_rate
from truefall.integrators.equations.classical import arenstorf_rate, kepler_rate
from truefall.integrators.equations.mino import mino_rate
from truefall.integrators.equations.spherical import spherical_rate
from truefall.integrators.equations.types import Floats

__all__ = ["areal_radius", "outward", "place", "rate", "scales"]


@kernel
def rate(kind: int, variable: int, par: Floats, y: Floats, out: Floats) -> None:
    """Fill ``dy/d sigma``."""
    if kind == 0:
        kepler_rate(y, out)
        return
    if kind == 1:
        arenstorf_rate(y, out)
        return
    if kind >= 9:
        mino_rate(kind, par, y, out)
        return
    size = spherical_rate(par[0], y, out) if kind == 8 else cartesian_rate(kind, par[0], y, out)
    if variable == 0:
        return
    if variable == 1:
        weight = 1.0 / out[6]
    elif variable == 2:
        weight = size
    elif variable == 3:
        weight = size * sqrt(size)
    else:
        weight = size * size
    for i in range(6):
        out[i] *= weight
    out[6] = 1.0 if variable == 1 else out[6] * weight
    out[7] = weight


@kernel
def place(kind: int, y: Floats, out: Floats) -> float:
    """Fill the Cartesian position in the chart (3,); gives back its size."""
    if kind <= 1:
        out[0], out[1], out[2] = y[0], y[1], 0.0
    elif kind == 8:
        flat = y[0] * sin(y[1])
        out[0], out[1], out[2] = flat * cos(y[2]), flat * sin(y[2]), y[0] * cos(y[1])
    elif kind >= 9:
        out[0], out[1], out[2] = y[2] / y[0], y[3] / y[0], y[4] / y[0]
    else:
        out[0], out[1], out[2] = y[0], y[1], y[2]
    return sqrt(out[0] * out[0] + out[1] * out[1] + out[2] * out[2])


@kernel
def areal_radius(kind: int, y: Floats) -> float:
    """The areal radius (the distance for the classical problems)."""
    if kind <= 1:
        return sqrt(y[0] * y[0] + y[1] * y[1])
    if kind == 8:
        return float(y[0])
    if kind >= 9:
        return float(1.0 / y[0])
    size = sqrt(y[0] * y[0] + y[1] * y[1] + y[2] * y[2])
    if kind == 3:
        return size * ((1.0 + 0.5 / size) * (1.0 + 0.5 / size))
    if kind == 4:
        return size + 1.0
    return size


@kernel
def outward(kind: int, variable: int, par: Floats, y: Floats, out: Floats) -> float:
    """Something with the sign of dr/d sigma, zero where it is zero; ``out`` is overwritten."""
    if kind >= 9:
        return float(-y[1])
    rate(kind, variable, par, y, out)
    if kind <= 1:
        return float(y[0] * out[0] + y[1] * out[1])
    if kind == 8:
        return float(out[0])
    return float(y[0] * out[0] + y[1] * out[1] + y[2] * out[2])


@kernel
def scales(kind: int, par: Floats, y: Floats, out: Floats) -> None:
    """Size of each component against which an error counts: vectors by length, clocks by r.

    A momentum is never measured by less than the circular speed, so that a start at rest has a
    scale.
    """
    if kind <= 1:
        out[0] = out[1] = sqrt(y[0] * y[0] + y[1] * y[1])
        out[2] = out[3] = sqrt(y[2] * y[2] + y[3] * y[3])
        out[4] = 1.0
    elif kind == 8:
        slow = 1.0 / sqrt(y[0])
        out[0], out[1], out[2] = y[0], 1.0, 1.0
        out[3] = max(abs(y[3]), slow)
        out[4] = out[5] = max(sqrt(y[4] * y[4] + y[5] * y[5]), y[0] * slow)
        out[6] = out[7] = y[0]
    elif kind >= 9:
        out[0] = y[0]
        out[1] = max(abs(y[1]), sqrt(y[0]))
        out[2] = out[3] = out[4] = 1.0
        out[5] = out[6] = out[7] = max(sqrt(par[2]), 1.0)
        out[8] = out[9] = 1.0 / y[0]
    else:
        size = sqrt(y[0] * y[0] + y[1] * y[1] + y[2] * y[2])
        p = sqrt(y[3] * y[3] + y[4] * y[4] + y[5] * y[5])
        out[0] = out[1] = out[2] = size
        out[3] = out[4] = out[5] = max(p, 1.0 / sqrt(size))
        out[6] = out[7] = size
