"""Events inside a step: turning points, radii, revolutions.

Templates as in loop.py: ``inside``, ``crossing`` and ``record`` are given when a copy is made.
"""

from __future__ import annotations

from math import atan2
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel, specialised
from truefall.integrators.equations.rates import areal_radius, outward, place
from truefall.integrators.equations.types import Floats

__all__ = ["notice_of"]

Integers = npt.NDArray[np.int64]

# Given by ``specialised``; here so that the templates read as plain functions.
inside: Any = None
crossing: Any = None
record: Any = None


@kernel
def _turned(x: Floats, y: Floats, normal: Floats) -> float:
    """The angle from x to y about a normal."""
    across = (
        normal[0] * (x[1] * y[2] - x[2] * y[1])
        + normal[1] * (x[2] * y[0] - x[0] * y[2])
        + normal[2] * (x[0] * y[1] - x[1] * y[0])
    )
    return atan2(across, x[0] * y[0] + x[1] * y[1] + x[2] * y[2])


@kernel
def _gauge(
    kind: int, variable: int, par: Floats, what: int, value: float, y: Floats, out: Floats,
    places: Floats,
) -> float:  # fmt: skip
    """What an event watches: zero when it happens (0 turning, 2 radius, 3 azimuth)."""
    if what == 2:
        return float(areal_radius(kind, y) - value)
    if what == 3:
        place(kind, y, places[2])
        return float(places[3, 0] + _turned(places[1], places[2], places[0]) - value)
    return outward(kind, variable, par, y, out)


def _crossing(
    numbers: Integers, par: Floats, code: Integers, table: Floats, tolerance: float, y: Floats,
    what: int, value: float, a: float, b: float, before: Floats, memory: Floats,
    scratch: Floats, change: Floats, out: Floats, moved: Floats, places: Floats,
    ends: tuple[float, float],
) -> tuple[float, int]:  # fmt: skip
    """Root of a gauge between two points of a step: the Illinois form of the false position.

    (Dowell & Jarratt 1971, BIT 11, 168; from memory.)
    """
    kind, variable = numbers[0], numbers[1]
    fa, fb = ends
    theta, work, side = b, 0, 0
    for _ in range(100):
        if fb == fa or abs(b - a) <= 4e-16 * (abs(a) + abs(b)):
            break
        theta = (a * fb - b * fa) / (fb - fa)
        if not (min(a, b) < theta < max(a, b)):
            theta = 0.5 * (a + b)
        work += inside(
            kind, variable, par, code, table, tolerance, y, theta, before, memory, scratch, change
        )
        for i in range(y.size):
            moved[i] = y[i] + change[i]
        f = _gauge(kind, variable, par, what, value, moved, out, places)
        if f == 0.0 or theta in (a, b):
            break
        if f * fb < 0.0:
            a, fa, side = b, fb, 0
        elif side == 1:
            fa *= 0.5
        else:
            side = 1
        b, fb = theta, f
    return theta, work


def _record(
    numbers: Integers, par: Floats, code: Integers, table: Floats, tolerance: float, y: Floats,
    carry: Floats, theta: float, before: Floats, memory: Floats, scratch: Floats,
    change: Floats, e: int, watched: Integers, hits: Integers, states: Floats, count: Integers,
) -> bool:  # fmt: skip
    """Keep the state at an event; says whether the run is to stop there."""
    count[2] += inside(
        numbers[0], numbers[1], par, code, table, tolerance, y, theta, before, memory, scratch,
        change,
    )  # fmt: skip
    row = count[4]
    hits[row, 0], hits[row, 1] = e, count[0]
    states[row, 0] = theta
    for i in range(y.size):
        states[row, 1 + i] = y[i] + (change[i] + carry[i])
    count[4] += 1
    hits[row, 2] = 0
    if watched[e, 2] > 0:
        watched[e, 2] -= 1
        hits[row, 2] = 1 if watched[e, 2] == 0 else 0
    return bool(hits[row, 2] == 1)


