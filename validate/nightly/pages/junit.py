"""JUnit XML: one test case for each case, with the elements that all consumers know.

There is no official schema; what is used here (testsuites, testsuite, testcase with one of
failure, error, skipped, and system-out) is what CI servers read in common.  Names are stable
and free of figures, so that a server's history holds together; figures stand in the texts.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET
from typing import TYPE_CHECKING

from truefall.validate.nightly.pages.words import number, share

if TYPE_CHECKING:
    from truefall.validate.nightly.record import Alarm, CaseRecord, Night

__all__ = ["junit_xml"]

#: Longest text inside an element: servers choke on very long ones.
_LONGEST = 4000


def _legal(text: str) -> str:
    """Characters that XML 1.0 does not allow, written as ``#x1B``."""
    return "".join(c if _allowed(ord(c)) else f"#x{ord(c):02X}" for c in text)


def _allowed(code: int) -> bool:
    return (
        code in (0x9, 0xA, 0xD)
        or 0x20 <= code <= 0xD7FF
        or 0xE000 <= code <= 0xFFFD
        or 0x10000 <= code <= 0x10FFFF
    )


def _message(case: CaseRecord, alarms: list[Alarm]) -> str:
    parts = [a.text for a in alarms]
    if case.reason:
        parts.append(case.reason)
    for quantity, error in case.errors.items():
        if quantity in case.budget:
            parts.append(
                f"{quantity}: largest error {number(error.get('max'))}, budget "
                f"{number(case.budget[quantity])}"
            )
    if case.margin is not None:
        parts.append(f"{share(case.margin)} of the budget left")
    return "; ".join(parts) or case.outcome


def _outcome(night: Night, case: CaseRecord, alarms: list[Alarm]) -> tuple[str, str] | None:
    """Element and type that tell how a case ended; None for a pass."""
    if case.verdict == "fail":
        return "failure", "nonconforming"
    if case.verdict == "undecided" and night.undecided != "pass":
        return ("skipped" if night.undecided == "skip" else "error"), "undecided"
    if case.verdict == "not-run":
        return "error", case.outcome.replace(" ", "-")
    if case.verdict == "unusable":
        return "error", "unusable"
    if alarms:
        return "failure", alarms[0].name
    return ("skipped", "not-judged") if case.verdict == "not-judged" else None


def _details(case: CaseRecord) -> str:
    lines = [f"verdict: {case.verdict}", f"outcome: {case.outcome}"]
    lines += [f"cause: {f.get('text', f.get('cause', ''))}" for f in case.findings]
    if case.description:
        lines.append(f"residual: {case.description}")
    if case.stderr_tail:
        lines += ["stderr:", case.stderr_tail]
    return _legal("\n".join(lines))[:_LONGEST]


def junit_xml(night: Night) -> str:
    """The document; undecided as error, skipped or passed as the night was asked for."""
    suites: dict[str, list[ET.Element]] = {}
    for case in night.cases:
        mine = [a for a in night.alarms if a.key == case.key and a.level != "note"]
        element = ET.Element(
            "testcase", classname=_legal(f"{night.suite}.{case.propagator}"),
            name=_legal(case.case), time=f"{case.seconds:.3f}",
        )  # fmt: skip
        ended = _outcome(night, case, mine)
        if ended is not None:
            tag, kind = ended
            message = _legal(_message(case, mine))[:_LONGEST]
            child = ET.SubElement(element, tag, message=message)
            if tag != "skipped":
                child.set("type", kind)
                child.text = _details(case)
        elif case.findings or case.stderr_tail:
            ET.SubElement(element, "system-out").text = _details(case)
        suites.setdefault(case.propagator, []).append(element)
    there = {case.key for case in night.cases}
    for key in (k for k in night.missing if k not in there):
        propagator, _, name = key.partition("/")
        element = ET.Element(
            "testcase", classname=_legal(f"{night.suite}.{propagator}"), name=_legal(name),
            time="0.000",
        )  # fmt: skip
        ET.SubElement(element, "error", type="case-vanished", message="the case is gone")
        suites.setdefault(propagator, []).append(element)
    root = ET.Element("testsuites")
    for propagator, elements in suites.items():
        suite = ET.SubElement(
            root, "testsuite", name=_legal(f"{night.suite}.{propagator}"),
            timestamp=night.started.rstrip("Z").split("+")[0],
            time=f"{sum(float(e.get('time', '0')) for e in elements):.3f}",
            tests=str(len(elements)),
        )  # fmt: skip
        for tag, total in (("failure", "failures"), ("error", "errors"), ("skipped", "skipped")):
            suite.set(total, str(sum(e.find(tag) is not None for e in elements)))
        suite.extend(elements)
    ET.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ET.tostring(root, encoding="unicode") + "\n"
