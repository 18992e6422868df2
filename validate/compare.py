"""Obtained against expected: errors, their guards, and the drift of the invariants."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.reference.invariants import Invariants
    from truefall.validate.trajectory import Trajectory

__all__ = ["Comparison", "Drift", "Expected", "compare"]

Floats = npt.NDArray[np.float64]
_EPS = float(np.finfo(np.float64).eps)


@dataclass(frozen=True)
class Expected:
    """The reference at the trajectory's own time stamps, in its units; ``n`` samples.

    ``*_low`` are second words (zeros if the reference has none), ``*_bound`` proven bounds.
    ``clock`` is proper time (affine parameter for light, chart time on the proper clock).
    ``azimuth`` is NaN where the reference does not know it.
    """

    position: Floats
    position_low: Floats
    position_bound: Floats
    velocity: Floats | None
    velocity_low: Floats | None
    velocity_bound: Floats | None
    clock: Floats | None
    clock_low: Floats | None
    clock_bound: Floats | None
    azimuth: Floats
    normal: Floats


@dataclass(frozen=True)
class Drift:
    """A constant of the motion computed from the obtained states, minus its true value.

    Attributes
    ----------
    values : (n,)
        Relative (energy: to max(|E - 1|, GM/(c^2 r)); angular momentum: to its size).
    guard : (n,)
        What the digits and the rounding of the states could do to it.
    slope : float
        Least-squares slope per unit of time.
    """

    values: Floats
    guard: Floats
    slope: float


@dataclass(frozen=True)
class Comparison:
    """All errors of a trajectory; float64 arrays of ``n`` samples in the file's units.

    ``position_error`` is (n, 3); ``radial``, ``along``, ``cross`` are its components along the
    expected radius, the direction of motion across it, and the normal of the orbit's plane.
    ``*_bound`` is the reference's proven bound with the comparison's rounding, ``*_quantum``
    what the file's digits (and its time stamps') leave open.
    """

    time: Floats
    position_error: Floats
    radial: Floats
    along: Floats
    cross: Floats
    position_bound: Floats
    position_quantum: Floats
    velocity_error: Floats | None
    velocity_bound: Floats | None
    velocity_quantum: Floats | None
    clock_error: Floats | None
    clock_bound: Floats | None
    clock_quantum: Floats | None
    energy: Drift | None
    angular_momentum: Drift | None
    direction: Floats | None
    null: Floats | None
    revolutions: Floats

    @property
    def distance(self) -> Floats:
        """Size of the position error, (n,)."""
        return np.asarray(np.linalg.norm(self.position_error, axis=1))


def _row_norm(values: Floats, n: int) -> Floats:
    """Length of a per-component quantity, one for every row."""
    return np.broadcast_to(np.linalg.norm(np.atleast_2d(values), axis=1), (n,)).copy()


def _axes(position: Floats, normal: Floats) -> tuple[Floats, Floats, Floats]:
    radial = position / np.linalg.norm(position, axis=1, keepdims=True)
    if not np.any(normal):  # radial motion: any perpendicular will do
        other = np.eye(3)[int(np.argmin(np.abs(radial[0])))]
        normal = np.cross(radial[0], other)
        normal = normal / np.linalg.norm(normal)
    cross = np.broadcast_to(normal, position.shape)
    along = np.cross(cross, radial)
    return radial, along, cross


def _slope(time: Floats, values: Floats) -> float:
    good = np.isfinite(values)
    if good.sum() < 2:
        return 0.0
    t = time[good] - time[good].mean()
    spread = float(np.sum(t * t))
    return float(np.sum(t * values[good]) / spread) if spread > 0 else 0.0


def _sensitivity(trajectory: Trajectory, quanta: tuple[Floats, Floats]) -> tuple[Floats, Floats]:
    """What the states' digits can do to energy and angular momentum, (n,) each.

    First order, by central differences in the six components.
    """
    position, velocity = trajectory.position, trajectory.velocity
    assert velocity is not None
    energy, momentum = np.zeros(len(trajectory)), np.zeros(len(trajectory))
    for which, base, quantum in ((0, position, quanta[0]), (1, velocity, quanta[1])):
        size = np.linalg.norm(base, axis=1)
        step = np.where(size > 0, size, 1.0) * 1e-5
        for k in range(3):
            moved = np.zeros_like(base)
            moved[:, k] = step
            pair = []
            for s in (1.0, -1.0):
                x = position + s * moved if which == 0 else position
                v = velocity + s * moved if which == 1 else velocity
                pair.append(_invariants(trajectory, x, v))
            width = quantum[:, k] / (2 * step)
            de = np.abs(pair[0].energy_minus_one - pair[1].energy_minus_one)
            dl = np.linalg.norm(pair[0].angular_momentum - pair[1].angular_momentum, axis=1)
            energy += de * width
            momentum += dl * width
    return energy, momentum


def _invariants(trajectory: Trajectory, position: Floats, velocity: Floats) -> Invariants:
    from truefall.reference.invariants import state_invariants

    m = trajectory.metadata
    return state_invariants(
        position, velocity, m["chart"], m["system"], float(m["gm"]), m["particle"]
    )


def _drifts(
    trajectory: Trajectory, energy_minus_one: float, momentum: float, normal: Floats
) -> tuple[Drift | None, Drift | None, Floats | None, Floats | None]:
    """Drifts of energy and angular momentum, tilt of its direction, and g(v, v) for light."""
    if trajectory.velocity is None:
        return None, None, None, None
    n = len(trajectory)
    inv = _invariants(trajectory, trajectory.position, trajectory.velocity)
    quantum = trajectory.quantisation
    quanta = (
        np.broadcast_to(quantum.position, (n, 3)) + np.abs(np.spacing(trajectory.position)) / 2,
        np.broadcast_to(quantum.velocity, (n, 3)) + np.abs(np.spacing(trajectory.velocity)) / 2,
    )
    d_energy, d_momentum = _sensitivity(trajectory, quanta)
    light = trajectory.metadata["particle"] == "light"
    energy = None
    if not light:
        values = (inv.energy_minus_one - energy_minus_one) / inv.scale
        guard = d_energy / inv.scale + 16 * _EPS
        energy = Drift(values, guard, _slope(trajectory.time, values))
    size = np.linalg.norm(inv.angular_momentum, axis=1)
    if momentum == 0.0:
        return energy, None, None, inv.null if light else None
    true = normal * momentum
    relative = np.linalg.norm(inv.angular_momentum - true, axis=1) / momentum
    signed = np.copysign(relative, size - momentum)
    drift = Drift(signed, d_momentum / momentum + 16 * _EPS, _slope(trajectory.time, signed))
    with np.errstate(invalid="ignore"):
        tilt = np.linalg.norm(np.cross(inv.angular_momentum / size[:, None], normal), axis=1)
    return energy, drift, tilt, inv.null if light else None


def _per_stamp(trajectory: Trajectory) -> Floats:
    """Chart time per unit of the file's clock: 1, or dT/dtau on the proper clock."""
    if trajectory.metadata["clock"] != "proper" or trajectory.velocity is None:
        return np.ones(len(trajectory))
    rate = _invariants(trajectory, trajectory.position, trajectory.velocity).rate
    return np.where(rate > 0, 1.0 / np.where(rate > 0, rate, 1.0), 1.0)


