"""From named columns and metadata to a checked Trajectory."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.orbit_file import check_times
from truefall.validate.trajectory import (
    COLUMNS,
    VECTORS,
    Quantisation,
    StoredReference,
    Trajectory,
)

__all__ = ["check_columns", "make_trajectory", "single_precision"]

Floats = npt.NDArray[np.float64]


def check_columns(names: list[str], where: str | Path) -> None:
    """Refuse unknown, repeated or incomplete columns."""
    for name in names:
        if name not in COLUMNS:
            raise InputError(f"unknown column {name!r}; known are {', '.join(COLUMNS)}", where)
        if names.count(name) > 1:
            raise InputError(f"column {name!r} stands twice in the header", where)
    missing = [c for c in ("time", "x", "y", "z") if c not in names]
    if missing:
        raise InputError(
            f"column {', '.join(missing)} missing; a trajectory has time, x, y, z and optionally "
            "vx, vy, vz, proper_time, coordinate_time, affine",
            where,
        )
    speeds = [c for c in VECTORS["velocity"] if c in names]
    if len(speeds) not in (0, 3):
        raise InputError(
            f"only {', '.join(speeds)} of vx, vy, vz are there: give all or none", where
        )


def single_precision(values: npt.NDArray[Any]) -> Floats:
    """Half a unit in the last place of float32 data; zeros for float64."""
    if values.dtype.itemsize == 8:
        return np.zeros(values.shape)
    return np.abs(np.spacing(values.astype(np.float32))).astype(np.float64) / 2


def _finite(name: str, values: Floats, where: str | Path) -> None:
    bad = ~np.isfinite(values)
    if bad.any():
        row = int(np.argwhere(bad)[0][0])
        raise InputError(
            f"row {row + 1} of {name} is {values[tuple(np.argwhere(bad)[0])]}: every entry must "
            "be a finite number; remove the row or mend the program that wrote it",
            where,
        )


def make_trajectory(
    path: str | Path,
    name: str,
    arrays: Mapping[str, Floats],
    metadata: Mapping[str, Any],
    quantisation: Quantisation,
    stored: StoredReference | None = None,
) -> Trajectory:
    """Check shapes, finiteness and order, and build the Trajectory.

    ``arrays`` holds time, position, and what else there is, by the names of the attributes.
    """
    n = int(arrays["time"].size)
    if n == 0:
        raise InputError("holds no rows", path)
    for key, values in arrays.items():
        shape = (n, 3) if key in VECTORS else (n,)
        if values.shape != shape:
            raise InputError(
                f"{key} has shape {values.shape}; time has {n} entries, so it must be {shape}",
                path,
            )
        _finite(key, values, path)
    check_times(arrays["time"].tolist(), str(path), "time")
    return Trajectory(
        path=str(path),
        name=name,
        time=arrays["time"],
        position=arrays["position"],
        velocity=arrays.get("velocity"),
        proper_time=arrays.get("proper_time"),
        coordinate_time=arrays.get("coordinate_time"),
        affine=arrays.get("affine"),
        metadata=metadata,
        quantisation=quantisation,
        stored=stored,
    )
