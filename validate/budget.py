"""Tolerances as data, and the guard-banded verdict.

A sample with deviation ``d`` and guard ``w`` (everything that could make ``d`` wrong) conforms
to the tolerance ``T`` if ``d + w <= T`` and fails it if ``d - w > T``; between, neither is
proven.  (Guarded acceptance and guarded rejection: ILAC-G8:09/2019, section 4.2; JCGM 106:2012
and ISO 14253-1 in the same spirit, not read in full.)
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError, UsageError

if TYPE_CHECKING:
    from truefall.validate.compare import Guard

__all__ = [
    "QUANTITIES",
    "RULE",
    "Budget",
    "Judgement",
    "judge",
    "overall",
    "parse_budget",
    "parse_budget_options",
]

RULE = "guarded acceptance and rejection: pass if d + w <= T, fail if d - w > T, undecided between"
#: Quantity, and what its tolerance is measured in.
QUANTITIES = {
    "position": "length",
    "velocity": "speed",
    "clock": "time",
    "energy": "relative",
    "angular_momentum": "relative",
}
_PER_REVOLUTION = ("position", "velocity", "clock")
_WITH_UNIT = re.compile(r"\s*([0-9.eE+-]+)\s*([A-Za-z/]+)\s*", re.ASCII)

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Budget:
    """Tolerances in the file's own units; ``per_revolution`` ones grow with |azimuth|/(2 pi)."""

    absolute: Mapping[str, float]
    per_revolution: Mapping[str, float]

    def __bool__(self) -> bool:
        return bool(self.absolute or self.per_revolution)

    def flat(self) -> dict[str, float]:
        """All tolerances by name; those that grow as ``per_revolution.position`` and so on."""
        growing = {f"per_revolution.{k}": v for k, v in self.per_revolution.items()}
        return {**self.absolute, **growing}


@dataclass(frozen=True)
class Judgement:
    """One quantity held against one tolerance.

    ``row`` (0-based) is where the margin ``T - (d + w)`` is smallest among the rows that made
    the outcome; ``bound`` and ``quantisation`` are the parts of ``guard`` there.
    ``undecided_rows`` includes the ``unjudged_rows``, which the file's digits do not determine.
    """

    quantity: str
    outcome: str
    tolerance: float
    deviation: float
    guard: float
    bound: float
    quantisation: float
    row: int
    time: float
    undecided_rows: int
    failing_rows: int
    unjudged_rows: int = 0

    @property
    def margin(self) -> float:
        """``T - (d + w)``: positive means conforming with that much to spare."""
        return self.tolerance - (self.deviation + self.guard)

    @property
    def adequacy(self) -> float | None:
        """``T/b``: how much finer than the tolerance the reference is; None if it is exact."""
        return self.tolerance / self.bound if self.bound > 0 else None


def _unit_value(text: str, kind: str, system: str, key: str) -> float:
    """A tolerance with a unit ("1 mm", "2 ns", "3 mm/s") in the system's units."""
    from truefall.reference.units import LENGTHS, SYSTEM, TIMES

    match = _WITH_UNIT.fullmatch(text)
    allowed = {
        "length": "a length such as 1 mm, 2 km",
        "speed": "a speed such as 1 mm/s",
        "time": "a time such as 1 ns, 2 s",
        "relative": "a plain number",
    }[kind]
    problem = ValueError(f"budget {key} is {text!r}; expected a number or {allowed}")
    if match is None or kind == "relative":
        raise problem
    try:
        amount = Fraction(match[1])
    except ValueError:
        raise problem from None
    if system == "geometric":
        raise ValueError(
            f"budget {key} is {text!r}, but geometric units have no {match[2]}; write a plain "
            "number"
        )
    over, _, under = match[2].partition("/")
    length = LENGTHS.get(over) if kind in ("length", "speed") else None
    time = TIMES.get(under if kind == "speed" else over) if kind in ("speed", "time") else None
    metre = Fraction(1, 1000) if SYSTEM[system].length == "km" else Fraction(1)
    if kind == "length" and length is not None and not under:
        return float(amount * length * metre)
    if kind == "time" and time is not None and not under:
        return float(amount * time)
    if kind == "speed" and length is not None and time is not None:
        return float(amount * length * metre / time)
    raise problem


def _value(value: Any, key: str, kind: str, system: str) -> float:
    if isinstance(value, str):
        try:
            result = float(value)
        except ValueError:
            result = _unit_value(value, kind, system, key)
    elif isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"budget {key} must be a number, not {value!r}")
    else:
        result = float(value)
    if not (0 < result < float("inf")):
        raise ValueError(f"budget {key} must be positive and finite, not {value!r}")
    return result


