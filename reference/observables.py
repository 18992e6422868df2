"""What an observer would measure: precession, deflection, clock rates, delays, frequencies.

Small functions of float64 numbers.  Radii are areal.  Where ``gm`` and ``c`` can be given they
are in the caller's consistent units and default to the geometric system.  Differences from 1 are
returned as such, so that weak fields keep their digits.
"""

from __future__ import annotations

from itertools import pairwise
from math import pi, sqrt

from truefall.reference.closed_form import (
    impact_parameter,
    light_deflection,
    light_periapsis,
    precession_per_orbit,
)

__all__ = [
    "ARCSECOND",
    "JULIAN_CENTURY",
    "arcseconds_per_century",
    "circular_clock_offset",
    "deflection_angle",
    "first_order_precession",
    "frequency_ratio",
    "light_travel_time",
    "lyapunov_exponent",
    "orbital_frequency",
    "precession",
    "radial_frequency",
    "static_clock_offset",
]

#: One arc second in radians.
ARCSECOND = pi / 648000.0
#: Julian century in days.
JULIAN_CENTURY = 36525.0


def precession(
    semi_major_axis: float, eccentricity: float, gm: float = 1.0, c: float = 1.0
) -> float:
    """Exact advance of the periapsis per orbit, radians; p = a (1 - e^2) is areal."""
    p = semi_major_axis * (1.0 - eccentricity) * (1.0 + eccentricity)
    return precession_per_orbit(p * c * c / gm, eccentricity)


def first_order_precession(
    semi_major_axis: float, eccentricity: float, gm: float = 1.0, c: float = 1.0
) -> float:
    """6 pi GM/(c^2 a (1 - e^2)), radians per orbit (Einstein 1915)."""
    return 6.0 * pi * gm / (c * c * semi_major_axis * (1.0 - eccentricity) * (1.0 + eccentricity))


def arcseconds_per_century(per_orbit: float, period_days: float) -> float:
    """Radians per orbit as arc seconds per Julian century."""
    return per_orbit / ARCSECOND * JULIAN_CENTURY / period_days


def deflection_angle(
    *,
    periapsis: float | None = None,
    impact: float | None = None,
    gm: float = 1.0,
    c: float = 1.0,
) -> float:
    """Total deflection of light, by its periapsis or its impact parameter (one of the two)."""
    unit = gm / (c * c)
    if periapsis is not None and impact is None:
        return light_deflection(periapsis / unit)
    if impact is not None and periapsis is None:
        return light_deflection(light_periapsis(impact / unit))
    raise ValueError("give either periapsis or impact, and only one of them")


def _depth(r: float, gm: float, c: float, lowest: float, what: str) -> float:
    """``GM/(c^2 r)``, refused at or below a radius."""
    m = gm / (c * c * r)
    if not 0.0 < m < 1.0 / lowest:
        raise ValueError(f"radius is {r!r}; {what} needs r > {lowest:g} GM/c^2")
    return m


def static_clock_offset(r: float, gm: float = 1.0, c: float = 1.0) -> float:
    """``dtau/dt - 1`` of a clock at rest: sqrt(1 - 2M/r) - 1."""
    m = _depth(r, gm, c, 2.0, "a clock at rest")
    return -2.0 * m / (1.0 + sqrt(1.0 - 2.0 * m))


def circular_clock_offset(r: float, gm: float = 1.0, c: float = 1.0) -> float:
    """``dtau/dt - 1`` of a clock on a circular orbit: sqrt(1 - 3M/r) - 1."""
    m = _depth(r, gm, c, 3.0, "a circular orbit")
    return -3.0 * m / (1.0 + sqrt(1.0 - 3.0 * m))


def frequency_ratio(emitter_offset: float, receiver_offset: float) -> float:
    """Received over emitted frequency, minus 1, from two clock offsets (no Doppler shift).

    For clocks at rest exactly; for circular orbits where the light leaves and arrives across the
    motion, or on average.
    """
    return (emitter_offset - receiver_offset) / (1.0 + receiver_offset)


def orbital_frequency(r: float, gm: float = 1.0, c: float = 1.0) -> float:
    """Angular frequency of a circular orbit in coordinate time, sqrt(GM/r^3) exactly."""
    _depth(r, gm, c, 3.0, "a circular orbit")
    return sqrt(gm / r**3)


def radial_frequency(r: float, gm: float = 1.0, c: float = 1.0) -> float:
    """Epicyclic frequency in coordinate time, Omega sqrt(1 - 6M/r); r >= 6 GM/c^2.

    Okazaki, Kato & Fukue 1987, PASJ 39, 457 (from memory).
    """
    inner = 1.0 - 6.0 * gm / (c * c * r)
    if inner < 0.0:
        raise ValueError(f"radius is {r!r}; circles are stable from r = 6 GM/c^2")
    return orbital_frequency(r, gm, c) * sqrt(inner)


def lyapunov_exponent(r: float, gm: float = 1.0, c: float = 1.0) -> float:
    """Growth rate, per coordinate time, of the distance from an unstable circle, 3 <= r <= 6.

    Omega sqrt(6M/r - 1); at r = 3 it is that of light, 1/(3 sqrt 3) (Cardoso et al. 2009, PRD 79,
    064016; from memory).
    """
    excess = 6.0 * gm / (c * c * r) - 1.0
    if not 0.0 <= excess <= 1.0:
        raise ValueError(f"radius is {r!r}; circles are unstable from 3 to 6 GM/c^2")
    return sqrt(gm / r**3) * sqrt(excess)


def light_travel_time(periapsis: float, r: float, gm: float = 1.0, c: float = 1.0) -> float:
    """Areal coordinate time of light from its periapsis to radius ``r``.

    With r = r0 + y^2, t = integral of 2 r^{5/2}/((r - 2) sqrt(r^2 + r r0 + r0^2 - b^2)) dy, from
    0 = r^3 - b^2 (r - 2) at r0 divided out; a smooth integrand, adaptive quadrature.  A full time
    between two radii is the sum (opposite sides) or difference (same side); delays depend on what
    is subtracted, full times do not.
    """
    from scipy.integrate import quad

    unit = gm / (c * c)
    low, high = periapsis / unit, r / unit
    if not high >= low:
        raise ValueError(f"radius is {r!r}; it must not be below the periapsis {periapsis!r}")
    square = impact_parameter(low) ** 2

    def rate(y: float) -> float:
        q = low + y * y
        return 2.0 * q * q * sqrt(q) / ((q - 2.0) * sqrt(q * q + q * low + low * low - square))

    reach = sqrt(high - low)
    edges = [0.0]
    step = sqrt(low)
    while edges[-1] + step < reach and len(edges) < 200:
        edges.append(edges[-1] + step)
        step *= 2.0
    edges.append(reach)
    pieces = (quad(rate, a, b, epsabs=0.0, epsrel=2e-14, limit=200)[0] for a, b in pairwise(edges))
    return float(sum(pieces)) * unit / c
