"""Radii and other marks of the Schwarzschild geometry (GM = c = 1; areal radii)."""

from __future__ import annotations

from math import sqrt

__all__ = [
    "CRITICAL_IMPACT",
    "HORIZON",
    "INNERMOST_STABLE",
    "INNERMOST_STABLE_ENERGY",
    "INNERMOST_STABLE_MOMENTUM",
    "LIGHT_RING_LYAPUNOV",
    "MARGINALLY_BOUND",
    "PHOTON_SPHERE",
    "landmark_radii",
]

#: The horizon, r_s = 2 GM/c^2 (common practice).
HORIZON = 2.0
#: Circular light: Hilbert 1917; Darwin 1959.
PHOTON_SPHERE = 3.0
#: Circular orbit with E = 1, L = 4: Bardeen, Press & Teukolsky 1972, ApJ 178, 347.
MARGINALLY_BOUND = 4.0
#: Innermost stable circle: Kaplan 1949; Bardeen, Press & Teukolsky 1972.
INNERMOST_STABLE = 6.0
#: Its energy, sqrt(8/9), and angular momentum, 2 sqrt 3 (from memory, recomputed).
INNERMOST_STABLE_ENERGY = sqrt(8.0) / 3.0
INNERMOST_STABLE_MOMENTUM = 2.0 * sqrt(3.0)
#: Impact parameter that divides capture from deflection: Darwin 1959.
CRITICAL_IMPACT = 3.0 * sqrt(3.0)
#: Growth rate per chart time of a ray's distance from r = 3: Cardoso et al. 2009 (from memory).
LIGHT_RING_LYAPUNOV = 1.0 / (3.0 * sqrt(3.0))


def landmark_radii(gm: float = 1.0, c: float = 1.0) -> dict[str, float]:
    """The radii above in the caller's length unit.

    Parameters
    ----------
    gm, c : float
        Gravitational parameter and speed of light in consistent units.

    Raises
    ------
    ValueError
        If either is not positive.
    """
    if not (gm > 0 and c > 0):
        raise ValueError("gm and c must be positive")
    unit = gm / (c * c)
    return {
        "horizon": HORIZON * unit,
        "photon_sphere": PHOTON_SPHERE * unit,
        "marginally_bound": MARGINALLY_BOUND * unit,
        "innermost_stable": INNERMOST_STABLE * unit,
    }
