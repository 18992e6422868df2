"""The run loop: one template, compiled around the step of each method.

The names ``step``, ``inside`` and ``stateful`` are given when a copy is made
(:func:`loop_of`).  ``inside`` fills the change of the state at any point of the step just taken:
the Taylor method has its polynomial, every other method takes a shorter step from the same state,
so that time stamps and events are met to the accuracy of the method itself.
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.integrators.arithmetic import compensated_add
from truefall.integrators.compiled import kernel, specialised
from truefall.integrators.equations.rates import areal_radius, rate, scales
from truefall.integrators.equations.types import Floats
from truefall.integrators.watch import notice_of

__all__ = ["loop_of"]

Integers = npt.NDArray[np.int64]

# Given by ``specialised``; here so that the templates read as plain functions.
step: Any = None
inside: Any = None
stamp: Any = None
notice: Any = None
serve: Any = None
loop: Any = None
stateful = False


def _restep(
    kind: int, variable: int, par: Floats, code: Integers, table: Floats, tolerance: float,
    y: Floats, theta: float, before: Floats, memory: Floats, scratch: Floats, change: Floats,
) -> int:  # fmt: skip
    """The change over a part of the step, by a shorter step from the same state and memory."""
    scratch[:, :] = before
    _, work, _ = step(kind, variable, par, code, table, tolerance, y, theta, scratch, change)
    return int(work)


def _stamp(
    numbers: Integers, par: Floats, code: Integers, table: Floats, tolerance: float, y: Floats,
    carry: Floats, time: float, h: float, guess: float, before: Floats, memory: Floats,
    scratch: Floats, change: Floats, out: Floats, moved: Floats,
) -> tuple[float, int]:  # fmt: skip
    """Newton's method for the point of the step at which the chart's time is ``time``.

    Fills ``change``; the last correction, once small, is made along the rate.  Gives back the
    point and the evaluations.
    """
    kind, variable, at = numbers[0], numbers[1], numbers[2]
    low, high, theta, work = -1e-3 * h, 1.001 * h, guess, 0
    for _ in range(80):
        work += inside(
            kind, variable, par, code, table, tolerance, y, theta, before, memory, scratch, change
        )
        for i in range(y.size):
            moved[i] = y[i] + change[i]
        rate(kind, variable, par, moved, out)
        short = (time - y[at]) - (change[at] + carry[at])
        correction = short / out[at]
        if abs(correction) <= 1e-9 * abs(h):
            for i in range(y.size):
                change[i] += correction * out[i]
            break
        if correction * h > 0.0:
            low = theta
        else:
            high = theta
        theta += correction
        if not (min(low, high) < theta < max(low, high)):
            theta = 0.5 * (low + high)
            if low == high:
                break
    return theta, work


@kernel
def _first_step(
    kind: int, variable: int, par: Floats, y: Floats, tolerance: float, exponent: float,
    out: Floats, size: Floats,
) -> float:  # fmt: skip
    """A careful first step: a tenth of the tolerance's root, in units of the fastest change."""
    rate(kind, variable, par, y, out)
    scales(kind, par, y, size)
    fastest = 1e-300
    for i in range(y.size):
        fastest = max(fastest, abs(out[i]) / size[i])
    return float(0.1 * tolerance**exponent / fastest)


@kernel
def _sound(kind: int, static: int, y: Floats, change: Floats, moved: Floats) -> bool:
    """Whether a step ends in the chart: finite, and outside the horizon in static charts."""
    total = 0.0
    for i in range(y.size):
        moved[i] = y[i] + change[i]
        total += moved[i]
    if not np.isfinite(total):
        return False
    radius = areal_radius(kind, moved)
    return radius > 2.0 if static == 1 else radius > 0.0


@kernel
def _at_edge(kind: int, static: int, y: Floats) -> bool:
    """Whether a run that cannot go on stands at the horizon of a static chart, or at r = 0."""
    radius = areal_radius(kind, y)
    return radius < 2.001 if static == 1 else radius < 0.001


@kernel
def _reach(numbers: Integers, y: Floats, stamps: Floats, h: float) -> float:
    """The step, no further than the last time stamp where the step is chart time."""
    if numbers[1] == 1:
        left = stamps[-1] - y[numbers[2]]
        if abs(left) < abs(h):
            return float(left)
    return h


@kernel
def _smaller(real: Floats, error: float, taken: float, sound: bool) -> bool:
    """Shorten the next step after a rejected one; False if it cannot be shorter."""
    shrink = 0.9 * error ** (-real[2]) if sound and error > 1.0 else 0.2
    real[0] = taken * min(0.7, max(0.1, shrink))
    return bool(abs(real[0]) > 1e-16 * abs(real[4]) and np.isfinite(real[0]))


@kernel
def _advance(
    numbers: Integers, real: Floats, y: Floats, carry: Floats, change: Floats, error: float,
    taken: float,
) -> None:  # fmt: skip
    """Add the step's change and propose the next step."""
    if numbers[3] == 1:
        compensated_add(y, carry, change)
    else:
        for i in range(y.size):
            y[i] += change[i]
    if numbers[5] == 1:
        grow = 0.9 * error ** (-real[2]) if error > 0.0 else 5.0
        real[0] = taken * min(5.0, max(0.2, grow))
    real[4] = max(abs(taken), 0.5 * real[4])
    real[5] = max(abs(taken), real[5])


