"""Drifts of the constants of the motion, computed from obtained states, with their guards."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.reference.invariants import Invariants
    from truefall.validate.trajectory import Trajectory

__all__ = ["Drift", "Drifts", "drifts_of", "openness"]

Floats = npt.NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)
#: Roundings on the way from a state to its invariants, in units of 2^-52 (about ten operations).
_ROUNDINGS = 16
#: Smallest relative step of the differences below: its square root of 2^-52 loses half the digits.
_STEP = 2.0**-26


@dataclass(frozen=True)
class Drift:
    """A constant of the motion computed from the obtained states, against its true value.

    Attributes
    ----------
    values : (n,)
        Relative.  Energy: signed, to max(|E - 1|, GM/(c^2 r)).  Angular momentum: size of the
        vector difference, to the true size (radial orbits have none: to sqrt(GM r)).
    guard : (n,)
        What the digits and the rounding of the states can do to it.
    slope : float
        Least-squares slope per unit of time (angular momentum: of its size).
    """

    values: Floats
    guard: Floats
    slope: float


@dataclass(frozen=True)
class Drifts:
    """All that states say about constants; None where they say nothing.

    ``direction`` is the angle between obtained and true orbital plane (n,), radians; ``norm``
    is ``g(v, v)/c^2`` of light, zero for a ray.
    """

    energy: Drift | None = None
    angular_momentum: Drift | None = None
    direction: Floats | None = None
    norm: Drift | None = None


def slope(time: Floats, values: Floats) -> float:
    """Slope of the least-squares line; 0 for fewer than two values."""
    good = np.isfinite(values)
    if good.sum() < 2:
        return 0.0
    t = time[good] - time[good].mean()
    spread = float(np.sum(t * t))
    return float(np.sum(t * values[good]) / spread) if spread > 0 else 0.0


def _invariants(trajectory: Trajectory, position: Floats, velocity: Floats) -> Invariants:
    from truefall.reference.invariants import state_invariants

    m = trajectory.metadata
    return state_invariants(
        position, velocity, m["chart"], m["system"], float(m["gm"]), m["particle"]
    )


def openness(trajectory: Trajectory, velocity: Floats) -> tuple[Floats, Floats, Floats]:
    """What half a unit of the states' digits does to E - 1, L and the norm, (n,) each.

    First order, by central differences in the six components.  Each counts with 2^-51 of its
    vector's size besides: float64's own half unit, and the rounding of r and dr/dt on the way.
    """
    position, quantum = trajectory.position, trajectory.quantisation
    totals = np.zeros((3, len(trajectory)))
    for which, base, digits in ((0, position, quantum.position), (1, velocity, quantum.velocity)):
        size = np.linalg.norm(base, axis=1)
        for k in range(3):
            half_unit = np.broadcast_to(digits, base.shape)[:, k] + 2 * _EPS * size
            step = np.maximum(half_unit, _STEP * np.where(size > 0, size, 1.0))
            shift = np.zeros_like(base)
            shift[:, k] = step
            pair = [
                _invariants(
                    trajectory,
                    position + s * shift if which == 0 else position,
                    velocity + s * shift if which == 1 else velocity,
                )
                for s in (1.0, -1.0)
            ]
            width = half_unit / (2 * step)
            momentum = pair[0].angular_momentum - pair[1].angular_momentum
            totals[0] += np.abs(pair[0].energy_minus_one - pair[1].energy_minus_one) * width
            totals[1] += np.linalg.norm(momentum, axis=1) * width
            totals[2] += np.abs(pair[0].null - pair[1].null) * width
    return totals[0], totals[1], totals[2]


def drifts_of(
    trajectory: Trajectory,
    *,
    energy_minus_one: float,
    momentum: float,
    normal: Floats,
    start_open: bool,
) -> Drifts:
    """Drifts of energy, angular momentum and norm along a trajectory.

    Parameters
    ----------
    energy_minus_one, momentum : float
        The orbit's exact constants, in the file's units.
    normal : (3,)
        Unit normal of its plane; zeros for radial motion.
    start_open : bool
        Whether the start is the first row, with that row's digits: then the constants are open
        by as much as those digits leave open.
    """
    if trajectory.velocity is None:
        return Drifts()
    time = trajectory.time
    inv = _invariants(trajectory, trajectory.position, trajectory.velocity)
    energy_open, momentum_open, norm_open = openness(trajectory, trajectory.velocity)
    if start_open:
        energy_open = energy_open + energy_open[0]
        momentum_open = momentum_open + momentum_open[0]
    energy = norm = None
    if trajectory.metadata["particle"] == "light":
        norm = Drift(inv.null, norm_open + _ROUNDINGS * _EPS, slope(time, inv.null))
    else:
        values = (inv.energy_minus_one - energy_minus_one) / inv.scale
        guard = energy_open / inv.scale + _ROUNDINGS * _EPS
        energy = Drift(values, guard, slope(time, values))
    size = np.linalg.norm(inv.angular_momentum, axis=1)
    scale = np.full(time.size, momentum)
    direction = None
    if momentum == 0.0:
        scale = _circular_momentum(trajectory)
    else:
        with np.errstate(invalid="ignore", divide="ignore"):
            tilt = np.cross(inv.angular_momentum / size[:, None], normal)
        direction = np.linalg.norm(tilt, axis=1)
    difference = np.linalg.norm(inv.angular_momentum - normal * momentum, axis=1) / scale
    drift = Drift(
        difference,
        momentum_open / scale + _ROUNDINGS * _EPS,
        slope(time, (size - momentum) / scale),
    )
    return Drifts(energy, drift, direction, norm)


def _circular_momentum(trajectory: Trajectory) -> Floats:
    """``sqrt(GM r)`` (light: ``r``): the measure of angular momentum where the true one is 0."""
    radius: Floats = np.linalg.norm(trajectory.position, axis=1)
    if trajectory.metadata["particle"] == "light":
        return radius
    return np.asarray(np.sqrt(float(trajectory.metadata["gm"]) * radius))
