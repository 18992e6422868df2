"""The terminal page of a check: the verdict, the errors, and the rule with its numbers."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING, Any

from truefall.validate.budget import RULE
from truefall.validate.report.document import error_summary

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["VERDICTS", "render", "units_of"]

WIDTH = 80
#: Verdict to the word shown and its colour (by name).
VERDICTS = {
    "pass": ("PASS", "green"),
    "fail": ("FAIL", "red"),
    "undecided": ("UNDECIDED", "yellow"),
    "not-judged": ("NOT JUDGED", "cyan"),
    "unusable": ("UNUSABLE", "red"),
}


def units_of(system: str) -> dict[str, str]:
    """Unit names of a system as shown to people."""
    if system == "geometric":
        return {"length": "GM/c^2", "speed": "c", "time": "GM/c^3", "momentum": "GM/c"}
    length = "m" if system == "SI" else "km"
    return {"length": length, "speed": f"{length}/s", "time": "s", "momentum": f"{length}^2/s"}


def _number(value: float | None) -> str:
    return "-" if value is None else f"{value:.6g}"


def _error_number(value: float) -> str:
    """Errors and uncertainties: two digits are all they deserve."""
    return "0" if value == 0 else f"{value:.1e}"


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
        summary = error_summary(values, comparison.time)
        if summary is None:
            continue
        lines.append(
            f"  {label:<14}{_error_number(summary['max']):>10}  "
            f"{_error_number(summary['rms']):>10}  {_number(summary['at_time']):>14}  {unit}"
        )
    for label, drift in (("energy", comparison.energy), ("ang. mom.", comparison.angular_momentum)):
        if drift is not None:
            summary = error_summary(drift.values, comparison.time)
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
    text = f"{_error_number(floor.position)} {units['length']} ({floor.source})"
    lines = [f"  {'floor':<10}{text}"]
    if floor.predictable_until is not None:
        lines.append(
            f"  {'':<10}the file's digits do not determine the orbit from time "
            f"{_number(floor.predictable_until)} on; nothing after it is judged"
        )
    return lines


def _rule_lines(result: CheckResult) -> list[str]:
    if not result.judgements:
        return []
    lines = textwrap.wrap(f"rule: {RULE}", WIDTH, initial_indent="  ", subsequent_indent="        ")
    for j in result.judgements:
        lines.append(f"  {j.quantity}: {j.outcome.upper()} at row {j.row + 1}, time {j.time:.9g}")
        lines.append(
            f"      T = {j.tolerance:.3g}   d = {j.deviation:.3g}   w = {_error_number(j.guard)}"
            f"   (reference bound {_error_number(j.bound)}, digits {_error_number(j.quantisation)})"
        )
        if j.bound > 0 and j.tolerance / j.bound < 4:
            lines.append(
                f"      the reference is only {j.tolerance / j.bound:.2g} times finer than T"
            )
        if j.outcome == "fail":
            lines.append(f"      {j.failing_rows} rows fail")
        elif j.outcome == "undecided":
            lines.append(f"      {j.undecided_rows} rows are undecided")
    return lines


def render(result: CheckResult) -> str:
    """The page for one trajectory, plain text of at most 80 columns where names allow."""
    word, _ = VERDICTS[result.verdict]
    lines = [f"{word}  {result.file}" + (f" [{result.name}]" if result.spec else "")]
    if result.reason:
        text = result.reason.removeprefix(f"{result.file}: ")
        lines += textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="  ")
    if result.orbit is None or result.spec is None:
        return "\n".join(lines)
    units = units_of(result.spec.system)
    lines += _orbit_lines(result, units)
    if result.comparison is not None:
        lines.append(
            f"  {'samples':<10}{len(result.comparison.time)}, start from {result.start_from}"
        )
        lines += _error_lines(result, units)
        growth = _growth_line(result)
        lines += [growth] if growth else []
        lines += _floor_line(result, units)
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
    guard = comparison.position_bound + comparison.position_quantum
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
