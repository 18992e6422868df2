"""The night's page: one file, no network, readable without JavaScript."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from truefall.validate.nightly.pages.pictures import error_picture, trend_picture
from truefall.validate.nightly.pages.words import (
    MARKS,
    counted,
    headline,
    number,
    printable,
    seconds,
    severity,
    share,
    worst_cases,
)

if TYPE_CHECKING:
    from truefall.validate.nightly.record import Alarm, CaseRecord, Night, Trend

__all__ = ["night_page"]

_UNITS = {"1": "GM/c²", "m": "m", "km": "km"}
_TIMES = {"1": "GM/c³", "s": "s"}
_LONGEST_TAIL = 2000
_MOST_COMMITS = 20


@lru_cache(maxsize=1)
def _template() -> Any:
    from jinja2 import Environment, StrictUndefined

    environment = Environment(autoescape=True, undefined=StrictUndefined, trim_blocks=True,
                              lstrip_blocks=True)  # fmt: skip
    source = files("truefall.validate.nightly.pages").joinpath("night.html").read_text("utf-8")
    return environment.from_string(source)


def _speed(case: CaseRecord) -> str:
    return "c" if case.unit_length == "1" else f"{case.unit_length}/{case.unit_time}"


def _unit(case: CaseRecord, quantity: str) -> str:
    """The unit of an error of this quantity, "" for relative drifts."""
    units = {
        "position": _UNITS.get(case.unit_length, case.unit_length),
        "velocity": _speed(case),
        "clock": _TIMES.get(case.unit_time, case.unit_time),
    }
    return units.get(quantity, "relative")


def _errors(case: CaseRecord) -> list[dict[str, str]]:
    found = []
    for quantity, error in case.errors.items():
        at = error.get("at_time")
        found.append(
            {
                "quantity": quantity.replace("_", " "),
                "max": number(error.get("max")),
                "rms": number(error.get("rms")),
                "at": "–" if at is None else f"{at:.6g}",
                "budget": number(case.budget.get(quantity)),
                "unit": _unit(case, quantity),
            }
        )
    return found


def _tail(text: str) -> str:
    """The last of what a program printed; line ends stay, other control characters show."""
    lines = text[-_LONGEST_TAIL:].split("\n")
    return "\n".join(printable(line) for line in lines).strip("\n")


def _case(case: CaseRecord, trend: Trend | None, index: int) -> dict[str, Any]:
    """What the page shows of a case; pictures are markup already."""
    from markupsafe import Markup

    return {
        "id": f"case-{index}",
        "key": printable(case.key),
        "name": printable(case.case),
        "propagator": printable(case.propagator),
        "verdict": case.verdict,
        "mark": MARKS.get(case.verdict, "!"),
        "word": case.verdict.replace("-", " "),
        "outcome": case.outcome,
        "reason": _sentence(printable(case.reason)),
        "title": printable(case.title),
        "why": printable(case.why),
        "orbit_class": case.orbit_class,
        "error": number(case.position_error),
        "unit": _unit(case, "position"),
        "budget": number(case.budget.get("position")),
        "margin": share(case.margin),
        "floor": number(case.floor),
        "seconds": seconds(case.seconds),
        "picture": Markup(error_picture(case)),
        "trend": Markup(trend_picture(case, trend)),
        "errors": _errors(case),
        "findings": [
            {
                "text": printable(str(f.get("text") or f.get("cause", ""))),
                "family": printable(str(f.get("family", ""))),
                "look_at": printable(str(f.get("look_at", ""))),
                "explains": share(_float(f.get("explains"))),
            }
            for f in case.findings
        ],
        "description": printable(case.description),
        "stdout": _tail(case.stdout_tail),
        "stderr": _tail(case.stderr_tail),
        "result_set": case.result_set,
        "digest": case.digest[:16],
    }


def _sentence(text: str) -> str:
    """A sentence with its capital letter and full stop."""
    text = text.strip()
    if not text:
        return ""
    return text[0].upper() + text[1:] + ("" if text[-1] in ".!?" else ".")


def _float(value: Any) -> float | None:
    return float(value) if isinstance(value, int | float) else None


def _alarm(alarm: Alarm, ids: Mapping[str, str]) -> dict[str, Any]:
    return {
        "level": alarm.level,
        "name": alarm.name.replace("-", " "),
        "key": printable(alarm.key),
        "id": ids.get(alarm.key, ""),
        "text": _sentence(printable(alarm.text)),
        "commits": [printable(c) for c in alarm.commits[:_MOST_COMMITS]],
        "more": max(0, len(alarm.commits) - _MOST_COMMITS),
    }


def night_page(night: Night, trends: Mapping[str, Trend]) -> str:
    """The whole page as HTML."""
    ordered = sorted(night.cases, key=severity)
    ids = {case.key: f"case-{k}" for k, case in enumerate(ordered)}
    cases = [_case(case, trends.get(case.key), k) for k, case in enumerate(ordered)]
    worst = {case.key for case in worst_cases(night)}
    alarms = [_alarm(a, ids) for a in night.alarms]
    page: str = _template().render(
        number=night.number,
        suite=printable(night.suite),
        started=printable(night.started),
        headline=headline(night),
        fine=night.exit_status == 0,
        exit_status=night.exit_status,
        counts=[
            {"word": v.replace("-", " "), "verdict": v, "mark": MARKS.get(v, "!"), "count": n}
            for v, n in counted(night)
        ],
        previous=night.previous,
        segment=night.segment,
        alarms=[a for a in alarms if a["level"] != "note"],
        notes=[a for a in alarms if a["level"] == "note"],
        missing=[printable(k) for k in night.missing],
        worst=[c for c in cases if c["key"] in {printable(k) for k in worst}],
        cases=cases,
        commit=printable(night.commit or ""),
        commits=[printable(c) for c in night.commits[:_MOST_COMMITS]],
        more_commits=max(0, len(night.commits) - _MOST_COMMITS),
        environment=[(printable(k), printable(str(v))) for k, v in night.environment.items()],
        fingerprint=night.fingerprint[:16],
        result_set=night.result_set,
        seconds=seconds(night.seconds),
    )
    return page
