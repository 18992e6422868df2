"""Numbers and verdicts in words, for the page and for the one line."""

from __future__ import annotations

import math
from collections import Counter
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from truefall.validate.nightly.record import CaseRecord, Night

__all__ = [
    "MARKS",
    "alike",
    "clipped",
    "counted",
    "deciding",
    "headline",
    "number",
    "printable",
    "seconds",
    "severity",
    "share",
    "summary_line",
    "worst_cases",
]

#: Longest name on the one line.
_LONGEST_NAME = 80

#: Verdict to the sign shown before its word: meaning is never told by colour alone.
MARKS = {
    "pass": "✓", "fail": "✗", "undecided": "?", "not-judged": "–", "unusable": "!",
    "not-run": "!",
}  # fmt: skip
_ORDER = ("unusable", "not-run", "fail", "undecided", "not-judged", "pass")
_WORDS = {
    "pass": ("passes", "pass"), "fail": ("fails", "fail"),
    "undecided": ("is undecided", "are undecided"),
    "not-judged": ("was not judged", "were not judged"),
    "unusable": ("gave nothing that can be used", "gave nothing that can be used"),
    "not-run": ("did not run", "did not run"),
}  # fmt: skip


def printable(text: str) -> str:
    """Somebody else's text on one line: control characters become a visible sign."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)


def clipped(text: str) -> str:
    """A printable name, its middle left out where it is very long."""
    text = printable(text)
    if len(text) <= _LONGEST_NAME:
        return text
    half = _LONGEST_NAME // 2
    return f"{text[:half]}…{text[-half + 1 :]}"


def number(value: float | None) -> str:
    """A size with two digits; a dash for none."""
    if value is None or not math.isfinite(value):
        return "–"
    return "0" if value == 0 else f"{value:.1e}"


def share(value: float | None) -> str:
    """A share in per cent."""
    if value is None or not math.isfinite(value):
        return "–"
    per_cent = 100 * value
    if per_cent < -999:
        return f"{1 - value:.3g} times the budget"
    if value < 1 and per_cent >= 99.5:
        return "> 99 %"
    if value < 0 and per_cent > -0.5:
        return "> -1 %"
    return f"{per_cent:.0f} %"


def seconds(value: float) -> str:
    """A run time."""
    if value < 1:
        return f"{value * 1e3:.0f} ms"
    return f"{value:.1f} s" if value < 100 else f"{value / 60:.1f} min"


def counted(night: Night) -> list[tuple[str, int]]:
    """How many cases have each verdict, the worst first."""
    count = Counter(case.verdict for case in night.cases)
    return [(verdict, count[verdict]) for verdict in _ORDER if count[verdict]]


def headline(night: Night) -> str:
    """The verdict on the night in one sentence."""
    total = len(night.cases)
    found = counted(night)
    cases = "case" if total == 1 else "cases"
    if not found:
        return "No case was run."
    if found[0][0] == "pass":
        return f"All {total} {cases} within budget." if total > 1 else "The case is within budget."
    parts = [f"{n} {_WORDS[v][0 if n == 1 else 1]}" for v, n in found]
    return f"Of {total} {cases}, " + ", ".join(parts) + "."


def severity(case: CaseRecord) -> tuple[int, float, str]:
    """Sorting key: the worst verdict first, then the smallest margin."""
    margin = case.margin
    return (
        _ORDER.index(case.verdict) if case.verdict in _ORDER else 0,
        margin if margin is not None and math.isfinite(margin) else math.inf,
        case.key,
    )


def worst_cases(night: Night, most: int = 5) -> list[CaseRecord]:
    """The cases a person should look at first: those that do not pass."""
    return [c for c in sorted(night.cases, key=severity) if c.verdict != "pass"][:most]


def alike(night: Night, most: int = 6) -> tuple[list[list[CaseRecord]], int]:
    """Cases that do not pass, those of one propagator with the same trouble together.

    Returns
    -------
    list of lists of CaseRecord
        At most ``most`` troubles, the worst first, and in each the worst case first.
    int
        How many cases that leaves out.
    """
    groups: dict[tuple[str, ...], list[CaseRecord]] = {}
    for case in worst_cases(night, len(night.cases)):
        groups.setdefault(_trouble(case), []).append(case)
    found = list(groups.values())
    return found[:most], sum(len(group) for group in found[most:])


def _trouble(case: CaseRecord) -> tuple[str, ...]:
    """Equal for cases that one look explains together."""
    if case.verdict == "fail" and case.findings:
        cause = str(case.findings[0].get("cause", ""))
        return (case.propagator, case.verdict, cause)
    if case.reason or case.outcome != "ran":
        return (case.propagator, case.verdict, case.outcome, case.reason)
    return (case.propagator, case.verdict, case.key)


def deciding(case: CaseRecord) -> str:
    """The quantity that has the least of its budget left; "" where that is not known.

    Tolerances per revolution need the revolutions of each row, which a record does not hold.
    """
    left: dict[str, float] = {}
    for quantity, budget in case.budget.items():
        largest = case.errors.get(quantity, {}).get("max")
        if largest is not None and budget > 0:
            left[quantity] = 1.0 - (largest + case.guards.get(quantity, 0.0)) / budget
        elif quantity.startswith("per_revolution"):
            return ""
    return min(left, key=left.__getitem__) if left else ""


def summary_line(night: Night) -> str:
    """The night on one line, for a chat or a mail."""
    alarms = [a for a in night.alarms if a.level == "alarm"]
    standing = [a for a in night.alarms if a.level == "standing"]
    words = {0: "OK", 1: "OUT OF BUDGET OR WORSE", 3: "UNDECIDED", 4: "NOT USABLE"}
    head = words.get(night.exit_status, f"EXIT STATUS {night.exit_status}")
    line = f"{head}  truefall night {night.number} of {clipped(night.suite)}: {headline(night)}"
    if alarms:
        first = alarms[0]
        where = f" ({clipped(first.key)})" if first.key else ""
        more = f" and {len(alarms) - 1} more" if len(alarms) > 1 else ""
        line += f" Alarm: {first.name}{where}{more}."
    if standing:
        line += f" Standing since before: {len(standing)}."
    worst = worst_cases(night, 1)
    if worst:
        case = worst[0]
        line += f" Worst: {clipped(case.key)}"
        quantity = deciding(case)
        if quantity:
            over = f"{number(case.errors[quantity]['max'])} for a budget of "
            line += f", {quantity.replace('_', ' ')} error {over}{number(case.budget[quantity])}"
        elif case.position_error is not None:
            unit = "GM/c^2" if case.unit_length == "1" else case.unit_length
            line += f", position error {number(case.position_error)} {unit}"
        elif case.outcome != "ran":
            line += f", {case.outcome}"
        line += "."
    return line
