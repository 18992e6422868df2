"""Expected values from a stored result set, in place of the exact solution."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from truefall.validate.compare import Expected
from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.trajectory import Trajectory

__all__ = ["stored_expected"]


def stored_expected(path: str | Path, trajectory: Trajectory, orbit: Orbit) -> Expected:
    """Values and bounds of a set whose time stamps match those of the trajectory exactly.

    Raises
    ------
    InputError
        If the set holds several trajectories of other names, other stamps, or other units.
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
                f"has {key} = {chosen.metadata[key]!r}, but the trajectory has "
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
    arrays = dict(chosen.stored.arrays) if chosen.stored is not None else {}
    if "position_bound" not in arrays:
        raise InputError("has no position_bound: a reference must carry proven bounds", path)
    clock_name = {"light": "affine"}.get(
        str(chosen.metadata["particle"]),
        "coordinate_time" if chosen.metadata["clock"] == "proper" else "proper_time",
    )
    clock = getattr(chosen, clock_name)
    zeros = np.zeros_like(chosen.position)

    return Expected(
        position=chosen.position,
        position_low=arrays.get("position_low", zeros),
        position_bound=arrays["position_bound"],
        velocity=chosen.velocity,
        velocity_low=arrays.get("velocity_low", zeros),
        velocity_bound=arrays.get("velocity_bound", zeros),
        clock=clock,
        clock_low=None if clock is None else arrays.get(f"{clock_name}_low", np.zeros_like(clock)),
        clock_bound=None
        if clock is None
        else arrays.get(f"{clock_name}_bound", np.zeros_like(clock)),
        azimuth=np.full(len(chosen), np.nan),
        normal=orbit.angular_momentum_direction,
    )
