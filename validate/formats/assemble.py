"""From named arrays and metadata to a checked Trajectory: what all formats share."""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.sample_times import check_times
from truefall.validate.trajectory import (
    CLOCKS,
    COLUMNS,
    SERIES,
    VECTORS,
    Quantisation,
    StoredReference,
    Trajectory,
)

__all__ = [
    "arrays_of",
    "check_columns",
    "check_shapes",
    "columns_of",
    "make_trajectory",
    "single_precision",
]

_LONGEST_NAME = 60

Floats = npt.NDArray[np.float64]


def check_columns(names: Sequence[str], where: str | Path) -> None:
    """Refuse unknown, repeated or incomplete columns."""
    if len(names) == 1 and "time" in names[0] and names[0] != "time":
        raise InputError(
            f"its header is the one column {names[0]!r}; separate columns by commas", where
        )
    for name in names:
        if len(name) > _LONGEST_NAME or not name.isprintable():
            raise InputError(
                "its header line is no list of column names; expected time,x,y,z,...", where
            )
        if name not in COLUMNS:
            near = difflib.get_close_matches(name, COLUMNS, n=1)
            hint = f"did you mean {near[0]!r}? known" if near else "known"
            if name[:1] in set("0123456789+-."):
                hint = "the header line (time,x,y,z,...) seems to be missing; known"
            raise InputError(
                f"unknown column {name!r}; {hint} are {', '.join(COLUMNS)}; remove the others",
                where,
            )
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


def arrays_of(columns: Mapping[str, Floats]) -> dict[str, Floats]:
    """Columns x, y, z, ... joined to arrays position (n, 3), ..."""
    arrays = {"time": columns["time"]}
    for vector, parts in VECTORS.items():
        if parts[0] in columns:
            arrays[vector] = np.column_stack([columns[p] for p in parts])
    return arrays | {name: columns[name] for name in CLOCKS if name in columns}


def columns_of(series: Mapping[str, Floats]) -> dict[str, Floats]:
    """Arrays position (n, 3), ... parted into columns x, y, z, ..."""
    columns: dict[str, Floats] = {}
    for key, values in series.items():
        if key in VECTORS:
            columns |= {name: values[:, k] for k, name in enumerate(VECTORS[key])}
        else:
            columns[key] = values
    return columns


def single_precision(name: str, values: npt.NDArray[Any]) -> Floats:
    """Half a unit in the last place of float32 data; zeros for float64.

    Whole numbers as time stamps are exact in either.
    """
    if values.dtype.itemsize == 8 or (name == "time" and np.all(values == np.rint(values))):
        return np.zeros(values.shape)
    return np.abs(np.spacing(values.astype(np.float32))).astype(np.float64) / 2


def _finite(name: str, values: Floats, where: str | Path) -> None:
    bad = ~np.isfinite(values)
    if bad.any():
        first = tuple(np.argwhere(bad)[0])
        raise InputError(
            f"row {int(first[0]) + 1} of {name} is {values[first]}: every entry must be a finite "
            "number; remove the row or mend the program that wrote it",
            where,
        )


def check_shapes(shapes: Mapping[str, tuple[int, ...]], path: str | Path) -> None:
    """Refuse series without rows, or whose shapes do not go with that of ``time``."""
    n = int(np.prod(shapes["time"], dtype=np.int64))
    if n == 0:
        raise InputError("holds no rows", path)
    for key in (k for k in SERIES if k in shapes):
        shape = (n, 3) if key in VECTORS else (n,)
        if shapes[key] != shape:
            raise InputError(
                f"{key} has shape {shapes[key]}; time has {n} entries, so it must be {shape}", path
            )


def _quantisation(quanta: Mapping[str, Floats]) -> Quantisation:
    return Quantisation(
        time=float(quanta["time"].max()),
        position=quanta["position"],
        velocity=quanta.get("velocity", np.zeros(3)),
        clock=max((float(quanta[n].max()) for n in CLOCKS if n in quanta), default=0.0),
    )


def make_trajectory(
    path: str | Path,
    name: str,
    arrays: Mapping[str, Floats],
    quanta: Mapping[str, Floats],
    metadata: Mapping[str, Any],
    stored: StoredReference | None = None,
) -> Trajectory:
    """Check shapes, finiteness and order, and build the Trajectory.

    Parameters
    ----------
    arrays : mapping
        time (n,), position (n, 3), and what else there is, by the names of the attributes.
    quanta : mapping
        Half a unit of the last digit of every entry, by the same names and in the same shapes.

    Raises
    ------
    InputError
        Naming the array and row at fault.
    """
    check_shapes({key: array.shape for key, array in arrays.items()}, path)
    for key in (k for k in SERIES if k in arrays):
        _finite(key, arrays[key], path)
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
        quantisation=_quantisation(quanta),
        stored=stored,
    )
