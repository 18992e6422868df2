"""Closed forms for orbits and light rays: elliptic integrals and cycloids, in float64.

The second route beside the exact engine, and the base of the observables.  GM = c = 1, areal
radius r = p/(1 + e cos chi), u = 1/r.  Massive particles: E^2 - 1, L and the roots u1 <= u2 <= u3
of (du/dphi)^2 = 2 (u - u1)(u2 - u)(u3 - u).

Sources: Darwin 1959, Proc. R. Soc. A 249, 180 and 1961, A 263, 39; Chandrasekhar 1983, secs. 19
and 20; Cutler, Kennefick & Poisson 1994, PRD 50, 3816, sec. II (all from memory); Carlson 1995,
Numer. Algorithms 10, 13 for the integrals R_F, R_D, R_J; the arithmetic-geometric mean for K:
DLMF 19.8.  SciPy is imported when a function that needs it is first called.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import acos, atan, cos, exp, floor, lgamma, log, log1p, pi, sin, sqrt, tan

__all__ = [
    "ConicTimes",
    "azimuth",
    "azimuth_per_radial_period",
    "constants_from_elements",
    "cycloid_fall",
    "elements_from_constants",
    "energy_minus_one",
    "fall_time_from_infinity",
    "horizon_to_centre",
    "impact_parameter",
    "light_deflection",
    "light_periapsis",
    "precession_per_orbit",
    "proper_radial_period",
    "radial_period",
    "separatrix",
    "strong_deflection",
    "tangential_speed",
    "times_since_periapsis",
    "turning_radii",
]


@dataclass(frozen=True)
class ConicTimes:
    """Azimuth, coordinate time and proper time since the periapsis (GM = c = 1)."""

    azimuth: float
    coordinate: float
    proper: float


def separatrix(e: float) -> float:
    """Smallest semi-latus rectum with an inner turning point, 6 + 2e (Cutler et al. 1994)."""
    return 6.0 + 2.0 * e


def _require_orbit(p: float, e: float, *, bound: bool = False) -> None:
    if not e >= 0.0 or (bound and not e < 1.0):
        allowed = "0 <= e < 1" if bound else "e >= 0"
        raise ValueError(f"eccentricity is {e!r}; a closed form needs {allowed}")
    if not p > separatrix(e):
        raise ValueError(
            f"semi-latus rectum is {p!r}; with eccentricity {e!r} it must exceed 6 + 2e = "
            f"{separatrix(e)!r} (GM/c^2)"
        )


def energy_minus_one(p: float, e: float) -> float:
    """``E - 1`` of a massive particle from p, e, without cancellation.

    E^2 - 1 = -(1 - e^2)(p - 4)/(p (p - 3 - e^2)).
    """
    _require_orbit(p, e)
    difference = -(1.0 - e) * (1.0 + e) * (p - 4.0) / (p * (p - 3.0 - e * e))
    return difference / (1.0 + sqrt(1.0 + difference))


def constants_from_elements(p: float, e: float) -> tuple[float, float]:
    """Energy (rest mass 1) and angular momentum from p, e.

    E^2 = ((p - 2)^2 - 4 e^2)/(p (p - 3 - e^2)), L^2 = p^2/(p - 3 - e^2).

    Raises
    ------
    ValueError
        If ``p <= 6 + 2e`` or ``e < 0``.
    """
    return 1.0 + energy_minus_one(p, e), p / sqrt(p - 3.0 - e * e)


def elements_from_constants(excess: float, momentum: float) -> tuple[float, float]:
    """``p, e`` from ``excess = E - 1`` and L.

    With s = u1 + u2 = 2/p and q = u1 u2 = (1 - e^2)/p^2 the cubic reads
    s/2 - s^2 - 1/L^2 + q = 0, q = (1 - E^2)/(2 L^2 (1/2 - s)): concave in s up to the first root,
    so Newton's steps from s = 0 rise to it, and weak fields lose no digits.

    Raises
    ------
    ValueError
        If there is no orbit outside the barrier with these constants.
    """
    square = momentum * momentum
    defect = -excess * (2.0 + excess)
    if not square > 12.0:
        raise ValueError(f"angular momentum is {momentum!r}; turning points need L^2 > 12")
    s = 0.0
    for _ in range(200):
        q = defect / (2.0 * square * (0.5 - s))
        slope = 0.5 - 2.0 * s + q / (0.5 - s)
        if not slope > 0.0:
            break
        step = (1.0 / square + s * s - 0.5 * s - q) / slope
        s += step
        if step <= 4e-17 * s:
            break
        if not s < 1.0 / 3.0:
            break
    p = 2.0 / s
    e2 = 1.0 - defect / (2.0 * square * (0.5 - s)) * p * p
    if not (s < 1.0 / 3.0 and e2 > -1e-14 and p > separatrix(sqrt(max(e2, 0.0))) - 1e-12):
        raise ValueError(
            f"E - 1 = {excess!r} and L = {momentum!r} have no turning point outside the barrier"
        )
    return p, sqrt(max(e2, 0.0))


def turning_radii(p: float, e: float) -> tuple[float, float]:
    """Periapsis and apoapsis (infinite for e >= 1)."""
    _require_orbit(p, e)
    return p / (1.0 + e), p / (1.0 - e) if e < 1.0 else float("inf")


def precession_per_orbit(p: float, e: float) -> float:
    """Azimuth per radial period beyond 2 pi, without cancellation in weak fields.

    Phi = 4 sqrt(p/(p - 6 + 2e)) K(4e/(p - 6 + 2e)) = 2 pi/M, M the arithmetic-geometric mean of
    sqrt(1 - (6 - 2e)/p) and sqrt(1 - (6 + 2e)/p); the mean is taken of the differences from 1.
    """
    _require_orbit(p, e, bound=True)
    a, b = ((6.0 - 2.0 * e) / p, (6.0 + 2.0 * e) / p)
    a, b = a / (1.0 + sqrt(1.0 - a)), b / (1.0 + sqrt(1.0 - b))
    for _ in range(60):
        if abs(a - b) <= 1e-17 * b:
            break
        a, b = 0.5 * (a + b), (a + b - a * b) / (1.0 + sqrt((1.0 - a) * (1.0 - b)))
    return 2.0 * pi * a / (1.0 - a)


def azimuth_per_radial_period(p: float, e: float) -> float:
    """Azimuth from periapsis to periapsis, in radians."""
    return 2.0 * pi + precession_per_orbit(p, e)


def azimuth(p: float, e: float, chi: float) -> float:
    """Azimuth swept from the periapsis to the anomaly ``chi``.

    2 sqrt(p/(p - 6 + 2e)) [K(m) - F((pi - chi)/2 | m)], m = 4e/(p - 6 + 2e).

    Parameters
    ----------
    p, e, chi : float
        For e >= 1, ``|chi| <= acos(-1/e)``.
    """
    from scipy.special import ellipk, ellipkinc

    _require_orbit(p, e)
    if e >= 1.0 and abs(chi) > acos(-1.0 / e):
        raise ValueError(f"anomaly is {chi!r}; with eccentricity {e!r} it stays within acos(-1/e)")
    m = 4.0 * e / (p - 6.0 + 2.0 * e)
    scale = 2.0 * sqrt(p / (p - 6.0 + 2.0 * e))
    return scale * float(ellipk(m) - ellipkinc(0.5 * (pi - chi), m))


def _from_apoapsis(p: float, e: float, theta: float) -> ConicTimes:
    """Azimuth and times from the apoapsis to sin^2(theta) = (u - u1)/(u2 - u1), 0..pi/2.

    I_n = integral of dphi/u^n; the derivative of sqrt(P)/u, P = (du/dphi)^2, gives
    I_2 = (I_1 - L^2 I_{-1} + L^2 sqrt(P)/u)/(1 - E^2).
    """
    from scipy.special import elliprd, elliprf, elliprj

    energy, momentum = constants_from_elements(p, e)
    defect = (1.0 - e) * (1.0 + e) * (p - 4.0) / (p * (p - 3.0 - e * e))
    u1, u3 = (1.0 - e) / p, 0.5 - 2.0 / p
    span = 2.0 * e / p
    k2 = span / (u3 - u1)
    s, c = sin(theta), cos(theta)
    delta = 1.0 - k2 * s * s
    first = s * float(elliprf(c * c, delta, 1.0))
    cube = s**3 / 3.0

    def third(n: float) -> float:
        return first + n * cube * float(elliprj(c * c, delta, 1.0, 1.0 - n * s * s))

    scale = 2.0 / sqrt(2.0 * (u3 - u1))
    phi = scale * first
    phi_u = scale * (u1 * first + span * cube * float(elliprd(c * c, delta, 1.0)))
    phi_r = scale * third(-span / u1) / u1
    u = u1 + span * s * s
    slope = span * s * c * sqrt(2.0 * (u3 - u1) * delta)
    square = momentum * momentum
    phi_r2 = (phi_r - square * (phi_u - slope / u)) / defect
    near = scale * third(2.0 * span / (1.0 - 2.0 * u1)) / (1.0 - 2.0 * u1)
    coordinate = energy / momentum * (phi_r2 + 2.0 * phi_r + 4.0 * near)
    return ConicTimes(phi, coordinate, phi_r2 / momentum)


def times_since_periapsis(p: float, e: float, chi: float) -> ConicTimes:
    """Azimuth, areal coordinate time and proper time from the periapsis to ``chi`` (bound).

    Elliptic integrals of all three kinds in Carlson's form; ``chi`` may be any number.
    """
    _require_orbit(p, e, bound=True)
    turns = floor(chi / (2.0 * pi) + 0.5)
    rest = chi - 2.0 * pi * turns
    whole = _from_apoapsis(p, e, 0.5 * pi)
    part = _from_apoapsis(p, e, 0.5 * (pi - abs(rest)))
    sign = 1.0 if rest >= 0 else -1.0

    def total(full: float, piece: float) -> float:
        return 2.0 * turns * full + sign * (full - piece)

    return ConicTimes(
        total(whole.azimuth, part.azimuth),
        total(whole.coordinate, part.coordinate),
        total(whole.proper, part.proper),
    )


def radial_period(p: float, e: float) -> float:
    """Coordinate time from periapsis to periapsis."""
    _require_orbit(p, e, bound=True)
    return 2.0 * _from_apoapsis(p, e, 0.5 * pi).coordinate


def proper_radial_period(p: float, e: float) -> float:
    """Proper time from periapsis to periapsis."""
    _require_orbit(p, e, bound=True)
    return 2.0 * _from_apoapsis(p, e, 0.5 * pi).proper


def impact_parameter(periapsis: float) -> float:
    """Impact parameter L/E of light with this periapsis: r0/sqrt(1 - 2/r0) (r0 > 3)."""
    if not periapsis > 3.0:
        raise ValueError(f"periapsis is {periapsis!r}; light turns only outside r = 3 GM/c^2")
    return periapsis / sqrt(1.0 - 2.0 / periapsis)


def light_periapsis(impact: float) -> float:
    """Periapsis of light with impact parameter b > 3 sqrt 3.

    r0 = (2b/sqrt 3) cos(acos(-3 sqrt 3/b)/3) (Darwin 1959; from memory).
    """
    if not impact > 3.0 * sqrt(3.0):
        raise ValueError(f"impact parameter is {impact!r}; light turns only above 3 sqrt 3")
    return 2.0 * impact / sqrt(3.0) * cos(acos(-3.0 * sqrt(3.0) / impact) / 3.0)


def light_deflection(periapsis: float) -> float:
    """Total deflection angle of light with periapsis r0 > 3.

    4 sqrt(r0/Y) [K(m) - F(z|m)] - pi, Y^2 = (r0 - 2)(r0 + 6), m = (Y - r0 + 6)/(2Y),
    sin^2 z = (Y - r0 + 2)/(Y - r0 + 6) (Darwin 1959; Chandrasekhar 1983, sec. 20; from memory).
    Far out, where that difference loses digits, the convergent series in 1/b with coefficients
    sqrt(pi) 2^n Gamma((3n + 1)/2)/(n! Gamma(n/2 + 1)) (Keeton & Petters 2005; from memory).
    """
    impact = impact_parameter(periapsis)
    if periapsis > 60.0:
        return sum(
            sqrt(pi) * exp(n * log(2.0 / impact) + _series_gammas(n)) for n in range(24, 0, -1)
        )
    from scipy.special import elliprf

    y = sqrt((periapsis - 2.0) * (periapsis + 6.0))
    # Y - r0 = (4 r0 - 12)/(Y + r0) without cancellation; 1 - m likewise.
    gap = (4.0 * periapsis - 12.0) / (y + periapsis)
    m1 = (y + periapsis - 6.0) / (2.0 * y)
    # K - F(z) = F of the complementary amplitude, tan(w) = cot(z)/sqrt(1 - m).
    cot = sqrt(4.0 / (gap + 2.0))
    w = atan(cot / sqrt(m1))
    s, c = sin(w), cos(w)
    integral = s * float(elliprf(c * c, c * c + m1 * s * s, 1.0))
    return 4.0 * sqrt(periapsis / y) * integral - pi


def _series_gammas(n: int) -> float:
    return lgamma(1.5 * n + 0.5) - lgamma(n + 1.0) - lgamma(0.5 * n + 1.0)


def strong_deflection(impact: float) -> float:
    """Deflection in the strong-deflection limit, -ln(b/b_c - 1) - pi + ln(216 (7 - 4 sqrt 3)).

    Bozza 2002, PRD 66, 103001 (from memory); the first term of an expansion about b_c = 3 sqrt 3.
    """
    critical = 3.0 * sqrt(3.0)
    if not impact > critical:
        raise ValueError(f"impact parameter is {impact!r}; light turns only above 3 sqrt 3")
    return -log(impact / critical - 1.0) - pi + log(216.0 / (7.0 + 4.0 * sqrt(3.0)))


def cycloid_fall(apex: float, radius: float) -> ConicTimes:
    """Radial fall from rest at ``apex`` to ``radius``: azimuth 0, areal time, proper time.

    r = (R/2)(1 + cos eta), tau = sqrt(R^3/8)(eta + sin eta),
    t = 2 ln|(x + tan(eta/2))/(x - tan(eta/2))| + 2 x [eta + (R/4)(eta + sin eta)], x^2 = R/2 - 1
    (Misner, Thorne & Wheeler 1973, eqs. 25.38 and 31.10; from memory).  At and inside the horizon
    the areal time is infinite.
    """
    if not apex > 2.0 or not 0.0 <= radius <= apex:
        raise ValueError(
            f"apex is {apex!r} and radius {radius!r}; a fall needs apex > 2 and 0 <= radius <= apex"
        )
    # tan(eta/2) = sqrt((R - r)/r)
    eta = 2.0 * atan(sqrt((apex - radius) / radius)) if radius > 0.0 else pi
    rise = eta + sin(eta)
    proper = sqrt(apex**3 / 8.0) * rise
    if radius <= 2.0:
        return ConicTimes(0.0, float("inf"), proper)
    x, y = sqrt(0.5 * apex - 1.0), tan(0.5 * eta)
    # x - y = (x^2 - y^2)/(x + y), x^2 - y^2 = R (r - 2)/(2 r)
    ratio = log(2.0 * radius * (x + y) ** 2 / (apex * (radius - 2.0)))
    return ConicTimes(0.0, 2.0 * ratio + 2.0 * x * (eta + 0.25 * apex * rise), proper)


def fall_time_from_infinity(start: float, radius: float) -> ConicTimes:
    """Radial fall of a particle at rest at infinity (E = 1), from ``start`` to ``radius``.

    tau = (sqrt 2/3)(R^{3/2} - r^{3/2}) (Misner, Thorne & Wheeler 1973, sec. 31.2; from memory).
    """
    if not 0.0 <= radius <= start:
        raise ValueError(f"radius is {radius!r}; it must lie between 0 and the start {start!r}")

    def areal(r: float) -> float:
        root = sqrt(0.5 * r)
        return 4.0 * (root**3 / 3.0 + root) - 2.0 * log1p(2.0 / (root - 1.0))

    proper = sqrt(2.0) / 3.0 * (start**1.5 - radius**1.5)
    coordinate = areal(start) - areal(radius) if radius > 2.0 else float("inf")
    return ConicTimes(0.0, coordinate, proper)


def horizon_to_centre(energy: float) -> float:
    """Proper time from the horizon to r = 0 on a radial fall with energy E >= 0.

    (4/3) 2F1(1/2, 3/2; 5/2; 1 - E^2): 4/3 from rest at infinity, pi at most, at E = 0
    (Misner, Thorne & Wheeler 1973, sec. 31.3; Lewis & Kwan 2007, PASA 24, 46).
    """
    from scipy.special import hyp2f1

    if not energy >= 0.0:
        raise ValueError(f"energy is {energy!r}; it must not be negative")
    return 4.0 / 3.0 * float(hyp2f1(0.5, 1.5, 2.5, (1.0 - energy) * (1.0 + energy)))


def tangential_speed(p: float, e: float) -> float:
    """Coordinate speed at the periapsis, r dphi/dt, from p, e (areal chart).

    L (1 - 2/r)/(E r) at r = p/(1 + e): a start that needs no quadrature.
    """
    energy, momentum = constants_from_elements(p, e)
    r = p / (1.0 + e)
    return momentum * (1.0 - 2.0 / r) / (energy * r)
