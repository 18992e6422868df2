"""From a start (exact rationals) to the exact constants of the motion and its class.

Units: GM = c = 1, lengths in GM/c^2.  Everything here is exact (:mod:`.field`); balls appear
only to write a number into a sentence.

Source of the expressions: the metric of each chart (DEVELOPERS.md, "The exact engine").
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import flint
from flint import arb, fmpq

from truefall.reference.exact.field import Exact, is_zero, sign, sqrt_of, to_ball

__all__ = ["INGOING", "Motion", "StartError", "motion_from_elements", "motion_from_start"]

#: Charts that are regular through the future horizon.
INGOING = ("kerr-schild", "painleve-gullstrand", "eddington-finkelstein")

_CENTRE = {"areal": fmpq(2), "isotropic": fmpq(1, 2), "harmonic": fmpq(1)}


class StartError(ValueError):
    """A start that is no orbit.

    Attributes
    ----------
    key : str
        The orbit-file key at fault, such as ``start.velocity``.
    """

    def __init__(self, message: str, key: str) -> None:
        super().__init__(message)
        self.key = key


@dataclass(frozen=True)
class Motion:
    """The exact constants of one geodesic, GM = c = 1.

    Attributes
    ----------
    mu : int
        1 for a massive particle, 0 for light.
    energy_squared, momentum_squared : Exact
        ``E^2`` and ``L^2`` per rest mass; for light ``E^2 = 1``.
    energy_sign, inward : int
        Signs of ``E`` and of ``w = -dr/dtau`` at the start.
    inverse_radius : Exact
        ``u = 1/r`` of the start.
    double_root : Exact or None
        The radius (as ``u``) of the circle that the constants belong to, if the cubic has a
        double root; ``triple`` tells the innermost stable circle.
    circular : bool
        The start sits on that circle and stays there.
    place : callable or None
        Encloses ``u`` and ``w^2`` of the start at the current precision where they are no
        algebraic numbers (a start given by elements); else None.
    """

    mu: int
    energy_squared: Exact
    momentum_squared: Exact
    energy_sign: int
    inward: int
    inverse_radius: Exact
    inward_squared: Exact
    double_root: Exact | None
    triple: bool
    circular: bool
    place: Callable[[], tuple[arb, arb]] | None = None

    def start_balls(self) -> tuple[arb, arb]:
        """``u`` and ``w^2`` of the start at flint's current precision."""
        if self.place is not None:
            return self.place()
        return to_ball(self.inverse_radius), to_ball(self.inward_squared)


def _kinematics(
    chart: str, position: tuple[fmpq, ...], velocity: tuple[fmpq, ...]
) -> tuple[Exact, Exact, fmpq, int]:
    """``r``, ``dr/dT``, ``(dphi/dT)^2`` and the sign of ``dr/dT`` at the start."""
    rho2 = sum((x * x for x in position), fmpq(0))
    if rho2 == 0:
        raise StartError("the position is the centre itself (r = 0)", "start.position")
    rho = sqrt_of(rho2)
    along = sum((x * v for x, v in zip(position, velocity, strict=True)), fmpq(0))
    cross2 = rho2 * sum((v * v for v in velocity), fmpq(0)) - along * along
    phidot2 = cross2 / (rho2 * rho2)
    if chart in _CENTRE and sign(rho - _CENTRE[chart]) <= 0:
        size = float(to_ball(rho))
        raise StartError(
            f"the position lies at or inside the horizon: its size is {size:.9g} GM/c^2, and the "
            f"{chart} chart begins outside {float(to_ball(_CENTRE[chart])):g} GM/c^2; choose an "
            "ingoing chart (kerr-schild, painleve-gullstrand, eddington-finkelstein)",
            "start.position",
        )
    if chart == "isotropic":
        radius = rho + 1 + 1 / (4 * rho)
        rdot = (1 - 1 / (4 * rho * rho)) * (along / rho)
    elif chart == "harmonic":
        radius, rdot = rho + 1, along / rho
    else:
        radius, rdot = rho, along / rho
    return radius, rdot, phidot2, int(along > 0) - int(along < 0)


