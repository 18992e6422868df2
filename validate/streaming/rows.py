"""Rows of a trajectory in blocks: what the screening reads, from memory or from a file."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from truefall.validate.trajectory import Quantisation, Trajectory

__all__ = [
    "BLOCK",
    "Block",
    "Head",
    "MemoryRows",
    "Rows",
    "as_trajectory",
    "first_row",
    "second_clock_name",
]

Floats = npt.NDArray[np.float64]

#: Rows that are reduced together, counted from the first row of the file.
BLOCK = 8192


@dataclass(frozen=True)
class Head:
    """What is known of a trajectory before its rows are read.

    Attributes
    ----------
    path, name : str
    count : int
        Number of rows.
    series : tuple of str
        ``time``, ``position`` and what else there is.
    metadata : mapping
        Complete, as in :class:`Trajectory`.
    time_quantum, clock_quantum : float
        Half units of the last digits, constant over the file.
    """

    path: str
    name: str
    count: int
    series: tuple[str, ...]
    metadata: Mapping[str, Any]
    time_quantum: float = 0.0
    clock_quantum: float = 0.0


@dataclass(frozen=True)
class Block:
    """Consecutive rows: arrays by series name, and half units of their digits where not zero.

    ``values[name]`` is (n,) or (n, 3) float64; ``quanta[name]`` has the same shape, or (3,).
    """

    values: Mapping[str, Floats]
    quanta: Mapping[str, Floats] = field(default_factory=dict)


class Rows(Protocol):
    """A trajectory whose rows are read on demand, from several threads at once."""

    @property
    def head(self) -> Head:
        """What is known without reading rows."""

    def block(self, first: int, last: int) -> Block:
        """Rows ``first`` to ``last`` (excluded).

        Raises
        ------
        InputError
            If they cannot be read.
        """


class MemoryRows:
    """The rows of a trajectory in memory."""

    def __init__(self, trajectory: Trajectory) -> None:
        t = trajectory
        arrays = {
            "time": t.time, "position": t.position, "velocity": t.velocity,
            "proper_time": t.proper_time, "coordinate_time": t.coordinate_time,
            "affine": t.affine,
        }  # fmt: skip
        self._values: dict[str, Floats] = {k: v for k, v in arrays.items() if v is not None}
        q = t.quantisation
        vectors = {"position": q.position, "velocity": q.velocity}
        self._quanta = {k: v for k, v in vectors.items() if k in self._values and np.any(v)}
        self.head = Head(t.path, t.name, len(t), tuple(self._values), t.metadata, q.time, q.clock)

    def block(self, first: int, last: int) -> Block:
        """Views of the arrays."""
        return Block(
            {k: v[first:last] for k, v in self._values.items()},
            {k: v[first:last] if v.ndim == 2 else v for k, v in self._quanta.items()},
        )


def second_clock_name(rows: Rows, clock: str, particle: str) -> str | None:
    """The series that is compared as the second clock, if the file has it."""
    name = "proper_time"
    if particle == "light":
        name = "affine"
    elif clock == "proper":
        name = "coordinate_time"
    return name if name in rows.head.series else None


def as_trajectory(rows: Rows, block: Block) -> Trajectory:
    """A block as a trajectory in memory."""
    v, head = block.values, rows.head
    q = block.quanta
    zero = np.zeros(3)
    return Trajectory(
        path=head.path, name=head.name, time=v["time"], position=v["position"],
        velocity=v.get("velocity"), proper_time=v.get("proper_time"),
        coordinate_time=v.get("coordinate_time"), affine=v.get("affine"), metadata=head.metadata,
        quantisation=Quantisation(
            head.time_quantum, q.get("position", zero), q.get("velocity", zero), head.clock_quantum
        ),
    )  # fmt: skip


def first_row(rows: Rows) -> Trajectory:
    """The first row alone (it may be a start)."""
    return as_trajectory(rows, rows.block(0, 1))
