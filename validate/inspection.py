"""Result sets looked at: conformance to the layout, what is in them, samples recomputed."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.validate.trajectory import Trajectory

__all__ = ["Inspection", "inspect_set"]

_REQUIRED = ("gm", "system", "particle", "chart", "clock", "start_time", "orbit_class")
_SERIES = ("position", "velocity", "proper_time", "coordinate_time", "affine", "azimuth")


@dataclass
class Inspection:
    """What was found; ``faults`` is empty for a set that conforms."""

    file: str
    faults: list[str] = field(default_factory=list)
    trajectories: list[dict[str, Any]] = field(default_factory=list)
    digest: str = ""

    @property
    def conforms(self) -> bool:
        """Whether nothing was found wrong."""
        return not self.faults

    def as_json(self) -> dict[str, Any]:
        """One document for machines."""
        return {
            "file": self.file, "conforms": self.conforms, "digest": self.digest,
            "faults": self.faults, "trajectories": self.trajectories,
        }  # fmt: skip

    def text(self) -> str:
        """The page for people."""
        lines = [f"{'CONFORMS' if self.conforms else 'FAULTY'}  {self.file}"]
        for t in self.trajectories:
            words = f"{t['samples']} samples, {t['class']}, {t['chart']} chart, {t['system']}"
            lines.append(f"  {t['name']}: {words}")
            lines.append(f"      {', '.join(t['series'])}")
            if t["verified"]:
                lines.append(
                    f"      {t['verified']} samples recomputed, {t['outside']} outside their bounds"
                )
        lines += [f"  fault: {fault}" for fault in self.faults]
        return "\n".join(lines)


def _root(path: Path, found: Inspection) -> None:
    """Format, version and digest of the whole file."""
    import h5py

    from truefall.validate.formats.hdf5_digest import content_digest
    from truefall.validate.formats.hdf5_write import FORMAT

    try:
        with h5py.File(path, "r", locking="best-effort") as file:
            words = {
                k: bytes(file.attrs[k]).split(b"\0")[0].decode("ascii", "replace")
                for k in ("format", "format_version", "content_digest")
                if k in file.attrs
            }
            computed = content_digest(file)
    except (OSError, RuntimeError, KeyError, ValueError, TypeError) as error:
        first = str(error).splitlines()[0][:100]
        found.faults.append(f"the file is damaged: a checksum or structure does not hold ({first})")
        return
    found.digest = computed
    if words.get("format") != FORMAT:
        found.faults.append(f"attribute format is {words.get('format')!r}, not {FORMAT!r}")
    stored = words.get("content_digest")
    if stored != computed:
        found.faults.append(
            f"the content digest does not match: stored {stored}, computed {computed}; data, "
            "attributes or bounds were changed after writing"
        )


def _layout(path: Path, name: str, found: Inspection) -> None:
    """Attributes, units and dimension scales of one trajectory."""
    import h5py

    with h5py.File(path, "r", locking="best-effort") as file:
        group = file["trajectory"][name]
        missing = [k for k in _REQUIRED if k not in group.attrs]
        if missing:
            found.faults.append(f"{name}: attribute {', '.join(missing)} missing")
        for key in group:
            dataset = group[key]
            if not isinstance(dataset, h5py.Dataset):
                continue
            if "units" not in dataset.attrs:
                found.faults.append(f"{name}/{key} has no units")
            if key in ("time", "component"):
                if not dataset.is_scale:
                    found.faults.append(f"{name}/{key} is no dimension scale")
                continue
            wanted = ["time", "component"][: dataset.ndim]
            for axis, scale in enumerate(wanted):
                if not len(dataset.dims[axis]):
                    found.faults.append(f"{name}/{key} has no scale {scale!r} on axis {axis}")


def _values(trajectory: Trajectory, key: str) -> npt.NDArray[np.float64] | None:
    """A series of a set; the azimuth stands among what is stored beside the states."""
    if key == "azimuth":
        return None if trajectory.stored is None else trajectory.stored.arrays.get(key)
    found: npt.NDArray[np.float64] | None = getattr(trajectory, key)
    return found


def _bounds(trajectory: Trajectory, found: Inspection) -> None:
    """Bounds for every series, second words no larger than half a unit in the last place."""
    stored = dict(trajectory.stored.arrays) if trajectory.stored is not None else {}
    for key in _SERIES:
        values = _values(trajectory, key)
        if values is None:
            continue
        if f"{key}_bound" not in stored:
            found.faults.append(f"{trajectory.name}: {key} has no {key}_bound")
        low = stored.get(f"{key}_low")
        if low is not None and np.any(np.abs(low) > 0.5001 * np.spacing(np.abs(values))):
            found.faults.append(f"{trajectory.name}: {key}_low exceeds half a unit of {key}")


def _verify(trajectory: Trajectory, count: int, found: Inspection) -> tuple[int, int]:
    """Recompute random samples; how many, and how many lie outside their stored bounds."""
    from truefall.validate.starts import find_start

    orbit = find_start(trajectory, fit=False, stored=None).spec.orbit()
    rng = np.random.default_rng()
    rows = np.unique(rng.integers(0, len(trajectory), min(count, len(trajectory))))
    states = orbit.at(trajectory.time[rows])
    stored = dict(trajectory.stored.arrays) if trajectory.stored is not None else {}
    outside = np.zeros(rows.size, dtype=bool)
    for key in _SERIES:
        values, true = _values(trajectory, key), getattr(states, key)
        if values is None or true is None or f"{key}_bound" not in stored:
            continue
        # the difference of two words each is exact to a part in 2^50 of the bound
        error = np.abs((values[rows] - true) - getattr(states, f"{key}_low"))
        over = error > stored[f"{key}_bound"][rows] * (1 + 2.0**-40)
        outside |= over.any(axis=1) if over.ndim == 2 else over
        low = stored.get(f"{key}_low")
        if low is not None:
            rest = np.abs((values[rows] - true) + (low[rows] - getattr(states, f"{key}_low")))
            size = np.abs(true) if true.ndim == 1 else np.linalg.norm(true, axis=1, keepdims=True)
            over = rest > 2.0**-100 * size
            outside |= over.any(axis=1) if over.ndim == 2 else over
    if outside.any():
        first = rows[int(np.argmax(outside))]
        found.faults.append(
            f"{trajectory.name}: {int(outside.sum())} of {rows.size} recomputed samples lie "
            f"outside their stored bounds, the first at row {first + 1}"
        )
    return int(rows.size), int(outside.sum())


def inspect_set(path: str | Path, *, verify: int = 0) -> Inspection:
    """Look at an HDF5 result set.

    Parameters
    ----------
    path : str or Path
    verify : int
        Number of random samples of each trajectory to recompute.

    Returns
    -------
    Inspection

    Raises
    ------
    InputError
        If the file is no HDF5 file that can be opened.
    """
    from truefall.validate.formats import read_trajectories, suffix_of

    path = Path(path)
    if suffix_of(path) != "hdf5":
        raise InputError("is no HDF5 file (.h5, .hdf5): only result sets are inspected", path)
    found = Inspection(str(path))
    try:
        trajectories = read_trajectories(path, need_metadata=True)
    except InputError as error:
        if not path.is_file() or "cannot be opened" in str(error):
            raise
        found.faults.append(str(error).removeprefix(f"{path}: "))
        return found
    _root(path, found)
    for trajectory in trajectories:
        _layout(path, trajectory.name, found)
        _bounds(trajectory, found)
        verified, outside = _verify(trajectory, verify, found) if verify else (0, 0)
        stored = dict(trajectory.stored.arrays) if trajectory.stored is not None else {}
        series = [k for k in _SERIES[:-1] if _values(trajectory, k) is not None]
        found.trajectories.append(
            {
                "name": trajectory.name,
                "samples": len(trajectory),
                "class": str(trajectory.metadata.get("orbit_class", "unknown")),
                "chart": trajectory.metadata["chart"],
                "system": trajectory.metadata["system"],
                "series": [*series, *sorted(stored)],
                "certified": any(k.endswith("_low") for k in stored),
                "verified": verified,
                "outside": outside,
            }
        )
    return found