def _norm_and_energy(chart: str, r: Exact, rdot: Exact, phidot2: fmpq) -> tuple[Exact, Exact]:
    """``q = (dtau/dT)^2`` and ``E/(dT/dtau)``, regular at the horizon in the ingoing charts."""
    f = 1 - 2 / r
    angular = r * r * phidot2
    if chart == "kerr-schild":
        g = 2 / r
        return f - 2 * g * rdot - (1 + g) * rdot * rdot - angular, f - g * rdot
    if chart == "painleve-gullstrand":
        g = sqrt_of(2 / r)
        return f - 2 * g * rdot - rdot * rdot - angular, f - g * rdot
    if chart == "eddington-finkelstein":
        return f - 2 * rdot - angular, f - rdot
    return f - rdot * rdot / f - angular, f


def _double_root(mu: int, energy2: Exact, momentum2: Exact) -> tuple[Exact | None, bool]:
    """The exact double root of the radial cubic, and whether it is a triple one."""
    if is_zero(momentum2):
        return None, False
    a, b, c, d = 2 * momentum2, -momentum2, fmpq(2 * mu), energy2 - mu
    discriminant = (
        18 * a * b * c * d
        - 4 * b * b * b * d
        + b * b * c * c
        - 4 * a * c * c * c
        - 27 * a * a * d * d
    )
    if not is_zero(discriminant):
        return None, False
    spread = b * b - 3 * a * c
    if is_zero(spread):
        return fmpq(1, 6), True
    return (9 * a * d - b * c) / (2 * spread), False


def _massive(chart: str, r: Exact, rdot: Exact, phidot2: fmpq) -> tuple[Exact, Exact, int, Exact]:
    q, energy_rate = _norm_and_energy(chart, r, rdot, phidot2)
    if sign(q) <= 0:
        inside = sign(r - 2) <= 0
        reason = (
            "inside the horizon a particle must fall faster than that"
            if inside and sign(rdot) >= 0
            else "the velocity is at or above the speed of light there"
        )
        raise StartError(
            f"{reason} (dtau^2/dT^2 = {float(to_ball(q)):.6g} must be positive); give the "
            "chart velocity d position / d (chart time), in the units of the file",
            "start.velocity",
        )
    return (
        energy_rate * energy_rate / q,
        r * r * r * r * phidot2 / q,
        sign(energy_rate),
        rdot * rdot / q,
    )


def _light(chart: str, r: Exact, rdot: Exact, phidot2: fmpq) -> tuple[Exact, Exact, int, Exact]:
    """Constants of a ray: only the ratio of ``dr`` to ``dphi`` matters, in every chart alike.

    With ``E = 1``: ``1/L^2 = (du/dphi)^2 + u^2 (1 - 2u)``, and ``w = L du/dphi``.
    """
    inside = sign(r - 2) <= 0
    if inside and sign(rdot) >= 0:
        raise StartError(
            "at or inside the horizon light moves inward in every ingoing chart; this direction "
            "points outward",
            "start.velocity",
        )
    if phidot2 == 0:
        if chart == "eddington-finkelstein" and sign(rdot) < 0:
            raise StartError(
                "ingoing radial light has no velocity in the eddington-finkelstein chart (its "
                "time stands still along the ray); choose kerr-schild or painleve-gullstrand",
                "start.velocity",
            )
        return fmpq(1), fmpq(0), 1, fmpq(1)
    u = 1 / r
    slope2 = u * u * u * u * rdot * rdot / phidot2
    inverse = slope2 + u * u * (1 - 2 * u)
    if sign(inverse) <= 0:
        raise StartError(
            "no light ray with positive energy has this direction here, inside the horizon; turn "
            "the direction further inward",
            "start.velocity",
        )
    momentum2 = 1 / inverse
    return fmpq(1), momentum2, 1, slope2 * momentum2


