"""One entrance for every method."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
import numpy.typing as npt

from truefall.integrators.equations import EQUATIONS
from truefall.integrators.methods import METHODS

__all__ = ["Run", "propagate"]

Floats = npt.NDArray[np.float64]
T = TypeVar("T")


@dataclass(frozen=True)
class Run:
    """A trajectory in chart time, GM = c = 1.

    Attributes
    ----------
    time : (n,)
    position, velocity : (n, 3)
        Velocity is ``d position / d (chart time)``.
    steps, evaluations : int
        Work done.
    """

    time: Floats
    position: Floats
    velocity: Floats
    steps: int
    evaluations: int


def _chosen(name: str, table: Mapping[str, T], what: str) -> T:
    if name not in table:
        near = difflib.get_close_matches(name, table, n=1)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        raise ValueError(f"unknown {what} {name!r}; known are {', '.join(table)}{hint}")
    return table[name]


def propagate(
    equations: str,
    position: npt.ArrayLike,
    velocity: npt.ArrayLike,
    times: npt.ArrayLike,
    *,
    method: str,
    step: float,
) -> Run:
    """Propagate a start to given times with fixed steps.

    Parameters
    ----------
    equations : str
        A name in ``EQUATIONS``.
    position, velocity : (3,) array_like
        Cartesian in the chart; at ``times[0]``.
    times : (n,) array_like
        Strictly increasing or decreasing.  The stretch between two of them is cut into equal
        steps no longer than ``step``, so that every time is met exactly.
    method : str
        A name in ``METHODS``.
    step : float
        Longest step, positive.

    Raises
    ------
    ValueError
        For unknown names, times out of order, a step that is not positive, or a start that no
        particle can have.
    ArithmeticError
        If the state stops being finite.
    """
    chosen = _chosen(equations, EQUATIONS, "set of equations")
    how = _chosen(method, METHODS, "method")
    stamps = np.asarray(times, dtype=np.float64)
    gaps = np.diff(stamps)
    if stamps.ndim != 1 or stamps.size < 1 or not (np.all(gaps > 0) or np.all(gaps < 0)):
        raise ValueError("times must be strictly increasing or strictly decreasing")
    if not step > 0:
        raise ValueError(f"step must be positive, not {step!r}")
    y = chosen.begin(np.asarray(position, np.float64), np.asarray(velocity, np.float64))
    carry = np.zeros_like(y)  # compensated summation: Kahan 1965, from memory
    rows = [chosen.state(y)]
    steps = evaluations = 0
    for gap in gaps:
        count = max(1, int(np.ceil(abs(gap) / step * (1 - 1e-12))))
        for _ in range(count):
            change, work = how.step(chosen.rate, y, float(gap) / count)
            change = change + carry
            new = y + change
            carry = change - (new - y)
            y = new
            steps += 1
            evaluations += work
        if not np.all(np.isfinite(y)):
            raise ArithmeticError(f"the state is no longer finite after {steps} steps")
        rows.append(chosen.state(y))
    return Run(
        time=stamps,
        position=np.array([x for x, _ in rows]),
        velocity=np.array([v for _, v in rows]),
        steps=steps,
        evaluations=evaluations,
    )
