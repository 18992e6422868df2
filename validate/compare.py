"""Obtained against expected: errors and their guards."""

from __future__ import annotations

from dataclasses import dataclass, fields, is_dataclass, replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
import numpy.typing as npt

from truefall.validate.drift import Drifts

if TYPE_CHECKING:
    from truefall.validate.carry import Spread
    from truefall.validate.trajectory import Trajectory

__all__ = ["Comparison", "Expected", "Guard", "compare", "picked"]

Floats = npt.NDArray[np.float64]
T = TypeVar("T")
#: Rounding of a computed difference and its norm, relative to it (five roundings, 2^-52 each).
_ROUNDING = 5 * float(np.finfo(np.float64).eps)


@dataclass(frozen=True)
class Expected:
    """The reference at the trajectory's own time stamps, in its units; ``n`` samples.

    ``*_low`` are second words (zeros if the reference has none), ``*_bound`` proven bounds on
    what value and second word together leave open.  ``clock`` is proper time (affine parameter
    for light, chart time on the proper clock).  ``azimuth`` (n,) counts from the start;
    ``normal`` (3,) is the unit normal of the orbit's plane, zeros for radial motion.
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
class Guard:
    """Everything that could make a computed deviation wrong, (n,) each, in its unit.

    Attributes
    ----------
    bound
        Proven bound of the reference.
    digits
        Half a unit of the last digit that the file keeps.
    stamps
        The same of its time stamps, times the rate of change.
    carried
        The same of the start, where that is read from the file, carried along the orbit.
    rounding
        Of the comparison itself.
    """

    bound: Floats
    digits: Floats
    stamps: Floats
    carried: Floats
    rounding: Floats

    @property
    def total(self) -> Floats:
        """The guard ``w``."""
        return self.bound + self.quantisation + self.rounding

    def source(self, row: int) -> str:
        """What most of the guard of a row comes from."""
        parts = {
            "reference bound": self.bound[row] + self.rounding[row],
            "digits of the file": self.digits[row] + self.carried[row],
            "time stamps": self.stamps[row],
        }
        return max(parts, key=lambda name: float(parts[name]))

    @property
    def quantisation(self) -> Floats:
        """The share of the file's own digits."""
        return self.digits + self.stamps + self.carried


@dataclass(frozen=True)
class Comparison:
    """All errors of a trajectory; float64 arrays of ``n`` samples in the file's units.

    ``position_error`` is (n, 3), obtained minus expected; ``radial``, ``along``, ``cross`` are
    its components along the expected radius, across it in the sense of the motion, and along
    the normal of the orbit's plane.  ``clock_error`` is signed.
    """

    time: Floats
    position_error: Floats
    radial: Floats
    along: Floats
    cross: Floats
    position_guard: Guard
    velocity_error: Floats | None
    velocity_guard: Guard | None
    clock_error: Floats | None
    clock_guard: Guard | None
    drifts: Drifts
    revolutions: Floats

    @property
    def distance(self) -> Floats:
        """Size of the position error, (n,)."""
        return np.asarray(np.linalg.norm(self.position_error, axis=1))


def picked(thing: T, rows: npt.NDArray[np.int64], total: int) -> T:
    """Some rows of a dataclass of arrays (a comparison, expected values, a trajectory).

    Parameters
    ----------
    rows : (k,)
    total : int
        Rows there are: arrays of that length, also in nested dataclasses, are cut, others stay.
    """

    def pick(part: Any) -> Any:
        if isinstance(part, np.ndarray) and part.shape[:1] == (total,):
            return part[rows]
        if is_dataclass(part) and not isinstance(part, type):
            return replace(part, **{f.name: pick(getattr(part, f.name)) for f in fields(part)})
        return part

    found: T = pick(thing)
    return found


def _row_norm(values: Floats, n: int) -> Floats:
    """Length of a per-component quantity, one for every row."""
    return np.broadcast_to(np.linalg.norm(np.atleast_2d(values), axis=1), (n,)).copy()


