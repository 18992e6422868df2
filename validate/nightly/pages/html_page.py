"""The night's page: one file, no network, readable without JavaScript."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

from truefall.validate.nightly.pages.pictures import error_picture, trend_picture
from truefall.validate.nightly.pages.words import (
    MARKS,
    alike,
    counted,
    deciding,
    headline,
    number,
    printable,
    seconds,
    severity,
    share,
)

if TYPE_CHECKING:
    from truefall.validate.nightly.record import Alarm, CaseRecord, Night, Trend

__all__ = ["night_page"]

_UNITS = {"1": "GM/c²", "m": "m", "km": "km"}
_TIMES = {"1": "GM/c³", "s": "s"}
_LONGEST_TAIL = 2000
_MOST_COMMITS = 20
#: Rows of the table and entries of the list of changes: a browser must open the page at once.
_MOST_CASES, _MOST_ALARMS, _MOST_NOTES = 500, 40, 100
_MOST_LINKS = 8


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
    lines = text[-_LONGEST_TAIL:].expandtabs().replace("\r\n", "\n").split("\n")
    return "\n".join(printable(line) for line in lines).strip("\n")


def _case(case: CaseRecord, trend: Trend | None, index: int) -> dict[str, Any]:
    """What the page shows of a case; pictures are markup already."""
    from markupsafe import Markup

    quantity = deciding(case)
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
        "by": "" if quantity == "position" else quantity.replace("_", " "),
        "told": _told(case),
        "floor": number(case.floor),
        "seconds": seconds(case.seconds),
        "picture": Markup(error_picture(case)),
        "trend": Markup(trend_picture(case, trend)),
        "errors": _errors(case),
        "findings": [
            {
                "text": _stopped(printable(str(f.get("text") or f.get("cause", "")))),
                "family": printable(str(f.get("family", ""))),
                "look_at": _stopped(printable(str(f.get("look_at", "")))),
                "explains": share(_float(f.get("explains"))),
            }
            for f in case.findings
        ],
        "description": _sentence(printable(case.description)),
        "stdout": _tail(case.stdout_tail),
        "stderr": _tail(case.stderr_tail),
        "result_set": printable(case.result_set),
        "link": _link(case.result_set),
        "digest": printable(case.digest[:16]),
    }


def _link(path: str) -> str:
    """A link to what lies in the output folder, from the night's own folder in it."""
    return "../" + quote(path, errors="replace") if path else ""


def _told(case: CaseRecord) -> str:
    """The quantity that decides, in words; the position where none does."""
    quantity = deciding(case) or "position"
    largest = case.errors.get(quantity, {}).get("max")
    if largest is None:
        return ""
    unit = _unit(case, quantity)
    size = f"{number(largest)}{'' if unit == 'relative' else ' ' + unit}"
    if quantity not in case.budget:
        return f"Largest {quantity.replace('_', ' ')} error {size}."
    allowed = number(case.budget[quantity])
    return f"Largest {quantity.replace('_', ' ')} error {size}, budget {allowed}."


def _group(group: list[CaseRecord], ids: Mapping[str, str]) -> dict[str, Any]:
    """Cases with one trouble: the worst in full, the others as links."""
    from markupsafe import Markup

    first, others = group[0], group[1:]
    return {
        **_case(first, None, 0),
        "id": ids[first.key],
        "picture": Markup(error_picture(first, large=True)),
        "others": [
            {"key": printable(c.key), "id": ids[c.key]} for c in others[:_MOST_LINKS]
        ],
        "count": len(others),
        "more": max(0, len(others) - _MOST_LINKS),
    }  # fmt: skip


def _stopped(text: str) -> str:
    """A clause with its full stop."""
    text = text.strip()
    return text + ("" if not text or text[-1] in ".!?" else ".")


def _sentence(text: str) -> str:
    """A sentence with its capital letter and full stop."""
    text = _stopped(text)
    return text[:1].upper() + text[1:]


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
    shown = ordered[:_MOST_CASES]
    ids = {case.key: f"case-{k}" for k, case in enumerate(shown)}
    anchors = {case.key: ids.get(case.key, "cases") for case in ordered}
    groups, left_out = alike(night)
    alarms = [_alarm(a, anchors) for a in night.alarms]
    changes = [a for a in alarms if a["level"] != "note"]
    notes = [a for a in alarms if a["level"] == "note"]
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
        new=sum(a["level"] == "alarm" for a in changes),
        standing=sum(a["level"] == "standing" for a in changes),
        alarms=changes[:_MOST_ALARMS],
        more_alarms=max(0, len(changes) - _MOST_ALARMS),
        notes=notes[:_MOST_NOTES],
        note_count=len(notes),
        missing=[printable(k) for k in night.missing[:_MOST_ALARMS]],
        more_missing=max(0, len(night.missing) - _MOST_ALARMS),
        worst=[_group(group, anchors) for group in groups],
        left_out=left_out,
        cases=[_case(case, trends.get(case.key), k) for k, case in enumerate(shown)],
        more_cases=len(ordered) - len(shown),
        commit=printable(night.commit or ""),
        commits=[printable(c) for c in night.commits[:_MOST_COMMITS]],
        more_commits=max(0, len(night.commits) - _MOST_COMMITS),
        environment=[(printable(k), printable(str(v))) for k, v in night.environment.items()],
        fingerprint=night.fingerprint[:16],
        result_set=printable(night.result_set),
        link=_link(night.result_set),
        seconds=seconds(night.seconds),
    )
    return page
