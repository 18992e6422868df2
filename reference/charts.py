"""The six charts: points and velocities, both ways, in float64.

``x = (chart radius) * unit vector`` in every chart; the chart's time runs ``dT = dt + g dr``:

===================== ======================== ==================================================
chart                 its radius               its time T
===================== ======================== ==================================================
areal                 r                        t
isotropic             r = rho (1 + 1/(2 rho))^2  t
harmonic              r - 1                    t
kerr-schild           r                        t + 2 ln|r/2 - 1|
painleve-gullstrand   r                        t + 2 sqrt(2r) + 2 ln|(sqrt(r/2)-1)/(sqrt(r/2)+1)|
eddington-finkelstein r                        t + r + 2 ln|r/2 - 1|
===================== ======================== ==================================================

The last three are the ingoing forms, regular through the future horizon; conversions among them
are regular there too.  (Textbook forms; harmonic: Weinberg 1972, section 8.2, from memory.)
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = [
    "CHARTS",
    "INGOING",
    "areal_radius",
    "chart_radius",
    "convert",
    "radius_slope",
    "time_offset",
]

INGOING = ("kerr-schild", "painleve-gullstrand", "eddington-finkelstein")
CHARTS = ("areal", "isotropic", "harmonic", *INGOING)

Floats = npt.NDArray[np.float64]


def _known(chart: str) -> None:
    if chart not in CHARTS:
        raise ValueError(f"chart is {chart!r}; allowed are {', '.join(CHARTS)}")


def areal_radius(chart: str, rho: npt.ArrayLike) -> Floats:
    """Areal radius of a chart radius (GM = c = 1).

    Raises
    ------
    ValueError
        For an unknown chart.
    """
    _known(chart)
    rho = np.asarray(rho, dtype=np.float64)
    if chart == "isotropic":
        return rho + 1.0 + 0.25 / rho
    return rho + 1.0 if chart == "harmonic" else rho + 0.0


def chart_radius(chart: str, r: npt.ArrayLike) -> Floats:
    """Chart radius of an areal radius (GM = c = 1); NaN inside the horizon where it has none."""
    _known(chart)
    r = np.asarray(r, dtype=np.float64)
    if chart == "isotropic":
        with np.errstate(invalid="ignore"):
            return 0.5 * (r - 1.0 + np.sqrt(r * (r - 2.0)))
    return r - 1.0 if chart == "harmonic" else r + 0.0


def radius_slope(chart: str, rho: npt.ArrayLike) -> Floats:
    """``dr/drho`` of a chart (GM = c = 1)."""
    _known(chart)
    rho = np.asarray(rho, dtype=np.float64)
    if chart == "isotropic":
        return (1.0 - 0.5 / rho) * (1.0 + 0.5 / rho)
    return np.ones_like(rho)


def _slope_difference(source: str, target: str, r: Floats) -> Floats:
    """``g_target - g_source``, without the pole that ingoing charts share at ``r = 2``."""
    if source == target:
        return np.zeros_like(r)
    regular = {
        # g - 2/(r - 2): the part that stays finite at the horizon
        "kerr-schild": np.zeros_like(r),
        "painleve-gullstrand": np.sqrt(2.0 / r) / (1.0 + np.sqrt(2.0 / r)),
        "eddington-finkelstein": np.ones_like(r),
    }
    if source in INGOING and target in INGOING:
        return regular[target] - regular[source]
    pole = 2.0 / (r - 2.0)
    if target in INGOING:
        return pole + regular[target] if source not in INGOING else regular[target]
    return -(pole + regular[source]) if source in INGOING else np.zeros_like(r)


def time_offset(source: str, target: str, r: npt.ArrayLike) -> Floats:
    """``T_target - T_source`` as a function of the areal radius (GM = c = 1).

    Only differences between two events mean anything.

    Raises
    ------
    ValueError
        For an unknown chart, or ``r <= 2`` where one of the charts stops at the horizon.
    """
    _known(source)
    _known(target)
    r = np.asarray(r, dtype=np.float64)
    static = (source not in INGOING) != (target not in INGOING)
    if static and np.any(r <= 2.0):
        raise ValueError(f"{source} and {target} share no points at or inside r = 2 GM/c^2")
    root = np.sqrt(r / 2.0)
    regular = {
        # T - t - 2 ln|r/2 - 1|
        "kerr-schild": np.zeros_like(r),
        "painleve-gullstrand": 4.0 * root - 4.0 * np.log1p(root),
        "eddington-finkelstein": r,
    }
    offset = np.zeros_like(r)
    if target in INGOING:
        offset = offset + regular[target]
    if source in INGOING:
        offset = offset - regular[source]
    if static:
        logarithm = 2.0 * np.log(r / 2.0 - 1.0)
        offset = offset + (logarithm if target in INGOING else -logarithm)
    return offset


def convert(
    position: npt.ArrayLike,
    velocity: npt.ArrayLike | None,
    source: str,
    target: str,
    *,
    gm: float = 1.0,
    c: float = 1.0,
) -> tuple[Floats, Floats | None]:
    """Points and velocities of one chart in another.

    Parameters
    ----------
    position : (n, 3) or (3,) array_like
        Cartesian in the source chart.
    velocity : same shape or None
        ``d position / d (source chart's time)``.
    source, target : str
        Chart names.
    gm, c : float
        Gravitational parameter and speed of light in the units of the arrays.

    Returns
    -------
    position, velocity
        In the target chart; the velocity per the target chart's time.

    Raises
    ------
    ValueError
        For unknown charts, wrong shapes, or points that one of the charts does not cover.
    """
    _known(source)
    _known(target)
    x = np.asarray(position, dtype=np.float64) / (gm / c**2)
    if x.shape[-1:] != (3,):
        raise ValueError("position must have three components on its last axis")
    rho = np.linalg.norm(x, axis=-1, keepdims=True)
    r = areal_radius(source, rho)
    _check_covered(source, target, rho, r)
    unit = x / rho
    # harmonic and areal differ by a shift: adding it to the vector keeps weak-field digits
    shift = chart_radius(target, r) if "isotropic" in (source, target) else None
    moved = unit * shift if shift is not None else x + unit * (_shift(target) - _shift(source))
    new = moved * (gm / c**2)
    if velocity is None:
        return new, None
    v = np.asarray(velocity, dtype=np.float64) / c
    if v.shape != x.shape:
        raise ValueError("velocity must have the shape of position")
    radial = np.sum(unit * v, axis=-1, keepdims=True)
    across = v - unit * radial
    rdot = radius_slope(source, rho) * radial
    rho_new = chart_radius(target, r)
    pace = 1.0 + _slope_difference(source, target, r) * rdot  # dT_target / dT_source
    turned = across * (rho_new / rho) + unit * (rdot / radius_slope(target, rho_new))
    return new, turned / pace * c


def _shift(chart: str) -> float:
    return -1.0 if chart == "harmonic" else 0.0


def _check_covered(source: str, target: str, rho: Floats, r: Floats) -> None:
    smallest = {"areal": 2.0, "isotropic": 0.5, "harmonic": 1.0}
    if source in smallest and np.any(rho <= smallest[source]):
        raise ValueError(f"a point lies at or inside the horizon, which {source} does not cover")
    if target in smallest and np.any(r <= 2.0):
        raise ValueError(f"a point lies at or inside the horizon, which {target} does not cover")
