"""Reading trajectories from HDF5 result sets, ours or others in the same layout."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import make_trajectory, single_precision
from truefall.validate.formats.hdf5_guard import GuardedFile
from truefall.validate.formats.metadata import ELEMENT_KEYS, unflatten
from truefall.validate.trajectory import SERIES, StoredReference, Trajectory

__all__ = ["declared", "read_all", "trajectory_groups"]

_ATTRIBUTES = (
    "name", "system", "gm", "particle", "chart", "clock", "orbit_class", "ends_at", "end_reason",
    "budget", "start_time", "start_position", "start_velocity",
    *(f"start_{key}" for key in ELEMENT_KEYS),
)  # fmt: skip

Floats = npt.NDArray[np.float64]


def declared(file: GuardedFile, group: Any, name: str) -> dict[str, Any]:
    """The metadata in a group's attributes."""
    try:
        found = unflatten(file.attributes(group, _ATTRIBUTES))
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            f"the attribute budget of {group.name} is not TOML ({error})", file.path
        ) from None
    found.setdefault("name", name)
    return found


def _words(file: GuardedFile, group: Any, arrays: dict[str, Floats]) -> dict[str, Floats]:
    """Second words and bounds, each in the shape of what it belongs to."""
    stored: dict[str, Floats] = {}
    azimuth = file.numbers(group, "azimuth")
    if azimuth is not None:
        if azimuth.shape != arrays["time"].shape or not np.isfinite(azimuth).all():
            raise InputError(f"{group.name}/azimuth is not one finite number a row", file.path)
        stored["azimuth"] = azimuth.astype(np.float64)
        arrays = {**arrays, "azimuth": stored["azimuth"]}
    for key, values in arrays.items():
        for suffix in ("_low", "_bound"):
            words = file.numbers(group, key + suffix)
            if words is None:
                continue
            if words.shape != values.shape:
                raise InputError(
                    f"{group.name}/{key}{suffix} has shape {words.shape}, {key} has {values.shape}",
                    file.path,
                )
            if not np.isfinite(words).all() or (suffix == "_bound" and np.any(words < 0)):
                raise InputError(
                    f"{group.name}/{key}{suffix} holds negative or non-finite numbers", file.path
                )
            stored[key + suffix] = words.astype(np.float64)
    return stored


def _invariants(file: GuardedFile, group: Any) -> dict[str, tuple[float, float | None, float]]:
    inner = file.group(group, "invariants")
    if inner is None:
        return {}
    names = file.children(inner)
    found: dict[str, tuple[float, float | None, float]] = {}
    for name in (n for n in names if f"{n}_bound" in names):
        parts = [file.numbers(inner, name + suffix) for suffix in ("", "_low", "_bound")]
        value, low, bound = (None if p is None else np.asarray(p) for p in parts)
        if (
            value is None
            or bound is None
            or value.shape
            or bound.shape
            or (low is not None and low.shape)
        ):
            raise InputError(f"{inner.name}/{name} and its words must be scalars", file.path)
        found[name] = (float(value), None if low is None else float(low), float(bound))
    return found


def _trajectory(file: GuardedFile, group: Any, name: str) -> tuple[dict[str, Any], Trajectory]:
    raw = {key: file.numbers(group, key) for key in SERIES}
    for key in ("time", "position"):
        if raw[key] is None:
            raise InputError(f"{group.name} has no dataset {key!r}", file.path)
    there = {key: values for key, values in raw.items() if values is not None}
    arrays = {key: values.astype(np.float64) for key, values in there.items()}
    quanta = {key: single_precision(key, values) for key, values in there.items()}
    stored = _words(file, group, arrays)
    invariants = _invariants(file, group)
    metadata = declared(file, group, name)
    reference = StoredReference(stored, invariants) if stored or invariants else None
    return metadata, make_trajectory(file.path, name, arrays, quanta, metadata, reference)


def read_all(path: str | Path) -> list[tuple[dict[str, Any], Trajectory]]:
    """Metadata and trajectory of every group under ``/trajectory``.

    Raises
    ------
    InputError
        For files that cannot be opened, are damaged, or hold anything but plain numbers.
    """
    with GuardedFile(path) as file:
        try:
            found = _groups(file)
        except (KeyError, OSError, RuntimeError, TypeError, ValueError) as error:
            text = str(error).split("(")[-1].rstrip(")'")[:80]
            raise InputError(f"is damaged ({text})", path) from None
    if not found:
        raise InputError("holds no trajectory", path)
    return found


def _groups(file: GuardedFile) -> list[tuple[dict[str, Any], Trajectory]]:
    return [_trajectory(file, group, name) for name, group in trajectory_groups(file)]


def trajectory_groups(file: GuardedFile) -> list[tuple[str, Any]]:
    """Name and group of every trajectory.

    Raises
    ------
    InputError
        If the layout is another.
    """
    holder = file.group(file.root, "trajectory")
    if holder is None:
        raise InputError(
            "has no group /trajectory; expected /trajectory/<name>/ with datasets time (n,), "
            "position (n, 3), ...",
            file.path,
        )
    found = []
    for name in file.children(holder):
        group = file.group(holder, name)
        if group is None:
            raise InputError(f"/trajectory/{name} is not a group", file.path)
        found.append((name, group))
    return found
