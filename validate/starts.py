"""Which orbit a trajectory is held against: where its start comes from, and how sure that is."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.trajectory import Trajectory

__all__ = ["find_start", "quantum_of_start"]

Floats = npt.NDArray[np.float64]


def find_start(
    trajectory: Trajectory, *, fit: bool, stored: Trajectory | None
) -> tuple[OrbitSpec, str]:
    """The orbit, and where its start is from.

    In this order: the stored set held against, the best fit if asked for, the declared start
    (orbit file, header or sidecar), the first row.

    Raises
    ------
    InputError
        If there is no start: positions alone need ``--fit`` or an orbit file.
    """
    from truefall.validate.orbit_file import parse_orbit

    if stored is not None:
        return parse_orbit(_declared(stored), stored.path), "stored set"
    spec = parse_orbit(_declared(trajectory), trajectory.path, need_start=False)
    if fit:
        from truefall.validate.fit import fit_start

        return fit_start(spec, trajectory), "fit"
    if spec.position is not None or spec.elements is not None:
        return spec, "orbit file"
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
    return first, "first row"


def _declared(trajectory: Trajectory) -> dict[str, object]:
    return {k: v for k, v in trajectory.metadata.items() if k != "samples"}


def quantum_of_start(trajectory: Trajectory, start_from: str) -> Floats:
    """Half units of the last digits of the start, (6,); zeros unless it is the first row."""
    if start_from != "first row":
        return np.zeros(6)
    q = trajectory.quantisation
    return np.concatenate([np.atleast_2d(q.position)[0], np.atleast_2d(q.velocity)[0]])
