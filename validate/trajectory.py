"""The one in-memory form of somebody's trajectory."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = [
    "CLOCKS",
    "COLUMNS",
    "SERIES",
    "VECTORS",
    "Quantisation",
    "StoredReference",
    "Trajectory",
]

Floats = npt.NDArray[np.float64]

#: Column names of text and Parquet files, in the order in which they are written.
COLUMNS = (
    "time", "x", "y", "z", "vx", "vy", "vz", "proper_time", "coordinate_time", "affine",
)  # fmt: skip
#: Vectors and the columns of their components.
VECTORS = {"position": ("x", "y", "z"), "velocity": ("vx", "vy", "vz")}
#: Columns that count from the start: 0 there.
CLOCKS = ("proper_time", "coordinate_time", "affine")
#: Array names of NPZ and HDF5 files and of :class:`Trajectory`.
SERIES = ("time", *VECTORS, *CLOCKS)


@dataclass(frozen=True)
class Quantisation:
    """Half a unit of the last digit that the file keeps, in its units; 0 for exact columns.

    Attributes
    ----------
    time : float
    position, velocity : (n, 3) or (3,) float64
    clock : float
        Of proper_time, coordinate_time or affine, whichever the file has.
    """

    time: float = 0.0
    position: Floats = field(default_factory=lambda: np.zeros(3))
    velocity: Floats = field(default_factory=lambda: np.zeros(3))
    clock: float = 0.0

    @property
    def any(self) -> bool:
        """Whether any column has fewer digits than float64."""
        return bool(self.time or self.clock or np.any(self.position) or np.any(self.velocity))


@dataclass(frozen=True)
class StoredReference:
    """Second words and proven bounds of a result set.

    Attributes
    ----------
    arrays : mapping
        ``position_low``, ``position_bound``, ... by dataset name, each in the shape of its base;
        ``azimuth`` (n,) with its words besides.
    invariants : mapping
        Scalars (energy, ...) by name: value, second word or None, proven bound.
    """

    arrays: Mapping[str, Floats]
    invariants: Mapping[str, tuple[float, float | None, float]] = field(default_factory=dict)


@dataclass(frozen=True)
class Trajectory:
    """A trajectory as read: ``n`` samples in the file's own units and chart.

    Attributes
    ----------
    path : str
    name : str
    time : (n,)
        Strictly increasing or strictly decreasing.
    position : (n, 3)
    velocity : (n, 3) or None
        ``d position / d (chart time)``.
    proper_time, coordinate_time, affine : (n,) or None
    metadata : mapping
        Keys of an orbit file (system, gm, particle, chart, clock, start, budget, ...).
    quantisation : Quantisation
    stored : StoredReference or None
        Second words and bounds, from a result set.
    """

    path: str
    name: str
    time: Floats
    position: Floats
    velocity: Floats | None
    proper_time: Floats | None
    coordinate_time: Floats | None
    affine: Floats | None
    metadata: Mapping[str, Any]
    quantisation: Quantisation = field(default_factory=Quantisation)
    stored: StoredReference | None = None

    def __len__(self) -> int:
        return int(self.time.size)