@kernel
def _bracket(
    watched: Integers, values: Floats, e: int, piece: int, middle: float, h: float,
    radii: Floats, turn: float, turned: Floats,
) -> tuple[bool, float, float, float]:  # fmt: skip
    """Whether event ``e`` happens in a piece of the step; the gauge's value and ends there.

    ``turn`` is -1 if the step holds a periapsis, 1 for an apoapsis, else 0; ``turned`` the
    azimuth at the step's ends.  The radius is monotone in each piece.
    """
    what, sense = watched[e, 0], watched[e, 1]
    if what <= 1:
        here = piece == 0 and (turn < 0.0 if what == 0 else turn > 0.0)
        return here, 0.0, 0.0, 0.0
    if what == 2:
        value = values[e, 0]
        fa, fb = radii[piece] - value, radii[piece + 1] - value
        length = middle if piece == 0 else h - middle
        here = length != 0.0 and fa * fb <= 0.0 and fa != 0.0 and sense * (fb - fa) >= 0.0
        return here, value, fa, fb
    goal = values[e, 1] if turned[1] > 0.0 else -values[e, 1]
    here = piece == 0 and abs(turned[1]) >= values[e, 1]
    return here, goal, turned[0] - goal, turned[1] - goal


def _notice(
    numbers: Integers, par: Floats, code: Integers, table: Floats, tolerance: float, y: Floats,
    carry: Floats, h: float, before: Floats, memory: Floats, scratch: Floats,
    change: Floats, out: Floats, moved: Floats, places: Floats, watched: Integers,
    values: Floats, hits: Integers, states: Floats, count: Integers,
) -> float:  # fmt: skip
    """Record the events of a step; gives back the point at which to stop, or h.

    A step is looked at in the two pieces on either side of the turning point it may hold.
    """
    kind, variable = numbers[0], numbers[1]
    last, middle, turn = h, h, 0.0
    end = y + change
    place(kind, y, places[1])
    place(kind, end, places[2])
    turned = np.array([places[3, 0], places[3, 0] + _turned(places[1], places[2], places[0])])
    g0, g1 = outward(kind, variable, par, y, out), outward(kind, variable, par, end, out)
    radii = np.array([areal_radius(kind, y), areal_radius(kind, end), areal_radius(kind, end)])
    if g0 * g1 < 0.0 or (g1 == 0.0 and g0 != 0.0):
        middle, work = crossing(
            numbers, par, code, table, tolerance, y, 0, 0.0, 0.0, h, before, memory, scratch,
            change, out, moved, places, (g0, g1),
        )  # fmt: skip
        count[2] += work
        radii[1] = areal_radius(kind, moved)
        # A radius that only rounding moves (a circle, an edge approached for ever) does not turn.
        if max(abs(radii[1] - radii[0]), abs(radii[2] - radii[1])) > 1e-13 * radii[1]:
            turn = 1.0 if g0 * h > 0.0 else -1.0
    for e in range(watched.shape[0]):
        for piece in range(2):
            happens, value, fa, fb = _bracket(
                watched, values, e, piece, middle, h, radii, turn, turned
            )
            if not happens:
                continue
            theta = middle
            if watched[e, 0] >= 2:
                a, b = (0.0, middle) if piece == 0 else (middle, h)
                if watched[e, 0] == 3:
                    a, b = 0.0, h
                    values[e, 1] += values[e, 0]
                theta, work = crossing(
                    numbers, par, code, table, tolerance, y, watched[e, 0], value, a, b, before,
                    memory, scratch, change, out, moved, places, (fa, fb),
                )  # fmt: skip
                count[2] += work
            stop = record(
                numbers, par, code, table, tolerance, y, carry, theta, before, memory, scratch,
                change, e, watched, hits, states, count,
            )  # fmt: skip
            if stop and abs(theta) < abs(last):
                last = theta
    places[3, 0] = turned[1]
    return last


def notice_of(name: str, way: Any) -> Any:
    """The kernel that notices events, around a method's way to the change inside a step."""
    root = specialised(_crossing, f"{name}_crossing", inside=way)
    keep = specialised(_record, f"{name}_record", inside=way)
    return specialised(_notice, f"{name}_notice", crossing=root, record=keep)
