"""Two classical problems without relativity, on which methods are tried: y = (x, y, vx, vy, t).

Kepler's orbit (class D of Hull, Enright, Fellen & Sedgwick 1972, SIAM J. Numer. Anal. 9, 603) and
the restricted three-body problem with Arenstorf's closed orbit (Hairer, Norsett & Wanner, Solving
Ordinary Differential Equations I, II.0).
"""

from __future__ import annotations

from math import sqrt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats

__all__ = ["ARENSTORF_MASS", "arenstorf_rate", "kepler_rate"]

ARENSTORF_MASS = 0.012277471
_ONE = 1.0 - ARENSTORF_MASS


@kernel
def kepler_rate(y: Floats, out: Floats) -> float:
    """Fill the rate (5,); gives back the distance."""
    square = y[0] * y[0] + y[1] * y[1]
    r = sqrt(square)
    pull = 1.0 / (square * r)
    out[0], out[1], out[2], out[3] = y[2], y[3], -y[0] * pull, -y[1] * pull
    out[4] = 1.0
    return r


@kernel
def arenstorf_rate(y: Floats, out: Floats) -> float:
    """Fill the rate (5,); gives back the distance from the larger mass."""
    ahead, behind = y[0] + ARENSTORF_MASS, y[0] - _ONE
    side = y[1] * y[1]
    square1, square2 = ahead * ahead + side, behind * behind + side
    r1 = sqrt(square1)
    large = _ONE / (square1 * r1)
    small = ARENSTORF_MASS / (square2 * sqrt(square2))
    out[0], out[1] = y[2], y[3]
    out[2] = y[0] + 2.0 * y[3] - large * ahead - small * behind
    out[3] = y[1] - 2.0 * y[2] - large * y[1] - small * y[1]
    out[4] = 1.0
    return r1
