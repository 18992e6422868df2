"""Expressions written once, evaluated as truncated power series in float64 and in two words.

A set of equations is written with Python's operators on :class:`Row`; the :class:`Recorder` keeps
the operations, each on rows of coefficients (Moore 1966, Interval Analysis, chapter 11; from
memory).  At order 0 a tape is a plain evaluation: starts and results pass through the same tapes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = [
    "ANGLE",
    "CONSTANT",
    "COSINE",
    "DIVIDE",
    "INTEGRATE",
    "LINEAR",
    "PRODUCT",
    "ROOT",
    "SCALE",
    "SQUARE",
]
__all__ += ["Recorder", "Row", "Tape", "angle", "root"]

#: Operations.  SCALE multiplies by a row that is constant; ANGLE is for order 0 only.
PRODUCT, SQUARE, DIVIDE, ROOT, LINEAR, SCALE, CONSTANT, COSINE, ANGLE, INTEGRATE = range(10)


@dataclass(frozen=True)
class Tape:
    """Operations, one a line: code, row set, operands, index of the literals.

    Attributes
    ----------
    lines : (m, 5) int64
        For LINEAR ``s_out = a s_i + b s_j + c delta_k0`` with literals a, b, c from the index on.
    literals : (q,)
        Dyadic numbers, exact in float64.
    given : int
        Rows 0 to ``given - 1`` are the operands of the whole tape.
    results : (n,) int64
        Rows of the results.
    rows : int
        Rows in all.
    """

    lines: npt.NDArray[np.int64]
    literals: npt.NDArray[np.float64]
    given: int
    results: npt.NDArray[np.int64]
    rows: int

    def integrating(self) -> npt.NDArray[np.int64]:
        """The lines, and one for each result: it is the rate of the operand of its number."""
        last = [(INTEGRATE, i, row, -1, 0) for i, row in enumerate(self.results)]
        return np.concatenate([self.lines, np.array(last, dtype=np.int64)])


class Recorder:
    """Keeps operations as they are written; equal ones are kept once."""

    def __init__(self, given: int) -> None:
        self.given = [Row(self, i) for i in range(given)]
        self._rows = given
        self._lines: list[tuple[int, int, int, int, int]] = []
        self._literals: list[float] = []
        self._known: dict[tuple[object, ...], int] = {}
        self._constant: set[int] = set()

    def keep(self, op: int, i: int, j: int = -1, literals: tuple[float, ...] = ()) -> Row:
        """The row of an operation, new or known."""
        key = (op, i, j, literals)
        if key not in self._known:
            self._lines.append((op, self._rows, i, j, len(self._literals)))
            self._literals.extend(literals)
            self._known[key] = self._rows
            if op == CONSTANT or all(row in self._constant for row in (i, j) if row >= 0):
                self._constant.add(self._rows)
            self._rows += 2 if op == COSINE else 1
        return Row(self, self._known[key])

    def is_constant(self, row: Row) -> bool:
        """Whether a row depends on literals and parameters only."""
        return row.index in self._constant

    def parameter(self, index: int) -> Row:
        """A number of ``par`` as a constant series."""
        return self.keep(CONSTANT, index)

    def number(self, value: Row | float) -> Row:
        """A literal as a row."""
        return value if isinstance(value, Row) else self.keep(LINEAR, -1, -1, (0.0, 0.0, value))

    def finish(self, results: Sequence[Row | float]) -> Tape:
        """The tape that computes these results."""
        rows = [self.number(x).index for x in results]
        return Tape(
            lines=np.array(self._lines, dtype=np.int64).reshape(-1, 5),
            literals=np.array(self._literals or [0.0]),
            given=len(self.given),
            results=np.array(rows, dtype=np.int64),
            rows=self._rows,
        )


@dataclass(frozen=True)
class Row:
    """A series on a recorder: combine with + - * / and numbers; literal zeros vanish."""

    recorder: Recorder
    index: int

    def _linear(self, a: float, b: float, other: Row | float) -> Row:
        if not isinstance(other, Row):
            c = b * other
            if a == 1.0 and c == 0.0:
                return self
            return self.recorder.keep(LINEAR, self.index, -1, (a, 0.0, c))
        return self.recorder.keep(LINEAR, self.index, other.index, (a, b, 0.0))

    def __add__(self, other: Row | float) -> Row:
        return self._linear(1.0, 1.0, other)

    __radd__ = __add__

    def __sub__(self, other: Row | float) -> Row:
        return self._linear(1.0, -1.0, other)

    def __rsub__(self, other: float) -> Row:
        return self._linear(-1.0, 1.0, other)

    def __neg__(self) -> Row:
        return self._linear(-1.0, 0.0, 0.0)

    def __mul__(self, other: Row | float) -> Row | float:
        if not isinstance(other, Row):
            if other in (0.0, 1.0):
                return self if other else 0.0
            return self._linear(float(other), 0.0, 0.0)
        for one, two in ((self, other), (other, self)):
            if self.recorder.is_constant(two):
                return self.recorder.keep(SCALE, one.index, two.index)
        if other.index == self.index:
            return self.recorder.keep(SQUARE, self.index)
        first, second = sorted((self.index, other.index))
        return self.recorder.keep(PRODUCT, first, second)

    __rmul__ = __mul__

    def __truediv__(self, other: Row | float) -> Row:
        if not isinstance(other, Row):
            return self._linear(1.0 / other, 0.0, 0.0)
        return self.recorder.keep(DIVIDE, self.index, other.index)

    def __rtruediv__(self, other: float) -> Row:
        return self.recorder.number(other) / self

    def cosine_and_sine(self) -> tuple[Row, Row]:
        """Cosine and sine of this row."""
        cosine = self.recorder.keep(COSINE, self.index)
        return cosine, Row(self.recorder, cosine.index + 1)


def root(row: Row) -> Row:
    """Square root of a positive row."""
    return row.recorder.keep(ROOT, row.index)


def angle(sine: Row, cosine: Row) -> Row:
    """The angle of a direction in the plane, from -pi to pi."""
    return sine.recorder.keep(ANGLE, sine.index, cosine.index)
