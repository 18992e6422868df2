"""Reference trajectories on demand."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.validate.orbit_file import OrbitSpec

__all__ = ["Made", "make"]


@dataclass(frozen=True)
class Made:
    """What was written: rows, the orbit's class, and the end if the rows stop at one."""

    path: Path
    rows: int
    orbit_class: str
    end_note: str


def make(
    spec: OrbitSpec,
    out: str | Path,
    *,
    truncate: bool = False,
    certified: bool = False,
    reproducible: bool = False,
) -> Made:
    """Write the exact trajectory of an orbit file at its own sample times.

    Parameters
    ----------
    spec : OrbitSpec
        With ``times``.
    out : str or Path
        Format by suffix.
    truncate : bool
        Write the rows up to an end of the orbit instead of refusing.

    Raises
    ------
    InputError
        If the orbit ends before a requested time (without ``truncate``), or the file cannot be
        written; nothing is left behind.
    """
    from truefall.validate.formats import suffix_of, write_states

    suffix_of(out)
    if spec.times is None:
        raise InputError("has no [samples]: give times, or first, last and count", spec.path)
    if spec.system == "geometric" and Path(out).suffix.lower() == ".oem":
        raise InputError("an OEM is in kilometres; a trajectory in geometric units has none", out)
    orbit = spec.orbit()
    times = np.array(spec.times)
    inside = orbit.reachable(times)
    extra: dict[str, Any] = {}
    note = ""
    if not inside.all():
        row = int(np.argmin(inside))
        end = orbit.ends_after if times[row] >= spec.start_time else orbit.ends_before
        if end is None:
            raise ArithmeticError("an orbit without an end refused a time")
        note = f"the orbit ends at {end.reason} at time {end.time!r}"
        if not truncate or not inside.any():
            remedy = "" if truncate else ", or use --truncate to write the rows up to the end"
            raise InputError(
                f"{note}, and sample {row + 1} asks for time {float(times[row])!r}; ask for times "
                f"on the orbit's side of the end{remedy}",
                spec.path,
            )
        extra = {"ends_at": end.time, "end_reason": end.reason}
        times = times[inside]
    states = orbit.at(times)
    write_states(
        out,
        replace(spec, times=None),
        orbit,
        states,
        extra=extra,
        certified=certified,
        reproducible=reproducible,
    )
    return Made(Path(out), int(times.size), orbit.orbit_class, note)
