"""Many samples of one orbit: a piecewise polynomial table made from the exact solution.

One truth, two speeds: every coefficient is fitted to enclosed values, and the fit's error is
measured against enclosed values at points that were not used to build it.  Bound orbits need
the table over one radial period only; later times are reduced by whole periods in two words, so
that revolution 1,000,000 is as good as the first.
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.reference.table_source import circle_points, planar, reduction

if TYPE_CHECKING:
    from truefall.reference.orbit import Orbit

__all__ = ["Table", "build_table"]

Floats = npt.NDArray[np.float64]

#: As in the kernel, which is not imported before it is used: its compiler takes time to load.
_DEGREE = 13
_SLACK = 1e-9
_FIRST_INTERVALS = 12
_MAX_INTERVALS = 20_000
#: Times from which on several cores pay, and how many at most.
_WORTH_THREADS = 50_000
_MOST_THREADS = 8
_ANGLES = 64
#: Least half-width of an interval in units of the last place of its times.
_NARROW = 2.0**10
#: Largest error of the fit, in units of eps times the vector's size, before an interval splits:
#: position, velocity, clock.
_GOAL = np.array([0.5, 1.5, 1.0])
_EPS = float(np.finfo(np.float64).eps)
#: Largest change over an interval, relative to the size: keeps Horner's rounding small.
_SPREAD = 0.25
#: The same of velocities: more than half, which is what one that rises from rest has.
_SPREAD_OF_SPEED = 0.6
#: Share of a piece's largest speed below which its errors are no longer relative to the speed.
_AT_REST = 0.4
#: Rounding of the evaluation in the same units: reduction, Horner's rule, rotation (measured).
_ROUNDING = 3.5


@dataclass(frozen=True)
class Table:
    """Positions, velocities and the second clock of one orbit, by polynomials.

    Attributes
    ----------
    first, last : float
        Times covered (the whole axis for bound orbits).
    error : (3,)
        Largest error of position, velocity and clock seen at the check points, relative to the
        vector's size (clock: to the largest reading of its interval), plus the rounding of the
        evaluation: what a bound on the table's values is made of.
    slow : float
        Least speed that a velocity's error is relative to; 0 unless a piece holds speeds that
        differ by more than 2.5 times, as where an orbit comes to rest.
    """

    start: float
    first: float
    last: float
    edges: Floats
    centres: Floats
    scales: Floats
    coefficients: Floats
    period: Floats
    turn: Floats
    frame: Floats
    frame_low: Floats
    error: Floats
    slow: float

    def at(self, times: npt.ArrayLike) -> tuple[Floats, Floats, Floats]:
        """Position (n, 3), velocity (n, 3), clock (n,) in the orbit's units.

        Parameters
        ----------
        times : (n,) array_like
            On the orbit's clock, in any order (fastest if sorted).

        Raises
        ------
        ValueError
            If a time lies outside the table.
        """
        stamps = np.ascontiguousarray(times, dtype=np.float64)
        if stamps.size and (stamps.min() < self.first or stamps.max() > self.last):
            raise ValueError(f"the table covers times from {self.first!r} to {self.last!r}")
        position, velocity = np.empty((stamps.size, 3)), np.empty((stamps.size, 3))
        clock = np.empty(stamps.size)
        cores = min(_MOST_THREADS, len(os.sched_getaffinity(0)))
        if stamps.size < _WORTH_THREADS or cores < 2:
            self.fill(stamps, position, velocity, clock)
            return position, velocity, clock
        cuts = np.linspace(0, stamps.size, cores + 1).astype(int)
        first, *others = [slice(a, b) for a, b in pairwise(cuts)]
        pool = _workers(cores - 1)
        jobs = [
            pool.submit(self.fill, stamps[p], position[p], velocity[p], clock[p]) for p in others
        ]
        self.fill(stamps[first], position[first], velocity[first], clock[first])
        for job in jobs:
            job.result()
        return position, velocity, clock

    def clock_width(self) -> float:
        """Largest change of the second clock over a piece, against which its error counts."""
        return float(2 * np.abs(self.coefficients[:, 1:-1, 4]).sum(axis=1).max())

    def fill(self, times: Floats, position: Floats, velocity: Floats, clock: Floats) -> None:
        """As :meth:`at`, into arrays (n, 3), (n, 3), (n,) at hand; times are not checked.

        Runs without the interpreter's lock: several threads may share a table.
        """
        from truefall.reference.table_kernel import fill

        fill(
            times, self.start, self.edges, self.centres, self.scales, self.coefficients,
            self.period, self.turn, self.frame, self.frame_low, circle_points(_ANGLES),
            position, velocity, clock,
        )  # fmt: skip


@lru_cache(maxsize=1)
def _workers(count: int) -> ThreadPoolExecutor:
    """Threads beside the calling one, started once."""
    return ThreadPoolExecutor(count, thread_name_prefix="truefall-table")


class _Fitter:
    """Intervals of elapsed time, split until the fit is as good as float64 can show."""

    def __init__(self, orbit: Orbit) -> None:
        self.orbit = orbit
        k = np.arange(_DEGREE + 1)
        self.nodes = np.cos(np.pi * (k + 0.5) / (_DEGREE + 1))
        self.checks = np.array([-0.97, -0.31, 0.55, 0.93])
        self.matrix = np.linalg.inv(np.polynomial.chebyshev.chebvander(self.nodes, _DEGREE))
        basis = [np.polynomial.chebyshev.cheb2poly(row) for row in np.eye(_DEGREE + 1)]
        self.to_powers = np.zeros((_DEGREE + 1, _DEGREE + 1))
        for j, row in enumerate(basis):
            self.to_powers[: row.size, j] = row
        self.worst = np.zeros(3)
        self.slow = 0.0

    def fit(self, low: float, high: float) -> Floats | None:
        """Coefficients (d + 2, 5) on an interval, or None if the fit is not good enough."""
        centre, half = 0.5 * (low + high), 0.5 * (high - low)
        if half < _NARROW * np.spacing(max(abs(low), abs(high))):
            raise ArithmeticError("the table does not reach the accuracy of float64")
        places = centre + half * np.concatenate([[0.0], self.nodes, self.checks])
        words = planar(self.orbit, places)  # (m, 5, 2): two words each
        base = words[0, :, 0]
        # differences from the central value keep the fit's rounding far below the value's ulp
        change = (words[:, :, 0] - base) + words[:, :, 1]
        exact = (places - centre) / half
        inside = slice(1, _DEGREE + 2)
        matrix = self.matrix
        if np.any(exact[inside] != self.nodes):
            matrix = np.linalg.inv(np.polynomial.chebyshev.chebvander(exact[inside], _DEGREE))
        powers = self.to_powers @ (matrix @ change[inside])
        test = slice(_DEGREE + 2, None)
        seen = np.zeros((self.checks.size, 5))
        for row in powers[::-1]:
            seen = seen * exact[test, None] + row
        error = np.abs(seen - change[test])
        size = self._sizes(words[test, :, 0])
        relative = np.array(
            [
                error[:, :2].max() / size[0],
                error[:, 2:4].max() / size[1],
                error[:, 4].max() / size[2],
            ]
        )
        fastest = max(np.hypot(words[test, 2, 0], words[test, 3, 0]).max(), 1e-300)
        moved = np.hypot(change[:, 0], change[:, 1]).max() / size[0]
        turned = np.hypot(change[:, 2], change[:, 3]).max() / fastest
        if np.any(relative > _GOAL * _EPS) or moved > _SPREAD or turned > _SPREAD_OF_SPEED:
            return None
        self.worst = np.maximum(self.worst, relative)
        speeds = np.hypot(words[:, 2, 0], words[:, 3, 0])
        if speeds.min() < _AT_REST * speeds.max():
            self.slow = max(self.slow, _AT_REST * float(speeds.max()))
        total = powers[0] + base  # whose rounding is kept as a last row
        rest = powers[0] - (total - base)
        powers[0] = total
        return np.vstack([powers, rest])

    @staticmethod
    def _sizes(values: Floats) -> Floats:
        # hypot: the squares of speeds that die out exponentially would vanish
        position = np.hypot(values[:, 0], values[:, 1]).min()
        speeds = np.hypot(values[:, 2], values[:, 3])
        velocity = max(speeds.min(), _AT_REST * speeds.max())  # it may pass through zero
        clock = np.abs(values[:, 4]).max() + np.ptp(values[:, 4])
        return np.array([position, max(velocity, 1e-300), max(clock, 1e-300)])


def build_table(orbit: Orbit, first: float, last: float) -> Table:
    """A table of an orbit for times from ``first`` to ``last``.

    Parameters
    ----------
    orbit : Orbit
    first, last : float
        On the orbit's clock; bound orbits ignore them, one radial period serves for all times.

    Raises
    ------
    EndReached
        If the orbit ends inside.
    ArithmeticError
        If the fit does not reach float64 accuracy with a reasonable number of pieces.
    """
    fitter = _Fitter(orbit)
    cycle = reduction(orbit)
    if cycle is None:
        low, high = first - orbit.start_time, last - orbit.start_time
        widen = 1e-9 * max(high - low, abs(low), abs(high)) if high == low else 0.0
        low, high = low - widen, high + widen
        period, turn = np.zeros(4), np.zeros(2)
    else:
        low, high, period, turn = cycle
        # reduced times may miss the edges by their rounding
        slack = _SLACK * (high - low)
        low, high = low - slack, high + slack
        first, last = -np.inf, np.inf
    waiting = [(a, b) for a, b in _first_intervals(low, high)][::-1]
    done: list[tuple[float, float, Floats]] = []
    while waiting:
        a, b = waiting.pop()
        powers = fitter.fit(a, b)
        if powers is not None:
            done.append((a, b, powers))
            continue
        middle = 0.5 * (a + b)
        waiting += [(middle, b), (a, middle)]
        if len(done) + len(waiting) > _MAX_INTERVALS or not a < middle < b:
            raise ArithmeticError("the table does not reach the accuracy of float64")
    frame, frame_low = orbit.enclosure.plane()
    edges = np.array([a for a, _, _ in done] + [done[-1][1]])
    return Table(
        start=orbit.start_time,
        first=first,
        last=last,
        edges=edges,
        centres=0.5 * (edges[:-1] + edges[1:]),
        scales=2.0 / (edges[1:] - edges[:-1]),
        coefficients=np.ascontiguousarray(np.array([p for _, _, p in done])),
        period=period,
        turn=turn,
        frame=frame,
        frame_low=frame_low,
        error=2 * fitter.worst + _ROUNDING * _EPS,
        slow=fitter.slow,
    )


def _first_intervals(low: float, high: float) -> list[tuple[float, float]]:
    cuts = np.linspace(low, high, _FIRST_INTERVALS + 1)
    return list(zip(cuts[:-1].tolist(), cuts[1:].tolist(), strict=True))
