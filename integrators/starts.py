"""From a position and a velocity to the state of a set of equations, and back."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.integrators.equations.tapes import result_tape, start_tape
from truefall.integrators.index import Equations
from truefall.integrators.series import evaluate, evaluate_in_two_words, evaluate_many
from truefall.integrators.tape import Tape

__all__ = ["begin", "finish", "finish_in_two_words", "finish_many"]

Floats = npt.NDArray[np.float64]


def begin(
    equations: Equations, positions: Floats, velocities: Floats, light: bool, first: int = 0
) -> tuple[Floats, Floats, Floats, Floats]:
    """States of many starts in two words, rounded once.

    Parameters
    ----------
    equations : Equations
    positions, velocities : (m, 3)
        Cartesian in the chart, float64 numbers taken as exact; for light the direction counts.
    light : bool
    first : int
        Number of the first start, for messages.

    Returns
    -------
    y, y_low : (m, size)
    par, par_low : (m, 3)
        E, mu and L^2.

    Raises
    ------
    ValueError
        For a start that no particle or ray can have, with its row.
    """
    given = np.concatenate([positions, velocities], axis=1)
    out = np.empty((len(given), equations.size + 3))
    low = np.empty_like(out)
    if not light:
        _evaluate(start_tape(equations.kind, False, False), given, out, low)
    else:
        out_of = (positions * velocities).sum(axis=1) > 0.0
        for outward in (False, True):
            rows = out_of == outward
            part, part_low = out[rows], low[rows]
            _evaluate(start_tape(equations.kind, True, outward), given[rows], part, part_low)
            out[rows], low[rows] = part, part_low
    _refuse(equations, positions, out, first)
    n = equations.size
    return out[:, :n], low[:, :n], out[:, n:].copy(), low[:, n:].copy()


def _evaluate(tape: Tape, given: Floats, out: Floats, low: Floats) -> None:
    """Fill ``out`` and ``low`` from starts (m, 6); no parameters."""
    none = np.zeros(3)
    evaluate_in_two_words(
        tape.lines, tape.literals, tape.results, none, none, given, np.zeros_like(given), out, low
    )


def _refuse(equations: Equations, positions: Floats, out: Floats, first: int) -> None:
    """ValueError for the first start that is none."""
    if equations.kind <= 1:
        return
    rest = {3: 0.5, 4: 1.0}.get(equations.kind, 2.0 if equations.static else 0.0)
    size = np.sqrt((positions * positions).sum(axis=1))
    energy = out[:, equations.size]
    sound = np.isfinite(out.sum(axis=1)) & (energy > (0.0 if equations.static else -np.inf))
    if sound.all() and size.min(initial=np.inf) > rest:
        return
    for row in np.flatnonzero(~(size > rest))[:1]:
        raise ValueError(
            f"start {first + row}: the {equations.chart} chart holds radii above {rest:g}, and the "
            f"position has {size[row]:g}"
        )
    for row in np.flatnonzero(~sound)[:1]:
        words = (
            "lies on the polar axis, where the spherical coordinates end"
            if equations.kind == 8 and positions[row, 0] == 0.0 == positions[row, 1]
            else "has a velocity that nothing can have there (at or above the speed of light, or "
            "no direction)"
        )
        raise ValueError(f"start {first + row} {words}")


def _results(equations: Equations) -> Any:
    return result_tape(equations.kind, equations.size)


def finish(equations: Equations, par: Floats, rows: Floats) -> Floats:
    """Position, velocity and clock (n, 7) of states (n, size)."""
    tape = _results(equations)
    out = np.empty((len(rows), 7))
    evaluate(tape.lines, tape.literals, tape.results, par, np.ascontiguousarray(rows), out)
    return out


def finish_many(
    equations: Equations, pars: Floats, rows: Floats, out: Floats, first: int, end: int
) -> None:
    """As :func:`finish` for the orbits from ``first`` to ``end - 1`` of an ensemble."""
    tape = _results(equations)
    evaluate_many(tape.lines, tape.literals, tape.results, pars, rows, out, first, end)


def finish_in_two_words(
    equations: Equations, par: Floats, par_low: Floats, rows: Floats, rows_low: Floats
) -> tuple[Floats, Floats]:
    """As :func:`finish`, with second words."""
    tape = _results(equations)
    out, low = np.empty((len(rows), 7)), np.empty((len(rows), 7))
    evaluate_in_two_words(
        tape.lines, tape.literals, tape.results, par, par_low, rows, rows_low, out, low
    )
    return out, low
