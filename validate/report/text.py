"""The terminal page of a check: the verdict, the errors, and the rule with its numbers."""

from __future__ import annotations

import math
import textwrap
from typing import TYPE_CHECKING, Any

from truefall.validate.budget import RULE
from truefall.validate.report.document import summary_of
from truefall.validate.report.findings import findings_lines

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["VERDICTS", "render", "units_of"]

WIDTH = 80
#: T/b below which the reference is called too coarse (a test-uncertainty-ratio habit).
ADEQUATE = 4
#: Verdict to the word shown and its colour (by name).
VERDICTS = {
    "pass": ("PASS", "green"),
    "fail": ("FAIL", "red"),
    "undecided": ("UNDECIDED", "yellow"),
    "not-judged": ("NOT JUDGED", "cyan"),
    "unusable": ("UNUSABLE", "red"),
}


#: Quantities whose label on the page is another.
_DRIFTS = {"ang. mom.": "angular_momentum"}
#: Where a start comes from, in words.
_STARTS = {
    "orbit file": "its declaration (orbit file, header, sidecar)",
    "first row": "the first row",
    "fit": "the best fit to the positions",
    "stored set": "the stored set",
}


def _printable(text: str) -> str:
    """Names are somebody else's text: control characters must not reach the terminal."""
    return "".join(c if c.isprintable() else "?" for c in text)


def units_of(system: str) -> dict[str, str]:
    """Unit names of a system as shown to people."""
    if system == "geometric":
        return {"length": "GM/c^2", "speed": "c", "time": "GM/c^3", "momentum": "GM/c"}
    length = "m" if system == "SI" else "km"
    return {"length": length, "speed": f"{length}/s", "time": "s", "momentum": f"{length}^2/s"}


def _number(value: float | None) -> str:
    return "-" if value is None else f"{value:.6g}"


def _error_number(value: float) -> str:
    """Errors: two digits are all they deserve."""
    return "0" if value == 0 else f"{value:.1e}"


def _upwards(value: float) -> str:
    """Guards and bounds: two digits, never rounded down (GUM, 7.2.6)."""
    text = _error_number(value)
    if float(text) >= value or not math.isfinite(value):
        return text
    digits, exponent = text.split("e")
    return (
        f"{float(digits) + 0.1:.1f}e{exponent}" if digits != "9.9" else _error_number(value * 1.1)
    )


def _orbit_lines(result: CheckResult, units: dict[str, str]) -> list[str]:
    orbit, spec = result.orbit, result.spec
    assert orbit is not None
    assert spec is not None
    turning = [
        f"{name} {_number(b.value)}"
        for name, b in (("periapsis", orbit.periapsis), ("apoapsis", orbit.apoapsis))
        if b is not None
    ]
    first = f"{orbit.orbit_class} ({spec.particle}), {spec.chart} chart, {spec.clock} time"
    second = f"E - 1 = {orbit.energy_minus_one.value:.9g}, "
    if spec.particle == "light":
        momentum = f"impact parameter {_number(orbit.angular_momentum.value)} {units['length']}"
        second = momentum
    else:
        second += f"L = {orbit.angular_momentum.value:.9g} {units['momentum']}"
    lines = [("orbit", first), ("", second)]
    if turning:
        lines.append(("", ", ".join(turning) + f" {units['length']} (areal)"))
    if orbit.radial_period is not None:
        lines.append(("", f"radial period {_number(orbit.radial_period.value)} {units['time']}"))
    return [f"  {label:<10}{text}" for label, text in lines]


def _error_lines(result: CheckResult, units: dict[str, str]) -> list[str]:
    comparison = result.comparison
    assert comparison is not None
    rows: list[tuple[str, Any, str]] = [
        ("position", comparison.distance, units["length"]),
        ("  radial", comparison.radial, units["length"]),
        ("  along", comparison.along, units["length"]),
        ("  cross", comparison.cross, units["length"]),
        ("velocity", comparison.velocity_error, units["speed"]),
        ("clock", comparison.clock_error, units["time"]),
    ]
    lines = [f"  {'error':<14}{'largest':>10}  {'rms':>10}  {'at time':>14}  unit"]
    for label, values, unit in rows:
        summary = summary_of(result, label.strip(), values)
        if summary is None:
            continue
        lines.append(
            f"  {label:<14}{_error_number(summary['max']):>10}  "
            f"{_error_number(summary['rms']):>10}  {_number(summary['at_time']):>14}  {unit}"
        )
    for label, drift in (
        ("energy", comparison.drifts.energy),
        ("ang. mom.", comparison.drifts.angular_momentum),
        ("norm", comparison.drifts.norm),
    ):
        if drift is not None:
            summary = summary_of(result, _DRIFTS.get(label, label), drift.values)
            assert summary is not None
            lines.append(
                f"  {label:<14}{_error_number(summary['max']):>10}  "
                f"{_error_number(summary['rms']):>10}  {_number(summary['at_time']):>14}  relative"
            )
    return lines