def motion_from_start(
    particle: str, chart: str, position: tuple[Fraction, ...], velocity: tuple[Fraction, ...]
) -> Motion:
    """The exact constants of the geodesic that starts there.

    Parameters
    ----------
    particle : {"massive", "light"}
    chart : str
        One of the six chart names.
    position, velocity : three Fractions each
        In units GM/c^2 and c; for light only the direction of the velocity counts.

    Raises
    ------
    StartError
        If no timelike (or null) future-directed geodesic starts like that.
    """
    place = tuple(fmpq(x.numerator, x.denominator) for x in position)
    speed = tuple(fmpq(v.numerator, v.denominator) for v in velocity)
    if particle == "light" and all(v == 0 for v in speed):
        raise StartError("light needs a direction, and the velocity is zero", "start.velocity")
    with flint.ctx.workprec(128):
        r, rdot, phidot2, outward = _kinematics(chart, place, speed)
        mu = 1 if particle == "massive" else 0
        constants = (_massive if mu else _light)(chart, r, rdot, phidot2)
    energy2, momentum2, energy_sign, inward2 = constants
    double, triple = _double_root(mu, energy2, momentum2)
    u = 1 / r
    circular = double is not None and outward == 0 and is_zero(u - double)
    return Motion(
        mu=mu,
        energy_squared=energy2,
        momentum_squared=momentum2,
        energy_sign=energy_sign,
        inward=-outward,
        inverse_radius=u,
        inward_squared=inward2,
        double_root=double,
        triple=triple,
        circular=circular,
    )


def motion_from_elements(p: Fraction, e: Fraction, anomaly: Fraction) -> Motion:
    """The exact constants of ``r = p/(1 + e cos chi)`` (areal ``r``, massive, GM = c = 1).

    ``E^2`` and ``L^2`` are rational in ``p`` and ``e``: Darwin 1959, Proc. R. Soc. A 249, 180;
    Cutler, Kennefick & Poisson 1994, Phys. Rev. D 50, 3816 (equation numbers not seen).

    Raises
    ------
    StartError
        Outside ``e >= 0``, ``p > 6 + 2e``, ``1 + e cos chi > 0``.
    """
    if e < 0:
        raise StartError("eccentricity must be 0 or more", "start.eccentricity")
    if p <= 6 + 2 * e:
        raise StartError(
            f"semilatus_rectum is {float(p):.9g} GM/c^2, and no orbit with eccentricity "
            f"{float(e):.9g} turns round there: p must exceed (6 + 2 e) GM/c^2 = "
            f"{float(6 + 2 * e):.9g} GM/c^2 (the separatrix); give position and velocity instead",
            "start.semilatus_rectum",
        )
    pq, eq, chi = (fmpq(x.numerator, x.denominator) for x in (p, e, anomaly))
    scale = pq - 3 - eq * eq
    energy2 = ((pq - 2) * (pq - 2) - 4 * eq * eq) / (pq * scale)
    momentum2 = pq * pq / scale

    def place() -> tuple[arb, arb]:
        # w^2 = L^2 e^2 sin^2(chi) (p - 6 - 2 e cos chi) / p^3: the potential, factored
        cosine, sine = arb(chi).cos(), arb(chi).sin()
        u = (1 + eq * cosine) / pq
        return u, momentum2 * (eq * sine) ** 2 * (pq - 6 - 2 * eq * cosine) / pq**3

    with flint.ctx.workprec(256):
        if not place()[0] > 0:
            raise StartError(
                "1 + eccentricity cos(anomaly) must be positive: this anomaly lies beyond the "
                "asymptote of the orbit",
                "start.anomaly",
            )
        sine = arb(chi).sin()
    circular = eq == 0
    inward = 0 if chi == 0 or circular else (-1 if sine > 0 else 1)
    return Motion(
        mu=1,
        energy_squared=energy2,
        momentum_squared=momentum2,
        energy_sign=1,
        inward=inward,
        inverse_radius=(1 + eq) / pq,
        inward_squared=fmpq(0),
        double_root=1 / pq if circular else None,
        triple=False,
        circular=circular,
        place=None if chi == 0 or circular else place,
    )
