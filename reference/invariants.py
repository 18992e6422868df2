"""Energy, angular momentum and norm of states, in float64 without cancellation.

The expressions are those of the metric in each chart with ``E - 1`` carried as a quantity of
its own: for an Earth satellite it is 1e-10, and a difference of two numbers near 1 would keep
six of its digits.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from truefall.reference.charts import (
    CHARTS,
    HORIZON_RADII,
    INGOING,
    areal_radius,
    horizon_gap,
    radius_slope,
)
from truefall.reference.units import SYSTEM, SYSTEMS

__all__ = ["Invariants", "state_invariants"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Invariants:
    """Constants of the motion computed from states.

    Attributes
    ----------
    energy, energy_minus_one : (n,)
        Per rest energy; for light 1 and 0 by scaling.
    angular_momentum : (n, 3)
        Per rest mass, length^2/time; for light the impact vector ``L/E``, a length.
    rate : (n,)
        ``dtau/dT`` for massive particles; NaN for light.
    null : (n,)
        For light ``g(v, v)`` in units of c^2, zero for a ray; NaN for massive particles.
    scale : (n,)
        ``max(|E - 1|, GM/(c^2 r))``, the measure of an energy drift.
    """

    energy: Floats
    energy_minus_one: Floats
    angular_momentum: Floats
    rate: Floats
    null: Floats
    scale: Floats


def _excess(
    chart: str, r: Floats, gap: Floats, rdot: Floats, tangential2: Floats
) -> tuple[Floats, Floats]:
    """``q - 1`` and ``E/(dT/dtau) - 1``; ``q = (dtau/dT)^2``, ``tangential2 = r^2 phidot^2``."""
    m = 2.0 / r
    if chart == "kerr-schild":
        return -m - 2 * m * rdot - (1 + m) * rdot**2 - tangential2, -m - m * rdot
    if chart == "painleve-gullstrand":
        g = np.sqrt(m)
        return -m - 2 * g * rdot - rdot**2 - tangential2, -m - g * rdot
    if chart == "eddington-finkelstein":
        return -m - 2 * rdot - tangential2, -m - rdot
    return -m - rdot**2 * (r / gap) - tangential2, -m


def _energy_minus_one(
    chart: str, r: Floats, gap: Floats, rdot: Floats, tangential2: Floats
) -> tuple[Floats, Floats]:
    """``E - 1`` and ``dtau/dT`` of massive particles."""
    m = 2.0 / r
    dq, de = _excess(chart, r, gap, rdot, tangential2)
    root = np.sqrt(1.0 + dq)
    # (1 + de)/root - 1 = (de - (root - 1))/root, with root - 1 = dq/(1 + root)
    excess = (de - dq / (1.0 + root)) / root
    if chart == "eddington-finkelstein":
        # there dr/dT, far larger than E - 1 in weak fields, stands in both terms:
        # -rdot + 2 rdot/(1 + root) = -rdot dq/(1 + root)^2
        near = (m + tangential2) / (1.0 + root) - m
        excess = (near - rdot * dq / (1.0 + root) ** 2) / root
    elif chart not in INGOING:
        # near the horizon f = 1 - m is small, and so are all terms of q: no 1 to subtract there
        f = gap / r
        close = np.sqrt(f - rdot**2 / f - tangential2)
        excess = np.where(f < 0.25, f / close - 1.0, excess)
        root = np.where(f < 0.25, close, root)
    return excess, root


def state_invariants(
    position: npt.ArrayLike,
    velocity: npt.ArrayLike,
    chart: str,
    system: str,
    gm: float,
    particle: str,
) -> Invariants:
    """Constants of the motion of ``n`` states.

    Parameters
    ----------
    position, velocity : (n, 3) array_like
        Cartesian in the chart, in the system's units; velocity per chart time.
    chart, system, gm, particle
        As in an orbit file.

    Returns
    -------
    Invariants
        NaN where a state lies outside the chart or is not timelike.

    Raises
    ------
    ValueError
        For unknown names, a ``gm`` that is not positive, or shapes that do not match.
    """
    for key, value, allowed in (
        ("chart", chart, CHARTS),
        ("system", system, SYSTEMS),
        ("particle", particle, ("massive", "light")),
    ):
        if value not in allowed:
            raise ValueError(f"{key} is {value!r}; allowed are {', '.join(allowed)}")
    if not (gm > 0 and np.isfinite(gm)):
        raise ValueError(f"gm is {gm}; it must be positive and finite")
    c = float(SYSTEM[system].c_exact)
    length = gm / c**2
    x = np.atleast_2d(np.asarray(position, dtype=np.float64)) / length
    v = np.atleast_2d(np.asarray(velocity, dtype=np.float64)) / c
    if x.shape != v.shape or x.shape[1] != 3:
        raise ValueError("position and velocity must both have shape (n, 3)")
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        rho = np.linalg.norm(x, axis=1)
        gap = horizon_gap(chart, rho)
        if chart not in INGOING:  # isotropic coordinates would go on behind the horizon
            rho = np.where(rho > HORIZON_RADII[chart], rho, np.nan)
        r = areal_radius(chart, rho)
        swirl = np.cross(x, v)  # rho^2 phidot along the normal
        rdot = radius_slope(chart, rho) * np.sum(x * v, axis=1) / rho
        tangential2 = np.sum(swirl**2, axis=1) * (r / rho**2) ** 2
        spin = swirl * (r / rho)[:, None] ** 2
        if particle == "light":
            dq, de = _excess(chart, r, gap, rdot, tangential2)
            share = gap / r if chart not in INGOING else 1.0 + de
            return Invariants(
                energy=np.ones_like(r),
                energy_minus_one=np.zeros_like(r),
                angular_momentum=spin / share[:, None] * length,
                rate=np.full_like(r, np.nan),
                null=-(1.0 + dq),
                scale=1.0 / r,
            )
        excess, root = _energy_minus_one(chart, r, gap, rdot, tangential2)
        return Invariants(
            energy=1.0 + excess,
            energy_minus_one=excess,
            angular_momentum=spin / root[:, None] * (length * c),
            rate=root,
            null=np.full_like(r, np.nan),
            scale=np.maximum(np.abs(excess), 1.0 / r),
        )
