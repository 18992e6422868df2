"""Requests made clear before anything is computed: names, numbers, starts."""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
import numpy.typing as npt

from truefall.integrators.index import EQUATIONS, METHODS, Equations
from truefall.integrators.methods import Method, Parts, Problem

__all__ = ["ARITHMETICS", "EVENTS", "Event", "Request", "check_events", "check_request"]

Floats = npt.NDArray[np.float64]
T = TypeVar("T")

ARITHMETICS = ("float64", "compensated", "double-double")
#: Kinds of events and their numbers in loop.py.
EVENTS: Mapping[str, int] = {
    "periapsis": 0, "apoapsis": 1, "radius": 2, "horizon": 2, "revolutions": 3,
}  # fmt: skip
#: Order of series whose last terms are to reach 1e-32.
_ORDER_IN_TWO_WORDS = 48
_DIRECTIONS: Mapping[str | None, int] = {"in": -1, "out": 1, None: 0}


@dataclass(frozen=True)
class Event:
    """Something to be noticed on the way.

    Attributes
    ----------
    kind : {"periapsis", "apoapsis", "radius", "horizon", "revolutions"}
        Turning points of the areal radius; an areal radius crossed; r = 2 crossed; every
        ``value``-th revolution about the mass since the start completed.
    value : float, optional
        The areal radius, or the number of revolutions (1 if not given).
    direction : {"in", "out"}, optional
        Only crossings inward or outward along the way that the run takes.
    stop : int
        The run ends at the event of this count; 0 goes on.
    name : str
        Appears in the hits; the kind if empty.
    """

    kind: str
    value: float | None = None
    direction: str | None = None
    stop: int = 0
    name: str = ""


@dataclass(frozen=True)
class Request:
    """What :func:`check_request` found in order."""

    equations: Equations
    method: Method
    parts: Parts
    variable: int
    light: bool
    stamps: Floats
    step: float | None
    tolerance: float
    order: int
    arithmetic: str

    @property
    def direction(self) -> float:
        """1 or -1: along or against time."""
        return 1.0 if self.stamps.size < 2 or self.stamps[-1] > self.stamps[0] else -1.0


def _chosen(name: str, table: Mapping[str, T] | Sequence[str], what: str) -> str:
    if name not in table:
        near = difflib.get_close_matches(str(name), list(table), n=1)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        raise ValueError(f"unknown {what} {name!r}; known are {', '.join(table)}{hint}")
    return name


def _stamps(times: npt.ArrayLike) -> Floats:
    stamps = np.array(times, dtype=np.float64)
    if stamps.ndim != 1 or stamps.size < 1 or not np.all(np.isfinite(stamps)):
        raise ValueError("times must be a list of finite numbers; the first is the start's")
    gaps = np.diff(stamps)
    if not (np.all(gaps > 0) or np.all(gaps < 0)):
        raise ValueError("times must be strictly increasing or strictly decreasing")
    return stamps


def _positive(value: float | None, name: str, needed: bool) -> None:
    if value is None:
        if needed:
            raise ValueError(f"this method needs a {name}: a positive number")
        return
    if not (np.isfinite(value) and value > 0):
        raise ValueError(f"{name} must be a positive number, not {value!r}")


def _order(method: Method, order: int | None, arithmetic: str) -> int:
    if method.order is not None:
        if order not in (None, method.order):
            raise ValueError(f"{method.name} has order {method.order}; leave order away")
        return method.order
    usual = _ORDER_IN_TWO_WORDS if arithmetic == "double-double" else method.default_order
    found = usual if order is None else order
    if found not in method.orders:
        allowed = method.orders
        steps = "" if allowed.step == 1 else f" in steps of {allowed.step}"
        raise ValueError(
            f"order must be from {allowed.start} to {allowed[-1]}{steps} for {method.name}, "
            f"not {found!r}"
        )
    return found


def _allowed(value: str, allowed: Sequence[str], what: str, owner: str) -> None:
    if allowed and value not in allowed:
        raise ValueError(
            f"{what} {value!r} does not go with {owner}; it takes {', '.join(allowed)}"
        )


def check_request(
    equations: str,
    times: npt.ArrayLike,
    *,
    method: str,
    particle: str,
    variable: str | None,
    step: float | None,
    tolerance: float | None,
    order: int | None,
    arithmetic: str,
) -> Request:
    """The request in full, or ValueError with one sentence that says what to change."""
    chosen = EQUATIONS[_chosen(equations, EQUATIONS, "set of equations")]
    how = METHODS[_chosen(method, METHODS, "method")]
    _chosen(particle, ("massive", "light"), "particle")
    _chosen(arithmetic, ARITHMETICS, "arithmetic")
    in_what = chosen.variables[0] if variable is None else variable
    if variable is None and how.variables and in_what not in how.variables:
        in_what = how.variables[0]
    _allowed(in_what, chosen.variables, "independent variable", chosen.name)
    _allowed(in_what, how.variables, "independent variable", how.name)
    _allowed(chosen.name, how.equations, "the set of equations", how.name)
    _allowed(arithmetic, how.arithmetics, "arithmetic", how.name)
    _positive(step, "step", not how.adaptive)
    _positive(tolerance, "tolerance", how.adaptive and step is None)
    if step is not None and not how.fixed:
        raise ValueError(f"{how.name} chooses its steps; give a tolerance instead of a step")
    if step is not None and tolerance is not None and how.adaptive:
        raise ValueError("give a step or a tolerance, not both")
    if arithmetic == "double-double" and step is None and how.order is not None:
        raise ValueError(f"{how.name} runs in double-double at a fixed step; give a step")
    if tolerance is not None and not how.adaptive:
        raise ValueError(f"{how.name} has a fixed step; give a step and no tolerance")
    found = _order(how, order, arithmetic)
    number = chosen.variable(in_what)
    problem = Problem(chosen.kind, number, chosen.size, found, step is None)
    return Request(
        chosen, how, how.parts(problem), number, particle == "light", _stamps(times), step,
        tolerance or 1.0, found, arithmetic,
    )  # fmt: skip


def three(values: npt.ArrayLike, name: str) -> Floats:
    """Three finite numbers, or ValueError."""
    found = np.array(values, dtype=np.float64)
    if found.shape != (3,) or not np.all(np.isfinite(found)):
        raise ValueError(f"{name} must be three finite numbers, not {values!r}")
    return found


def check_events(events: Sequence[Event]) -> tuple[npt.NDArray[np.int64], Floats]:
    """Events as arrays: number, sense and stop; radius or revolutions (radians), next goal."""
    codes = np.zeros((len(events), 3), dtype=np.int64)
    values = np.zeros((len(events), 2))
    for row, event in enumerate(events):
        _chosen(event.kind, EVENTS, "kind of event")
        if event.direction not in _DIRECTIONS:
            raise ValueError(f"direction must be 'in', 'out' or None, not {event.direction!r}")
        if event.stop < 0:
            raise ValueError(f"stop must be a count of events, 0 or more, not {event.stop!r}")
        value = {"horizon": 2.0, "revolutions": event.value or 1.0}.get(event.kind, event.value)
        if event.kind in ("radius", "revolutions") and not (value is not None and value > 0):
            raise ValueError(
                f"the event {event.kind!r} needs a positive value, not {event.value!r}"
            )
        codes[row] = EVENTS[event.kind], _DIRECTIONS[event.direction], event.stop
        size = 0.0 if value is None else float(value)
        values[row] = size * (2.0 * np.pi if event.kind == "revolutions" else 1.0)
    return codes, values