def _known(key: str, known: Sequence[str]) -> None:
    if key not in known:
        near = difflib.get_close_matches(key, known, n=1)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        raise ValueError(f"unknown budget {key!r}; known are {', '.join(known)}{hint}")


def parse_budget(mapping: Mapping[str, Any], system: str, where: str | None = None) -> Budget:
    """A budget from the [budget] table.

    Raises
    ------
    InputError
        For unknown keys or values that are no tolerance.
    """
    absolute: dict[str, float] = {}
    growing: dict[str, float] = {}
    try:
        for key, value in mapping.items():
            _known(key, (*QUANTITIES, "per_revolution"))
            if key != "per_revolution":
                absolute[key] = _value(value, key, QUANTITIES[key], system)
                continue
            if not isinstance(value, Mapping):
                raise ValueError("budget per_revolution must be a table such as { position = 1.0 }")
            for inner, amount in value.items():
                _known(inner, _PER_REVOLUTION)
                growing[inner] = _value(
                    amount, f"per_revolution.{inner}", QUANTITIES[inner], system
                )
    except ValueError as error:
        raise InputError(str(error), where) from None
    return Budget(absolute, growing)


def _looks_like_tolerance(text: str) -> bool:
    match = _WITH_UNIT.fullmatch(text)
    try:
        value = float(match[1] if match else text)
    except ValueError:
        return False
    return 0 < value < float("inf")


def parse_budget_options(options: Sequence[str]) -> dict[str, Any]:
    """``position=1e-6`` options (also several in one, separated by commas) as a [budget] table.

    Raises
    ------
    UsageError
        For anything else.
    """
    table: dict[str, Any] = {}
    for option in options:
        for part in option.split(","):
            key, equals, value = part.partition("=")
            key, value = key.strip(), value.strip()
            if not equals or not key or not value:
                raise UsageError(f"--budget {part.strip()!r}: write for example position=1e-6")
            outer, _, inner = key.partition(".")
            try:
                _known(outer, (*QUANTITIES, "per_revolution"))
                if outer == "per_revolution":
                    _known(inner, _PER_REVOLUTION)
            except ValueError as error:
                raise UsageError(f"--budget: {error}") from None
            if not _looks_like_tolerance(value):
                raise UsageError(
                    f"--budget {part.strip()!r}: {value!r} is neither a positive number nor one "
                    "with a unit such as 1 mm"
                )
            if outer == "per_revolution":
                table.setdefault("per_revolution", {})[inner] = value
            else:
                table[key] = value
    return table


def _excess(d: Floats, w: Floats, tolerance: Floats) -> Floats:
    """A number with the sign of ``d + w - T``, without rounding (two-sum: Knuth 1969)."""
    total = d + w
    virtual = total - d
    rest = (d - (total - virtual)) + (w - virtual)
    return np.where(total == tolerance, rest, total - tolerance)


def judge(
    quantity: str,
    tolerance: Floats,
    deviation: Floats,
    guard: Guard,
    time: Floats,
    judged: npt.NDArray[np.bool_],
) -> Judgement:
    """Hold the samples of one quantity against its tolerance.

    Parameters
    ----------
    tolerance, deviation, time : (n,)
    guard : Guard
        Its total is ``w``.
    judged : (n,) bool
        Samples past the time up to which the file determines the orbit are not judged: they
        count as undecided.  So does a sample that has no value (NaN).
    """
    w = guard.total
    with np.errstate(invalid="ignore"):
        passes = judged & (_excess(deviation, w, tolerance) <= 0)
        fails = judged & (_excess(deviation, -w, tolerance) > 0)
    undecided = ~passes & ~fails
    if fails.any():
        outcome, among = "fail", fails
    elif undecided.any():
        outcome, among = "undecided", undecided
    else:
        outcome, among = "pass", passes
    if outcome == "undecided" and (undecided & judged).any():
        among = undecided & judged  # a row that was judged tells more than one that was not
    margin = np.where(among, tolerance - (deviation + w), np.inf)
    row = int(np.argmin(np.nan_to_num(margin, nan=-np.inf)))
    return Judgement(
        quantity=quantity,
        outcome=outcome,
        tolerance=float(tolerance[row]),
        deviation=float(deviation[row]),
        guard=float(w[row]),
        bound=float(guard.bound[row]),
        quantisation=float(guard.quantisation[row]),
        row=row,
        time=float(time[row]),
        undecided_rows=int(undecided.sum()),
        failing_rows=int(fails.sum()),
        unjudged_rows=int((~judged).sum()),
    )


def overall(judgements: Sequence[Judgement]) -> str:
    """The verdict over all quantities: any failure fails, all must pass to pass."""
    outcomes = {j.outcome for j in judgements}
    if not outcomes:
        return "not-judged"
    if "fail" in outcomes:
        return "fail"
    return "undecided" if "undecided" in outcomes else "pass"
