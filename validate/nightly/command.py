"""The command ``truefall nightly``.  Heavy modules are imported where they are needed."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from truefall.validate.errors import UsageError
from truefall.validate.terminal import say, wants_colour

if TYPE_CHECKING:
    from truefall.validate.nightly.record import Night

__all__ = ["nightly"]


@click.command()
@click.argument("suite", required=False, metavar="SUITE.toml")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout.")
@click.option("--out", metavar="DIR", help="Where the nights are kept (SUITE-nights beside it).")
@click.option("--cluster", metavar="ADDRESS", help="Run the cases on a Dask cluster.")
@click.option("--jobs", type=click.IntRange(min=1), metavar="N", help="Cases at a time.")
@click.option("--rebuild", is_flag=True, help="Make figures and pages again from the nights.")
@click.option("--accept", multiple=True, metavar="CASE", help="Last night's figures are right.")
@click.option(
    "--init",
    is_flag=False,
    flag_value=".",
    metavar="[DIR]",
    help="Write a commented suite and adaptors in Python, C and Fortran.",
)
@click.option(
    "--undecided", type=click.Choice(("error", "skip", "pass")), default="error",
    help="What a case counts as that cannot be settled.",
)  # fmt: skip
def nightly(
    suite: str | None,
    *,
    as_json: bool,
    out: str | None,
    cluster: str | None,
    jobs: int | None,
    rebuild: bool,
    accept: tuple[str, ...],
    init: str | None,
    undecided: str,
) -> int:
    """Run propagators over cases, record, judge, compare with the past, report."""
    if sys.platform == "win32":
        raise UsageError("nightly needs a POSIX system: it forks, kills and limits programs")
    if init is not None:
        if suite is not None or rebuild or accept:
            raise UsageError("--init writes a new suite: give it a folder and nothing else")
        from truefall.validate.nightly.init import write_skeleton

        for path in write_skeleton(Path(init)):
            say(f"wrote {path}", err=True)
        return 0
    if suite is None:
        raise UsageError("nightly needs a suite file; --init writes one to start from")
    from truefall.validate.nightly.suite import read_suite

    checked = read_suite(suite)
    folder = Path(out) if out else checked.folder / f"{checked.path.stem}-nights"
    if folder.exists() and not folder.is_dir():
        raise UsageError(f"--out {folder} is a file; name a folder")
    if rebuild and accept:
        raise UsageError("--rebuild and --accept are two things; do one after the other")
    from truefall.validate.nightly import run

    if rebuild:
        say(f"{run.rebuild(folder)} nights taken in again from {folder / 'nights'}", err=as_json)
        return 0
    if accept:
        for key in run.accept_cases(folder, accept):
            say(f"accepted {key}", err=as_json)
        return 0
    from truefall.validate.nightly.farm import usable_cpus

    with _progress() as progress:
        night = run.run_night(
            checked, folder, jobs=jobs or usable_cpus(), cluster=cluster, undecided=undecided,
            progress=progress,
        )  # fmt: skip
    _tell(night, folder, as_json)
    return night.exit_status


def _tell(night: Night, folder: Path, as_json: bool) -> None:
    """One line on stdout, what was noticed and where things are on stderr."""
    from truefall.validate.nightly.pages import summary_line
    from truefall.validate.nightly.run import report_folder

    report = report_folder(folder, night.number)
    say(summary_line(night), err=as_json)
    for alarm in night.alarms:
        if alarm.level != "note":
            say(f"{alarm.name}: {alarm.text}", err=True)
    say(f"wrote {report / 'index.html'}", err=True)
    say(f"wrote {folder / night.result_set}", err=True)
    if as_json:
        document = json.loads((report / "report.json").read_text("utf-8"))
        say(json.dumps(document, indent=1, allow_nan=False))


@contextmanager
def _progress() -> Iterator[Callable[[int, int], None] | None]:
    """A count on a terminal, nothing elsewhere."""
    import os

    if not sys.stderr.isatty() or os.environ.get("TERM") == "dumb":
        yield None
        return
    from rich.console import Console

    console = Console(stderr=True, no_color=not wants_colour(sys.stderr), highlight=False)
    with console.status("starting workers", spinner="dots") as status:
        yield lambda done, total: status.update(f"{done} of {total} cases")