def compare(
    trajectory: Trajectory,
    expected: Expected,
    *,
    energy_minus_one: float,
    momentum: float,
    carried: Floats,
) -> Comparison:
    """Errors of the obtained trajectory.

    Parameters
    ----------
    trajectory : Trajectory
    expected : Expected
        At the same ``n`` time stamps.
    energy_minus_one, momentum : float
        The orbit's exact constants, in the file's units.
    carried : (n,)
        What the digits of the start leave open about the expected position.
    """
    n = len(trajectory)
    error = (trajectory.position - expected.position) - expected.position_low
    radial, along, cross = _axes(expected.position, expected.normal)
    distance = np.linalg.norm(error, axis=1)
    quantum = trajectory.quantisation
    pace = _per_stamp(trajectory)
    speed = (
        np.linalg.norm(expected.velocity, axis=1) if expected.velocity is not None else np.zeros(n)
    )
    stamp = quantum.time * speed * pace
    velocity_error = velocity_bound = velocity_quantum = None
    if trajectory.velocity is not None and expected.velocity is not None:
        assert expected.velocity_low is not None
        assert expected.velocity_bound is not None
        dv = (trajectory.velocity - expected.velocity) - expected.velocity_low
        velocity_error = np.linalg.norm(dv, axis=1)
        velocity_bound = np.linalg.norm(expected.velocity_bound, axis=1) + 4 * _EPS * velocity_error
        turn = speed / np.linalg.norm(expected.position, axis=1)
        velocity_quantum = _row_norm(quantum.velocity, n) + (stamp + carried) * 4 * turn
    clock_error = clock_bound = clock_quantum = None
    obtained = _clock(trajectory)
    if obtained is not None and expected.clock is not None:
        assert expected.clock_low is not None
        assert expected.clock_bound is not None
        clock_error = (obtained - expected.clock) - expected.clock_low
        clock_bound = expected.clock_bound + 4 * _EPS * np.abs(clock_error)
        clock_quantum = np.full(n, quantum.clock) + quantum.time * np.maximum(pace, 1.0)
    energy, momentum_drift, tilt, null = _drifts(
        trajectory, energy_minus_one, momentum, expected.normal
    )
    return Comparison(
        time=trajectory.time,
        position_error=error,
        radial=np.sum(error * radial, axis=1),
        along=np.sum(error * along, axis=1),
        cross=np.sum(error * cross, axis=1),
        position_bound=np.linalg.norm(expected.position_bound, axis=1) + 4 * _EPS * distance,
        position_quantum=_row_norm(quantum.position, n) + stamp + carried,
        velocity_error=velocity_error,
        velocity_bound=velocity_bound,
        velocity_quantum=velocity_quantum,
        clock_error=clock_error,
        clock_bound=clock_bound,
        clock_quantum=clock_quantum,
        energy=energy,
        angular_momentum=momentum_drift,
        direction=tilt,
        null=null,
        revolutions=np.abs(expected.azimuth) / (2 * np.pi),
    )


def _clock(trajectory: Trajectory) -> Floats | None:
    """The second clock of the file: what is compared as ``clock``."""
    if trajectory.metadata["particle"] == "light":
        return trajectory.affine
    if trajectory.metadata["clock"] == "proper":
        return trajectory.coordinate_time
    return trajectory.proper_time
