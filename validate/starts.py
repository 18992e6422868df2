"""Which orbit a trajectory is held against: where its start comes from, and how sure that is."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.validate.carry import Spread, carried_spread, fitted_spread
from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.trajectory import Trajectory

__all__ = ["Start", "find_start"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Start:
    """A start, where it is from, and how open it is.

    Attributes
    ----------
    spec : OrbitSpec
    source : str
        "stored set", "fit", "orbit file" or "first row".
    quantum : (6,)
        Half units of the last digits of position and velocity of a first row, else zeros.
    openness : (6, m)
        Change of a fitted start by half a unit of each fitted number and of float64, else zeros.
    """

    spec: OrbitSpec
    source: str
    quantum: Floats = field(default_factory=lambda: np.zeros(6))
    openness: Floats = field(default_factory=lambda: np.zeros((6, 1)))

    @property
    def is_open(self) -> bool:
        """Whether the file's digits leave the start open."""
        return bool(np.any(self.quantum) or np.any(self.openness))

    @property
    def half_units(self) -> Floats:
        """How far each component may be wrong, (6,)."""
        return np.asarray(self.quantum + np.abs(self.openness).sum(axis=1))

    def spread(self, orbit: Orbit, times: Floats) -> Spread:
        """What that leaves open about the states at ``times``."""
        if np.any(self.openness):
            return fitted_spread(self.spec, orbit, times, self.openness)
        return carried_spread(self.spec, orbit, times, self.quantum)


def find_start(trajectory: Trajectory, *, fit: bool, stored: Trajectory | None) -> Start:
    """The orbit to hold a trajectory against.

    In this order: the stored set held against, the best fit if asked for, the declared start
    (orbit file, header or sidecar), the first row.

    Raises
    ------
    InputError
        If there is no start: positions alone need ``--fit`` or an orbit file.
    """
    from truefall.validate.orbit_file import parse_orbit

    if stored is not None:
        return Start(parse_orbit(_declared(stored), stored.path), "stored set")
    spec = parse_orbit(_declared(trajectory), trajectory.path, need_start=False)
    if fit:
        from truefall.validate.fit import fit_start

        fitted, openness = fit_start(spec, trajectory)
        return Start(fitted, "fit", openness=openness)
    if spec.position is not None or spec.elements is not None:
        return Start(spec, "orbit file")
    if trajectory.velocity is None:
        raise InputError(
            "has no velocities, so its first row is no start; give an orbit file (--orbit) or "
            "let --fit find the start that fits best",
            trajectory.path,
        )
    first = replace(
        spec,
        start_time=float(trajectory.time[0]),
        position=tuple(trajectory.position[0].tolist()),
        velocity=tuple(trajectory.velocity[0].tolist()),
    )
    q = trajectory.quantisation
    quantum = np.concatenate([np.atleast_2d(q.position)[0], np.atleast_2d(q.velocity)[0]])
    return Start(first, "first row", quantum=quantum)


def _declared(trajectory: Trajectory) -> dict[str, object]:
    return {k: v for k, v in trajectory.metadata.items() if k != "samples"}
