"""Quadratures of the radial equation with mpmath: periods, and times to the ends of orbits.

(dr/dtau)^2 = E^2 - (1 - 2/r)(mu + L^2/r^2), dphi = L/r^2 dtau, dt = E/(1 - 2/r) dtau, with the
energy and angular momentum of :mod:`mp_geodesic` (from the Cartesian metric).  GM = c = 1.
Nothing here is taken from the package.  Equations: Misner, Thorne & Wheeler 1973, sec. 25.3-25.5
(from memory).
"""

from __future__ import annotations

from typing import Any

import mpmath
from mpmath import mp


def turning_points(energy: Any, momentum: Any, massive: bool = True) -> list[Any]:
    """Inverse radii where dr/dtau = 0, ascending: real roots of the cubic (Cardano, Viete).

    u^3 - u^2/2 + mu u/L^2 + (E^2 - mu)/(2 L^2) = 0, u = x + 1/6, x^3 + P x + Q = 0; at thrice the
    digits, because u1 and u2 are small beside the third root.
    """
    mu = 1 if massive else 0
    square = momentum**2
    if square == 0:
        return [(1 - energy**2) / 2] if mu and energy < 1 else []
    with mp.workdps(3 * mp.dps):
        linear = mu / square
        p = linear - mpmath.mpf(1) / 12
        q = linear / 6 - mpmath.mpf(1) / 108 + (energy**2 - mu) / (2 * square)
        if 4 * p**3 + 27 * q**2 <= 0:
            size = 2 * mpmath.sqrt(-p / 3)
            angle = mpmath.acos(3 * q / (p * size)) / 3
            x = [size * mpmath.cos(angle - 2 * mpmath.pi * k / 3) for k in range(3)]
        else:
            root = mpmath.sqrt(q**2 / 4 + p**3 / 27)
            cube = -q / 2 - root if q > 0 else -q / 2 + root
            c = mpmath.sign(cube) * mpmath.cbrt(abs(cube))
            x = [c - p / (3 * c)]
        found = sorted(r + mpmath.mpf(1) / 6 for r in x)
    return [+u for u in found]


def periods(energy: Any, momentum: Any) -> dict[str, Any]:
    """Radial period (chart time, proper time) and azimuth of a bound orbit.

    With u = (u1 + u2)/2 - (u2 - u1)/2 cos chi the radial equation is dphi = dchi/sqrt(2(u3 - u)).
    """
    u1, u2, u3 = turning_points(energy, momentum)

    def phi_rate(chi: Any) -> tuple[Any, Any]:
        u = (u1 + u2) / 2 - (u2 - u1) / 2 * mpmath.cos(chi)
        return 1 / mpmath.sqrt(2 * (u3 - u)), u

    def tau_rate(chi: Any) -> Any:
        rate, u = phi_rate(chi)
        return rate / (momentum * u**2)

    def t_rate(chi: Any) -> Any:
        rate, u = phi_rate(chi)
        return rate * energy / (momentum * u**2 * (1 - 2 * u))

    return {
        "periapsis": 1 / u2,
        "apoapsis": 1 / u1,
        "azimuth_per_radial_period": 2 * _periodic(lambda chi: phi_rate(chi)[0]),
        "proper_radial_period": 2 * _periodic(tau_rate),
        "radial_period": 2 * _periodic(t_rate),
    }


def _periodic(integrand: Any) -> Any:
    """Integral over [0, pi] of an even, analytic, 2 pi periodic function: trapezoids converge
    geometrically; doubled until two agree."""
    n, previous = 32, None
    for _ in range(14):
        total = (integrand(mpmath.mpf(0)) + integrand(mpmath.pi)) / 2
        total += mpmath.fsum(integrand(mpmath.pi * k / n) for k in range(1, n))
        value = total * mpmath.pi / n
        if previous is not None and abs(value - previous) < abs(value) * mpmath.mpf(10) ** (
            5 - mp.dps
        ):
            return value
        n, previous = 2 * n, value
    raise ArithmeticError("the trapezoids did not converge")


def time_to(
    energy: Any, momentum: Any, start: Any, outward: bool, target: int, chart: str, massive: bool
) -> dict[str, Any]:
    """Proper (affine) time, and the ingoing chart's time, from areal ``start`` down to ``target``.

    ``outward``: the orbit first climbs to its outer turning point.  With r = top - y^2 the
    turning point is regular; it and the horizon are 0/0, so the integrands are evaluated with
    more than twice the digits of the nodes, and the arguments must have as many.
    """
    mu = 1 if massive else 0
    fine = 3 * mp.dps

    def speed(r: Any) -> Any:
        return mpmath.sqrt(abs(energy**2 - (1 - 2 / r) * (mu + momentum**2 / r**2)))

    def shift(r: Any) -> Any:
        """dT = dt + shift dr."""
        if chart == "kerr-schild":
            return 2 / (r - 2)
        return (mpmath.sqrt(2 / r) if chart == "painleve-gullstrand" else 1) / (1 - 2 / r)

    with mp.workdps(fine):
        top = mpmath.mpf(start)
        if outward:
            turns = [1 / u for u in turning_points(energy, momentum, massive) if u > 0]
            top = min(r for r in turns if r > start)
        horizon, outer, inner = (mpmath.sqrt(top - q) for q in (2, start, target))

    def leg(kind: str, far: Any) -> Any:
        def rate(y: Any) -> Any:
            with mp.workdps(fine):
                r = top - y**2
                if kind == "proper":
                    return 2 * y / speed(r)
                sign = 1 if kind == "climb" else -1
                return 2 * y * (energy / ((1 - 2 / r) * speed(r)) + sign * shift(r))

        points = [0, horizon, far] if horizon < far else [0, far]
        with mp.workdps(mp.dps + 8):
            return mpmath.quad(rate, points)

    tau, time = leg("proper", inner), None
    if outward:
        tau += leg("proper", outer)
    if chart in ("kerr-schild", "painleve-gullstrand", "eddington-finkelstein"):
        time = leg("fall", inner) + (leg("climb", outer) if outward else 0)
    return {"parameter": +tau, "chart_time": time}
