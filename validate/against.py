"""Expected values from a stored result set, in place of the exact solution."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from truefall.validate.compare import Expected
from truefall.validate.errors import InputError

if TYPE_CHECKING:
    import numpy.typing as npt

    from truefall.reference import Orbit
    from truefall.validate.trajectory import Trajectory

__all__ = ["load_stored", "stored_expected"]


def load_stored(path: str | Path, trajectory: Trajectory) -> Trajectory:
    """The stored trajectory whose declarations and time stamps are exactly those given.

    Raises
    ------
    InputError
        If the set holds several trajectories of other names, other stamps (naming the first
        row that differs), other units, or no proven bounds.
    """
    from truefall.validate.formats import read_trajectories

    sets = read_trajectories(path)
    named = [s for s in sets if s.name == trajectory.name]
    chosen = sets[0] if len(sets) == 1 else named[0] if len(named) == 1 else None
    if chosen is None:
        names = ", ".join(s.name for s in sets)
        raise InputError(f"holds {names}; none of them is called {trajectory.name!r}", path)
    for key in ("system", "gm", "particle", "chart", "clock"):
        if chosen.metadata[key] != trajectory.metadata[key]:
            raise InputError(
                f"has {key} = {chosen.metadata[key]!r}, the trajectory has "
                f"{trajectory.metadata[key]!r}",
                path,
            )
    if chosen.time.shape != trajectory.time.shape or np.any(chosen.time != trajectory.time):
        n = min(len(chosen), len(trajectory))
        differs = np.flatnonzero(chosen.time[:n] != trajectory.time[:n])
        row = int(differs[0]) + 1 if differs.size else n + 1
        raise InputError(
            f"its time stamps are not those of {trajectory.path}: they differ from row {row} on "
            f"({len(chosen)} and {len(trajectory)} rows)",
            path,
        )
    if chosen.stored is None or "position_bound" not in chosen.stored.arrays:
        raise InputError("has no position_bound: a reference must carry proven bounds", path)
    return chosen


def stored_expected(
    stored: Trajectory, orbit: Orbit, keep: npt.NDArray[np.bool_], need_azimuth: bool
) -> Expected:
    """Values and bounds of the kept rows of a set; the azimuth, which no set has, if needed."""
    arrays = stored.stored.arrays if stored.stored is not None else {}
    clock_name = {"light": "affine"}.get(
        str(stored.metadata["particle"]),
        "coordinate_time" if stored.metadata["clock"] == "proper" else "proper_time",
    )
    clock = getattr(stored, clock_name)
    if f"{clock_name}_bound" not in arrays:
        clock = None
    velocity = stored.velocity if "velocity_bound" in arrays else None
    no_second_words = np.zeros_like(stored.position)
    azimuth = np.full(int(keep.sum()), np.nan)
    return Expected(
        position=stored.position[keep],
        position_low=arrays.get("position_low", no_second_words)[keep],
        position_bound=arrays["position_bound"][keep],
        velocity=None if velocity is None else velocity[keep],
        velocity_low=arrays.get("velocity_low", no_second_words)[keep],
        velocity_bound=None if velocity is None else arrays["velocity_bound"][keep],
        clock=None if clock is None else clock[keep],
        clock_low=arrays.get(f"{clock_name}_low", np.zeros(len(stored)))[keep],
        clock_bound=None if clock is None else arrays[f"{clock_name}_bound"][keep],
        azimuth=orbit.at(stored.time[keep]).azimuth if need_azimuth else azimuth,
        normal=orbit.angular_momentum_direction,
    )
