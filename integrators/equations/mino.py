"""Mino time s (d lambda = r^2 ds) with u = 1/r: polynomial but for the clocks.

y = (u, w, n, m, T, lambda) with w = -dr/d lambda = du/ds, n the unit vector of the position and
m = dn/ds = L times the unit vector of motion around the mass::

    du/ds = w,  dw/ds = mu + L^2 (3 u^2 - u),  dn/ds = m,  dm/ds = -L^2 n
    d lambda/ds = 1/u^2,  dT/ds = E/(u^2 (1 - 2 u))

(Mino 2003, Phys. Rev. D 67, 084027, for the time; the equation of u is Binet's with the
relativistic term; from memory.)  The times of the ingoing charts are written without 1 - 2 u, so
that the horizon is a place like any other::

    Kerr-Schild          [E^2 (1 + 2 u) + 4 u^2 (mu + L^2 u^2)] / [u^2 (E + 2 u w)]
    Painleve-Gullstrand  [E^2 + 2 u (mu + L^2 u^2)] / [u^2 (E + sqrt(2 u) w)]

``par`` holds E, mu (1 or 0) and L^2.
"""

from __future__ import annotations

from math import sqrt

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats

__all__ = ["mino_rate"]


@kernel
def mino_rate(kind: int, par: Floats, y: Floats, out: Floats) -> float:
    """Fill ``d y/ds`` (10,); gives back r."""
    energy, mu, square = par[0], par[1], par[2]
    u, w = y[0], y[1]
    u2 = u * u
    out[0] = w
    out[1] = mu + square * (3.0 * u2 - u)
    out[2], out[3], out[4] = y[5], y[6], y[7]
    out[5], out[6], out[7] = -(square * y[2]), -(square * y[3]), -(square * y[4])
    r: float = 1.0 / u
    area = r * r
    out[9] = area
    if kind == 9:
        out[8] = energy * (area / (1.0 - 2.0 * u))
        return r
    rest = mu + square * u2
    if kind == 10:
        above = (energy * energy) * (1.0 + 2.0 * u) + 4.0 * (u2 * rest)
        below = energy + 2.0 * (u * w)
    else:
        above = energy * energy + 2.0 * (u * rest)
        below = energy + sqrt(2.0 * u) * w
    out[8] = area * (above / below)
    return r