def _growth_line(result: CheckResult) -> str | None:
    growth = result.growth
    if growth is None or growth.kind in ("none", "irregular"):
        return None
    if growth.kind == "exponential":
        return f"  {'growth':<10}exponential, rate {growth.exponent:.3g} per unit of time"
    if growth.kind == "bounded":
        return f"  {'growth':<10}bounded: the error does not grow"
    return f"  {'growth':<10}like t^{growth.exponent:.2f} ({growth.kind})"


def _floor_line(result: CheckResult, units: dict[str, str]) -> list[str]:
    floor = result.floor
    if floor is None:
        return []
    text = f"{_upwards(floor.position)} {units['length']} ({floor.source})"
    lines = [f"  {'floor':<10}{text}"]
    if floor.predictable_until is not None:
        lines += textwrap.wrap(
            f"from time {_number(floor.predictable_until)} on the first row's digits no longer "
            "determine the orbit; nothing after that is judged (give the exact start with "
            "--orbit, or find it with --fit)",
            WIDTH,
            initial_indent=" " * 12,
            subsequent_indent=" " * 12,
        )
    return lines


def _rows(count: int) -> str:
    return "1 row" if count == 1 else f"{count} rows"


def _start_lines(result: CheckResult) -> list[str]:
    orbit = result.orbit
    assert orbit is not None
    samples = f"{_rows(result.samples)}, start from {_STARTS[result.start_from]}"
    lines = [f"  {'samples':<10}{samples}"]
    if result.start_from == "fit":
        for name, vector in (("position", orbit.position), ("velocity", orbit.velocity_used)):
            lines.append(f"  {'':<10}{name} {', '.join(f'{x:.14g}' for x in vector)}")
        lines.append(f"  {'':<10}at time {orbit.start_time!r}; judged is what remains")
    if result.reference != "exact":
        lines.append(f"  {'expected':<10}{_printable(result.reference)}")
    return lines


def _rule_lines(result: CheckResult) -> list[str]:
    if not result.judgements:
        return []
    rule = f"rule: {RULE}; w is the reference's bound b, the share q of the digits, and rounding"
    lines = textwrap.wrap(rule, WIDTH, initial_indent="  ", subsequent_indent="        ")
    for j in result.judgements:
        lines.append(f"  {j.quantity}: {j.outcome.upper()} at row {j.row + 1}, time {j.time:.9g}")
        lines.append(
            f"      T = {j.tolerance:.3g}  d = {j.deviation:.3g}  w = {_upwards(j.guard)}"
            f"  b = {_upwards(j.bound)}  q = {_upwards(j.quantisation)}"
        )
        if j.adequacy is not None and j.adequacy < ADEQUATE:
            lines.append(
                f"      the reference is only {j.adequacy:.2g} times finer than T: T/b should "
                f"be {ADEQUATE} or more"
            )
        if j.outcome == "fail":
            lines.append(f"      {_rows(j.failing_rows)} out of budget for certain")
        elif j.outcome == "undecided":
            unjudged = f", {j.unjudged_rows} of them not judged" if j.unjudged_rows else ""
            lines.append(f"      {_rows(j.undecided_rows)} undecided{unjudged}")
    return lines


def render(result: CheckResult) -> str:
    """The page for one trajectory, plain text of at most 80 columns where names allow."""
    word, _ = VERDICTS[result.verdict]
    file, name = _printable(result.file), _printable(result.name)
    lines = [f"{word}  {file}" + (f" [{name}]" if result.spec else "")]
    if result.reason:
        text = _printable(result.reason.removeprefix(f"{result.file}: "))
        lines += textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="  ")
    if result.orbit is None or result.spec is None:
        return "\n".join(lines)
    units = units_of(result.spec.system)
    lines += _orbit_lines(result, units)
    if result.comparison is not None:
        lines += _start_lines(result)
        lines += _error_lines(result, units)
        growth = _growth_line(result)
        lines += [growth] if growth else []
        lines += _floor_line(result, units)
        lines += findings_lines(result)
        lines += _rule_lines(result)
    return "\n".join(lines)


def explain_residual(result: CheckResult) -> str:
    """The residual in plain words: which component rules it, how it grows, when it starts."""
    comparison = result.comparison
    if comparison is None:
        return "  residual  there is none to describe"
    sizes = {
        "radial": float(abs(comparison.radial).max()),
        "along": float(abs(comparison.along).max()),
        "cross": float(abs(comparison.cross).max()),
    }
    guard = comparison.position_guard.total
    above = comparison.distance > guard
    if not above.any():
        return "  residual  within what digits and reference leave open: nothing to explain"
    leading = max(sizes, key=lambda k: sizes[k])
    unit = units_of(result.spec.system)["time"] if result.spec else ""
    first = float(comparison.time[int(above.argmax())])
    share = sum(v**2 for v in sizes.values())
    text = (
        f"mostly {leading} ({100 * sizes[leading] ** 2 / share:.0f} % of its square), above the "
        f"guard from time {first:.6g} {unit} on"
    )
    return "\n".join(
        textwrap.wrap(text, WIDTH, initial_indent="  residual  ", subsequent_indent=" " * 12)
    )