def _axes(position: Floats, normal: Floats) -> tuple[Floats, Floats, Floats]:
    """Radial, along-track and cross-track unit vectors at each row, (n, 3) each."""
    size = np.linalg.norm(position, axis=1, keepdims=True)
    radial = position / np.where(size > 0, size, 1.0)
    if not np.any(normal):  # radial motion has no plane: the one nearest to the x-y plane will do
        far = int(np.argmax(size))
        other = np.array([0.0, 0.0, 1.0]) if abs(radial[far, 2]) < 0.9 else np.eye(3)[0]
        normal = other - radial[far] * float(radial[far] @ other)
        normal = normal / np.linalg.norm(normal)
    cross = np.broadcast_to(normal, position.shape)
    return radial, np.cross(cross, radial), cross


def _velocity(
    trajectory: Trajectory, expected: Expected, stamps: Spread, carried: Spread
) -> tuple[Floats | None, Guard | None]:
    if trajectory.velocity is None or expected.velocity is None:
        return None, None
    low, bound = expected.velocity_low, expected.velocity_bound
    assert low is not None
    assert bound is not None
    error = np.linalg.norm((trajectory.velocity - expected.velocity) - low, axis=1)
    guard = Guard(
        bound=np.linalg.norm(bound, axis=1),
        digits=_row_norm(trajectory.quantisation.velocity, len(trajectory)),
        stamps=stamps.velocity,
        carried=carried.velocity,
        rounding=_ROUNDING * error,
    )
    return error, guard


def _clock(
    trajectory: Trajectory, expected: Expected, stamps: Spread, carried: Spread
) -> tuple[Floats | None, Guard | None]:
    """Error of the file's second clock: affine, coordinate_time or proper_time."""
    if trajectory.metadata["particle"] == "light":
        obtained = trajectory.affine
    elif trajectory.metadata["clock"] == "proper":
        obtained = trajectory.coordinate_time
    else:
        obtained = trajectory.proper_time
    if obtained is None or expected.clock is None:
        return None, None
    assert expected.clock_low is not None
    assert expected.clock_bound is not None
    error = (obtained - expected.clock) - expected.clock_low
    guard = Guard(
        bound=expected.clock_bound,
        digits=np.full(len(trajectory), trajectory.quantisation.clock),
        stamps=stamps.clock,
        carried=carried.clock,
        rounding=_ROUNDING * np.abs(error),
    )
    return error, guard


def compare(
    trajectory: Trajectory,
    expected: Expected,
    *,
    drifts: Drifts,
    stamps: Spread,
    carried: Spread,
) -> Comparison:
    """Errors of the obtained trajectory, ``(obtained - value) - second word``, with guards.

    Parameters
    ----------
    trajectory : Trajectory
    expected : Expected
        At the same ``n`` time stamps.
    drifts : Drifts
        Of the invariants, for the record.
    stamps, carried : Spread
        What the digits of the time stamps, and those of the start, leave open.
    """
    error = (trajectory.position - expected.position) - expected.position_low
    radial, along, cross = _axes(expected.position, expected.normal)
    guard = Guard(
        bound=np.linalg.norm(expected.position_bound, axis=1),
        digits=_row_norm(trajectory.quantisation.position, len(trajectory)),
        stamps=stamps.position,
        carried=carried.position,
        rounding=_ROUNDING * np.linalg.norm(error, axis=1),
    )
    velocity_error, velocity_guard = _velocity(trajectory, expected, stamps, carried)
    clock_error, clock_guard = _clock(trajectory, expected, stamps, carried)
    return Comparison(
        time=trajectory.time,
        position_error=error,
        radial=np.sum(error * radial, axis=1),
        along=np.sum(error * along, axis=1),
        cross=np.sum(error * cross, axis=1),
        position_guard=guard,
        velocity_error=velocity_error,
        velocity_guard=velocity_guard,
        clock_error=clock_error,
        clock_guard=clock_guard,
        drifts=drifts,
        revolutions=np.abs(expected.azimuth) / (2 * np.pi),
    )
