"""The command ``truefall selftest``."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterable, Sequence
from typing import TYPE_CHECKING, Any

import click

from truefall.validate.terminal import say, working

if TYPE_CHECKING:
    from truefall.validate.selftest.measures import Measure

__all__ = ["document", "selftest", "text"]

_HEADINGS = {
    "reference": "certified states against stored independent ones",
    "table": "tables against certified states",
    "files": "written and read again",
    "judge": "verdicts on a right and a wrong file",
    "kernels": "compiled code against its own source",
}


def _run(quick: bool, tell: Callable[[str], None]) -> list[Measure]:
    from truefall.validate.selftest import measures

    parts: list[tuple[str, Callable[[], Iterable[Measure]]]] = [
        ("the reference", measures.reference), ("tables", measures.table),
        ("files", measures.files), ("the judge", measures.judge),
    ]  # fmt: skip
    found: list[Measure] = []
    for name, part in parts:
        tell(f"measuring {name}")
        found += part()
    if not quick:
        if not sys.stderr.isatty():
            say("compiled code is compared with its source; the first time it is compiled, "
                "which takes minutes", err=True)  # fmt: skip
        found += measures.kernels(lambda name: tell(f"compiled code: {name}"))
    return found


def text(found: Sequence[Measure], quick: bool) -> str:
    """A table for people: a line a group, then whatever is out or worth knowing."""
    bad = [m for m in found if not m.good]
    lines = [f"{'FAULTY' if bad else 'SOUND'}  {len(found) - len(bad)} of {len(found)} "
             "measurements as they should be"]  # fmt: skip
    for group, heading in _HEADINGS.items():
        mine = [m for m in found if m.group == group and m.unit != "note"]
        if not mine:
            continue
        good = sum(m.good for m in mine)
        figure = "all equal" if all(m.value == 0.0 for m in mine) else (
            f"largest {max(m.value for m in mine):.2g} {mine[0].unit}, "
            f"at most {max(m.limit for m in mine):.2g}"
        )  # fmt: skip
        if group == "judge":
            figure = "as due" if good == len(mine) else "not as due"
        elif group == "kernels":
            equal = sum(m.good and m.value == 0.0 for m in mine)
            figure = f"{equal} to the bit, {good - equal} within what is allowed"
        lines.append(f"  {group:<10} {good:>4} of {len(mine):<4} {figure:<44} {heading}")
    if quick:
        lines.append("  kernels       left out (--quick)")
    lines += [f"  OUT   {m.group}: {m.name}: {m.value:.3g} {m.unit} (at most {m.limit:.3g})"
              f"{'; ' + m.text if m.text else ''}" for m in bad]  # fmt: skip
    lines += [f"  note  {m.name}: {m.text}" for m in found if m.unit == "note" and m.text]
    return "\n".join(lines)


def _number(value: float) -> float | None:
    return value if abs(value) < float("inf") else None


def document(found: Sequence[Measure]) -> dict[str, Any]:
    """The measurements as JSON; a value that is not finite is null."""
    return {
        "verdict": "pass" if all(m.good for m in found) else "fail",
        "measurements": [
            {"group": m.group, "name": m.name, "good": m.good, "value": _number(m.value),
             "limit": m.limit, "unit": m.unit, "text": m.text}
            for m in found
        ],
    }  # fmt: skip


@click.command()
@click.option("--quick", is_flag=True, help="Leave out the compiled code: seconds.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout.")
def selftest(quick: bool, as_json: bool) -> int:
    """Measure the instrument itself: reference, tables, files, judge, compiled code.

    Exit status: 0 all as it should be, 1 something is out, 70 a fault of truefall.
    """
    with working("measuring the instrument") as tell:
        found = _run(quick, tell)
    bad = any(not m.good for m in found)
    say(text(found, quick), err=as_json, colour="red" if bad else "green")
    if as_json:
        say(json.dumps(document(found), indent=1, allow_nan=False))
    return 1 if bad else 0
