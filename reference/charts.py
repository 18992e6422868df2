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
    "HORIZON_RADII",
    "INGOING",
    "areal_radius",
    "chart_radius",
    "convert",
    "horizon_gap",
    "radius_slope",
    "time_offset",
]

INGOING = ("kerr-schild", "painleve-gullstrand", "eddington-finkelstein")
CHARTS = ("areal", "isotropic", "harmonic", *INGOING)
#: Chart radius of the horizon in the charts that end there.
HORIZON_RADII = {"areal": 2.0, "isotropic": 0.5, "harmonic": 1.0}

Floats = npt.NDArray[np.float64]
_EPS = 2.0**-52


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
        with np.errstate(divide="ignore"):  # rho = 0 is infinitely far, beyond the horizon
            return np.asarray(rho + 1.0 + 0.25 / rho)
    return rho + 1.0 if chart == "harmonic" else rho + 0.0


def horizon_gap(chart: str, rho: npt.ArrayLike) -> Floats:
    """``r - 2`` from a chart radius (GM = c = 1), exact to rounding however close to the horizon.

    The difference of ``areal_radius`` and 2 would keep nothing of it in isotropic coordinates,
    where ``r - 2 = (rho - 1/2)^2 / rho``.
    """
    _known(chart)
    rho = np.asarray(rho, dtype=np.float64)
    if chart == "isotropic":
        with np.errstate(divide="ignore"):
            return np.asarray((rho - 0.5) ** 2 / rho)
    return rho - 1.0 if chart == "harmonic" else rho - 2.0


def chart_radius(chart: str, r: npt.ArrayLike) -> Floats:
    """Chart radius of an areal radius (GM = c = 1); NaN where isotropic coordinates have none."""
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
        return np.asarray((rho - 0.5) / rho * ((rho + 0.5) / rho))
    return np.ones_like(rho)


def _radius_and_slope(chart: str, r: Floats, gap: Floats) -> tuple[Floats, Floats]:
    """Chart radius and ``dr/drho`` from ``r`` and ``r - 2``, no difference near the horizon."""
    if chart == "isotropic":
        root = np.sqrt(gap * (gap + 2.0))
        beyond = 0.5 * (gap + root)  # rho - 1/2
        rho = 0.5 + beyond
        return rho, beyond / rho * ((beyond + 1.0) / rho)
    return (gap + 1.0 if chart == "harmonic" else r), np.ones_like(gap)


def _slope_difference(source: str, target: str, r: Floats, gap: Floats) -> Floats:
    """``g_target - g_source``, without the pole that ingoing charts share at ``r = 2``."""
    regular = {
        # g - 2/(r - 2): the part that stays finite at the horizon
        "kerr-schild": np.zeros_like(r),
        "painleve-gullstrand": np.sqrt(2.0 / r) / (1.0 + np.sqrt(2.0 / r)),
        "eddington-finkelstein": np.ones_like(r),
    }
    if source in INGOING and target in INGOING:
        return regular[target] - regular[source]
    pole = 2.0 / gap
    if target in INGOING:
        return pole + regular[target] if source not in INGOING else regular[target]
    return -(pole + regular[source]) if source in INGOING else np.zeros_like(r)


def time_offset(source: str, target: str, r: npt.ArrayLike) -> Floats:
    """``T_target - T_source`` as a function of the areal radius (GM = c = 1).

    Only differences between two events mean anything.

    Raises
    ------
    ValueError
        For an unknown chart, a radius that is not positive, or ``r <= 2`` where one of the
        charts stops at the horizon.
    """
    _known(source)
    _known(target)
    r = np.asarray(r, dtype=np.float64)
    if not np.all(r > 0.0):
        raise ValueError("every radius must be greater than 0")
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
        For unknown charts, wrong shapes, numbers that are not finite, points that one of the
        charts does not cover, and velocities along which the target's time does not advance:
        ingoing radial light in eddington-finkelstein, or faster than light.
    """
    _known(source)
    _known(target)
    x, v = _checked(position, velocity, gm, c)
    rho = np.linalg.norm(x, axis=-1, keepdims=True)
    r, gap = areal_radius(source, rho), horizon_gap(source, rho)
    _check_covered(source, target, rho)
    if source == target:
        return x * (gm / c**2), None if v is None else v * c
    unit = x / rho
    rho_new, slope_new = _radius_and_slope(target, r, gap)
    # harmonic and areal differ by a shift: adding it to the vector keeps weak-field digits
    shift = _shift(target) - _shift(source)
    moved = unit * rho_new if "isotropic" in (source, target) else x + unit * shift
    new = moved * (gm / c**2)
    if v is None:
        return new, None
    radial = np.sum(unit * v, axis=-1, keepdims=True)
    across = v - unit * radial
    rdot = radius_slope(source, rho) * radial
    change = _slope_difference(source, target, r, gap) * rdot
    pace = 1.0 + change  # dT_target / dT_source
    if np.any(pace <= 8 * _EPS * (1.0 + np.abs(change))):
        raise ValueError(
            f"the time of {target} does not advance along a velocity: it is ingoing radial light "
            "or faster than light"
        )
    turned = across * (rho_new / rho) + unit * (rdot / slope_new)
    return new, turned / pace * c


def _checked(
    position: npt.ArrayLike, velocity: npt.ArrayLike | None, gm: float, c: float
) -> tuple[Floats, Floats | None]:
    """Positions in GM/c^2 and velocities in c, or ValueError."""
    if not (np.isfinite(gm) and gm > 0 and np.isfinite(c) and c > 0):
        raise ValueError("gm and c must be positive and finite")
    x = np.asarray(position, dtype=np.float64) / (gm / c**2)
    if x.shape[-1:] != (3,):
        raise ValueError("position must have three components on its last axis")
    if not np.all(np.isfinite(x)):
        raise ValueError("position must be finite")
    if velocity is None:
        return x, None
    v = np.asarray(velocity, dtype=np.float64) / c
    if v.shape != x.shape:
        raise ValueError("velocity must have the shape of position")
    if not np.all(np.isfinite(v)):
        raise ValueError("velocity must be finite")
    return x, v


def _shift(chart: str) -> float:
    return -1.0 if chart == "harmonic" else 0.0


def _check_covered(source: str, target: str, rho: Floats) -> None:
    if np.any(rho <= 0.0):
        raise ValueError("a point lies at r = 0, which no chart covers")
    if source in HORIZON_RADII and np.any(rho <= HORIZON_RADII[source]):
        raise ValueError(f"a point lies at or inside the horizon, which {source} does not cover")
    # from here on only an ingoing source, whose radius is the areal one, can lie inside
    if target in HORIZON_RADII and source not in HORIZON_RADII and np.any(rho <= 2.0):
        raise ValueError(f"a point lies at or inside the horizon, which {target} does not cover")