def _serve(
    numbers: Integers, par: Floats, code: Integers, table: Floats, real: Floats, y: Floats,
    carry: Floats, taken: float, ends: float, before: Floats, memory: Floats, scratch: Floats,
    change: Floats, out: Floats, moved: Floats, stamps: Floats, rows: Floats, count: Integers,
) -> None:  # fmt: skip
    """Fill the rows whose time stamps lie in the step just taken, up to the time ``ends``."""
    at, kept = numbers[2], change.copy()
    theta, begin, whole = 0.0, y[numbers[2]], change[numbers[2]]
    for n in range(count[3], stamps.size):
        time = stamps[n]
        if real[3] * (ends - time) < 0.0:
            break
        theta += (taken - theta) * ((time - begin) / (whole - (begin - y[at])))
        theta, work = stamp(
            numbers, par, code, table, real[1], y, carry, time, taken, theta, before, memory,
            scratch, change, out, moved,
        )  # fmt: skip
        begin = time
        count[2] += work
        for i in range(y.size):
            rows[n, i] = y[i] + (change[i] + carry[i])
        count[3] = n + 1
    change[:] = kept


def _loop(
    numbers: Integers, par: Floats, code: Integers, table: Floats, real: Floats, y: Floats,
    carry: Floats, memory: Floats, before: Floats, scratch: Floats, stamps: Floats, rows: Floats,
    places: Floats, watched: Integers, values: Floats, hits: Integers, states: Floats,
    count: Integers, budget: int,
) -> int:  # fmt: skip
    """Take up to ``budget`` steps; everything that lasts is in the arrays.

    ``numbers``: kind, variable, row of the chart's time, whether sums are compensated, whether
    the chart is static, whether steps adapt.  ``real``: next step, tolerance, exponent of the
    step control, direction, recent and largest size of steps.  ``count``: steps, rejected,
    evaluations, next time stamp, hits.
    """
    kind, variable, at, events = numbers[0], numbers[1], numbers[2], watched.shape[0]
    change, out, moved = np.zeros(y.size), np.zeros(y.size), np.zeros(y.size)
    for _ in range(budget):
        if count[3] >= stamps.size:
            return 1
        if events > 0 and count[4] + 2 * events > hits.shape[0]:
            return 6
        if real[0] == 0.0:
            first = _first_step(kind, variable, par, y, real[1], real[2], out, moved)
            real[0] = real[3] * first
        h = _reach(numbers, y, stamps, real[0])
        if stateful:
            before[:, :] = memory
        error, work, taken = step(kind, variable, par, code, table, real[1], y, h, memory, change)
        count[2] += work
        sound = _sound(kind, numbers[4], y, change, moved)
        if not (error <= 1.0 and sound):
            if numbers[5] == 0:
                return 4 if np.isfinite(error) else 5
            if stateful:
                memory[:, :] = before
            count[1] += 1
            if not _smaller(real, error, taken, sound):
                return 4 if _at_edge(kind, numbers[4], y) else 3
            continue
        if abs(taken) < 1e-15 * real[5]:
            return 4 if _at_edge(kind, numbers[4], y) else 3
        last, ends = taken, y[at] + (change[at] + carry[at])
        if events > 0:
            moved[:] = change
            kept = change.copy()
            last = notice(
                numbers, par, code, table, real[1], y, carry, taken, before, memory, scratch,
                change, out, moved, places, watched, values, hits, states, count,
            )  # fmt: skip
            change[:] = kept
            for i in range(count[4]):
                if last != taken and hits[i, 1] == count[0] and states[i, 0] == last:
                    ends = states[i, 1 + at]
        if real[3] * (ends - stamps[count[3]]) >= 0.0:
            serve(
                numbers, par, code, table, real, y, carry, taken, ends, before, memory, scratch,
                change, out, moved, stamps, rows, count,
            )  # fmt: skip
        if last != taken:
            return 2
        _advance(numbers, real, y, carry, change, error, taken)
        count[0] += 1
    return 0


def _many(
    numbers: Integers, pars: Floats, code: Integers, table: Floats, reals: Floats, starts: Floats,
    size: npt.NDArray[np.int64], stamps: Floats, rows: Floats, counts: Integers,
    status: Integers, first: int, end: int,
) -> None:  # fmt: skip
    """Run the orbits from ``first`` to ``end - 1`` of an ensemble, each as if alone."""
    none, nothing = np.zeros((0, 3), np.int64), np.zeros((0, 2))
    no_hits, no_states = np.zeros((0, 3), np.int64), np.zeros((0, starts.shape[1] + 1))
    memory, before = np.zeros((size[0], size[1])), np.zeros((size[0], size[1]))
    scratch, places = np.zeros((size[0], size[1])), np.zeros((4, 3))
    carry = np.zeros(starts.shape[1])
    for o in range(first, end):
        memory[:, :] = 0.0
        carry[:] = 0.0
        status[o] = loop(
            numbers, pars[o], code, table, reals[o], starts[o], carry, memory, before, scratch,
            stamps, rows[o], places, none, nothing, no_hits, no_states, counts[o], size[2],
        )  # fmt: skip


@cache
def loop_of(name: str, method: Any, dense: Any | None, keeps: bool) -> tuple[Any, Any]:
    """The run loop and the ensemble loop around a method's step.

    Parameters
    ----------
    name : str
        Tells the compiled copies apart.
    method : kernel
        ``step(kind, variable, par, code, table, tolerance, y, h, memory, change) ->
        (error, evaluations, taken)``.
    dense : kernel, optional
        A method's own way to the change inside a step (signature of :func:`_restep`).
    keeps : bool
        Whether the memory lasts from step to step, so that it is restored after a rejected step.
    """
    way = dense or specialised(_restep, f"{name}_restep", step=method)
    row = specialised(_stamp, f"{name}_stamp", inside=way)
    see = notice_of(name, way)
    give = specialised(_serve, f"{name}_serve", stamp=row)
    run = specialised(_loop, f"{name}_loop", step=method, notice=see, serve=give, stateful=keeps)
    return run, specialised(_many, f"{name}_many", loop=run)
