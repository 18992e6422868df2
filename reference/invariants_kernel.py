"""The constants of the motion of one state, compiled: for loops over many million rows.

The expressions are those of :mod:`truefall.reference.invariants`, which says where they come
from; the tests hold one against the other.
"""

from __future__ import annotations

from math import nan, sqrt

from numba import njit

from truefall.reference.charts import CHARTS

__all__ = ["CHART_NUMBER", "invariants_of"]

#: Number of each chart in the kernels.
CHART_NUMBER = {name: k for k, name in enumerate(CHARTS)}
_ISOTROPIC, _HARMONIC = CHART_NUMBER["isotropic"], CHART_NUMBER["harmonic"]
_KERR_SCHILD = CHART_NUMBER["kerr-schild"]
_PAINLEVE = CHART_NUMBER["painleve-gullstrand"]
_EDDINGTON = CHART_NUMBER["eddington-finkelstein"]

Six = tuple[float, float, float, float, float, float]


@njit(cache=True, error_model="numpy", nogil=True)
def _excess(
    chart: int, r: float, gap: float, rdot: float, tangential2: float
) -> tuple[float, float]:
    """``q - 1`` and ``E/(dT/dtau) - 1``, ``q = (dtau/dT)^2``."""
    m = 2.0 / r
    if chart == _KERR_SCHILD:
        return -m - 2.0 * m * rdot - (1.0 + m) * rdot * rdot - tangential2, -m - m * rdot
    if chart == _PAINLEVE:
        g = sqrt(m)
        return -m - 2.0 * g * rdot - rdot * rdot - tangential2, -m - g * rdot
    if chart == _EDDINGTON:
        return -m - 2.0 * rdot - tangential2, -m - rdot
    return -m - rdot * rdot * (r / gap) - tangential2, -m


@njit(cache=True, error_model="numpy", nogil=True)
def _energy(
    chart: int, r: float, gap: float, rdot: float, tangential2: float
) -> tuple[float, float]:
    """``E - 1`` and ``dtau/dT`` of a massive particle."""
    dq, de = _excess(chart, r, gap, rdot, tangential2)
    root = sqrt(1.0 + dq) if dq >= -1.0 else nan
    if chart == _EDDINGTON:
        near = (2.0 / r + tangential2) / (1.0 + root) - 2.0 / r
        return (near - rdot * dq / ((1.0 + root) * (1.0 + root))) / root, root
    if chart in (_KERR_SCHILD, _PAINLEVE):
        return (de - dq / (1.0 + root)) / root, root
    f = gap / r
    if f < 0.25:
        square = f - rdot * rdot / f - tangential2
        close = sqrt(square) if square >= 0.0 else nan
        return f / close - 1.0, close
    return (de - dq / (1.0 + root)) / root, root


@njit(cache=True, error_model="numpy", nogil=True)
def invariants_of(
    chart: int, light: bool, x: float, y: float, z: float, u: float, v: float, w: float
) -> Six:
    """``E - 1``, the vector L, the norm of light, and the scale of an energy drift.

    GM = c = 1; NaN for a state outside the chart or not timelike.  For light ``E - 1`` is 0 and L
    is ``L/E``.
    """
    rho = sqrt(x * x + y * y + z * z)
    r, gap, slope = rho, rho - 2.0, 1.0
    if chart == _ISOTROPIC:
        if rho <= 0.5:
            return nan, nan, nan, nan, nan, nan
        r = rho + 1.0 + 0.25 / rho
        gap = (rho - 0.5) * (rho - 0.5) / rho
        slope = (rho - 0.5) / rho * ((rho + 0.5) / rho)
    elif chart == _HARMONIC:
        r, gap = rho + 1.0, rho - 1.0
    inside = chart in (_KERR_SCHILD, _PAINLEVE, _EDDINGTON)
    if not inside and not gap > 0.0:
        return nan, nan, nan, nan, nan, nan
    sx, sy, sz = y * w - z * v, z * u - x * w, x * v - y * u
    rdot = slope * (x * u + y * v + z * w) / rho
    stretch = (r / rho) * (r / rho)
    tangential2 = (sx * sx + sy * sy + sz * sz) * (r / (rho * rho)) * (r / (rho * rho))
    if light:
        dq, de = _excess(chart, r, gap, rdot, tangential2)
        share = 1.0 + de if inside else gap / r
        k = stretch / share
        return 0.0, sx * k, sy * k, sz * k, -(1.0 + dq), 1.0 / r
    excess, root = _energy(chart, r, gap, rdot, tangential2)
    k = stretch / root
    return excess, sx * k, sy * k, sz * k, nan, max(abs(excess), 1.0 / r)
