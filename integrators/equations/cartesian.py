"""Any Cartesian chart: y = (x, p, T, lambda), from the eight radial numbers of its file.

Hamilton's equations in lambda (proper time or affine parameter), with G = (d (n.p) - b E)/R::

    dx = c p + G x        dp = Q x - G p        dT = a E + b (n.p)
    Q  = -(F - G (n.p))/R,  F = dH/dR at fixed n.p and p
"""

from __future__ import annotations

from collections.abc import Callable
from math import sqrt
from typing import Any

from truefall.integrators.compiled import kernel
from truefall.integrators.equations import (
    areal,
    eddington_finkelstein,
    harmonic,
    isotropic,
    kerr_schild,
    painleve_gullstrand,
)
from truefall.integrators.equations.types import Floats, Radial

__all__ = ["METRICS", "cartesian_rate", "hamiltonian"]

_areal = areal.radial
_isotropic = isotropic.radial
_harmonic = harmonic.radial
_kerr_schild = kerr_schild.radial
_painleve_gullstrand = painleve_gullstrand.radial

#: Kind to the metric of its chart.
METRICS: dict[int, Callable[..., tuple[Any, Any, Any, Any]]] = {
    2: areal.metric,
    3: isotropic.metric,
    4: harmonic.metric,
    5: kerr_schild.metric,
    6: painleve_gullstrand.metric,
    7: eddington_finkelstein.metric,
}


@kernel
def _radial(kind: int, size: float) -> Radial:
    """The eight radial numbers of a chart; kind 7 as eddington_finkelstein.py says."""
    if kind == 2:
        return _areal(size)
    if kind == 3:
        return _isotropic(size)
    if kind == 4:
        return _harmonic(size)
    if kind == 6:
        return _painleve_gullstrand(size)
    return _kerr_schild(size)


@kernel
def hamiltonian(kind: int, energy: float, y: Floats) -> float:
    """H: -1/2 along a particle's orbit, 0 along a ray."""
    size = sqrt(y[0] * y[0] + y[1] * y[1] + y[2] * y[2])
    pn = (y[0] * y[3] + y[1] * y[4] + y[2] * y[5]) / size
    p2 = y[3] * y[3] + y[4] * y[4] + y[5] * y[5]
    a, _, b, _, c, _, d, _ = _radial(kind, size)
    value: float = 0.5 * (-a * energy * energy - 2.0 * b * energy * pn + c * p2 + d * pn * pn)
    return value


@kernel
def cartesian_rate(kind: int, energy: float, y: Floats, out: Floats) -> float:
    """Fill ``d y/d lambda`` (8,); gives back R."""
    x0, x1, x2, p0, p1, p2 = y[0], y[1], y[2], y[3], y[4], y[5]
    size = sqrt(x0 * x0 + x1 * x1 + x2 * x2)
    pn = (x0 * p0 + x1 * p1 + x2 * p2) / size
    square = p0 * p0 + p1 * p1 + p2 * p2
    a, da, b, db, c, dc, d, dd = _radial(kind, size)
    g = (d * pn - b * energy) / size
    f = 0.5 * (dc * square + dd * (pn * pn) - da * (energy * energy)) - db * energy * pn
    q = -(f - g * pn) / size
    out[0], out[1], out[2] = c * p0 + g * x0, c * p1 + g * x1, c * p2 + g * x2
    out[3], out[4], out[5] = q * x0 - g * p0, q * x1 - g * p1, q * x2 - g * p2
    out[6] = a * energy + b * pn
    if kind == 7:
        out[6] += (x0 * out[0] + x1 * out[1] + x2 * out[2]) / size
    out[7] = 1.0
    return size
