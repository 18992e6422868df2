"""The command ``truefall``.  Heavy modules are imported by the commands that need them."""

from __future__ import annotations

import json
import os
import signal
import sys
import threading
from typing import TYPE_CHECKING, Any, NoReturn

import click

from truefall.validate.bench.command import bench
from truefall.validate.cli_files import convert, make
from truefall.validate.cli_parts import (
    Commands,
    declarations,
    overrides_of,
    partner_of,
    show_versions,
    with_causes,
)
from truefall.validate.errors import InputError, UsageError
from truefall.validate.nightly.command import nightly
from truefall.validate.selftest.command import selftest
from truefall.validate.terminal import prepare_streams, say, silence, working

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["cli", "main"]

FAULT, INTERRUPTED = 70, 130


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=show_versions,
    help="Print the versions that matter and exit.",
)  # fmt: skip
def cli() -> None:
    """Judge orbits and light rays near a mass against the exact Schwarzschild solution.

    \b
    Exit status: 0 within budget, 1 out of budget, 2 wrong command line, 3 undecided,
    4 an input cannot be used, 5 nothing was judged, 70 a fault of truefall, 130 interrupted.
    """


@cli.command()
@click.argument("files", nargs=-1, required=True, metavar="FILE...")
@click.option("--orbit", "orbit_file", metavar="F.toml", help="Orbit file: start and metadata.")
@click.option("--budget", multiple=True, metavar="KEY=VALUE", help="Tolerance, e.g. position=1e-6.")
@click.option("--against", metavar="REF.h5", help="Expected values from a stored result set.")
@click.option("--report", metavar="DIR", help="Write report.txt, report.json and pictures there.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout.")
@click.option("--fit", is_flag=True, help="Find the start that fits the file best.")
@click.option("--explain", is_flag=True, help="Look for causes of a residual within budget too.")
@declarations
def check(
    files: tuple[str, ...],
    orbit_file: str | None,
    budget: tuple[str, ...],
    against: str | None,
    report: str | None,
    as_json: bool,
    fit: bool,
    explain: bool,
    **options: Any,
) -> int:
    """Judge trajectory files (CSV, HDF5, NPZ, Parquet, OEM)."""
    from truefall.validate.budget import parse_budget_options

    table = parse_budget_options(budget)
    if "" in files:
        raise UsageError("an empty file name; is a variable of the shell unset?")
    if report is not None and os.path.exists(report) and not os.path.isdir(report):
        raise InputError("is a file; name a folder for the report", report)
    if orbit_file is not None:
        from truefall.validate.orbit_file import parse_orbit, read_mapping

        parse_orbit(
            {**read_mapping(orbit_file), **overrides_of(options)}, orbit_file, need_start=False
        )
    from truefall.validate.check import exit_status

    given = {"orbit_file": orbit_file, "overrides": overrides_of(options), "budget": table,
             "against": against, "fit": fit}  # fmt: skip
    results: list[CheckResult] = []
    faulty = False
    for number, path in enumerate(files, 1):
        count = f" ({number} of {len(files)})" if len(files) > 1 else ""
        with working(f"checking {path}{count}"):
            found, fault = _check_one(path, given)
        faulty = faulty or fault
        if len(files) != 2:
            found = [with_causes(result, always=explain) for result in found]
            for result in found:
                _show(result, explain=explain, err=as_json)
        results += found
    if len(files) == 2:  # two runs of one orbit tell more together: the order of a step
        both = results
        results = [with_causes(r, always=explain, other=partner_of(r, both)) for r in both]
        for result in results:
            _show(result, explain=explain, err=as_json)
    if report is not None:
        from truefall.validate.report import write_report

        with working("writing the report"):
            paths = write_report(results, report)
        for written in paths:
            say(f"wrote {written}", err=True)
    if as_json:
        from truefall.validate.report.document import document

        say(json.dumps(document(results), indent=1, allow_nan=False))
    return FAULT if faulty else exit_status(results)


def _check_one(path: str, given: dict[str, Any]) -> tuple[list[CheckResult], bool]:
    """The results for one file, and whether truefall itself failed at it.

    A fault at one file must not keep the others from being judged.
    """
    from pathlib import Path

    from truefall.validate.check import CheckResult, check_file

    try:
        return check_file(path, **given), False
    except (UsageError, InputError):
        raise
    except Exception as error:
        return [CheckResult(path, Path(path).stem, "unusable", _fault(error))], True


def _show(result: CheckResult, *, explain: bool, err: bool) -> None:
    from truefall.validate.report.text import VERDICTS, explain_residual, render

    text = render(result)
    if explain:
        text += "\n" + explain_residual(result)
        said = result.explanation
        if said is not None and said.description and not said.unexplained:
            text += "\n" + f"  causes    {said.description}"
    say(text, err=err, colour=VERDICTS[result.verdict][1])


@cli.command()
@click.option("--show", metavar="NAME", help="One case: its story and its orbit file.")
@click.option("--json", "as_json", is_flag=True, help="The list as JSON on stdout.")
def cases(show: str | None, as_json: bool) -> int:
    """List the catalogue of reference orbits."""
    from truefall.validate.cases import case, load_cases, show_case

    catalogue = load_cases() if show is None else (case(show),)
    if as_json:
        rows = [
            {"name": c.name, "class": c.orbit_class, "title": c.title, "level": c.level,
             "why": c.why, "scenario": c.scenario, "samples": len(c.spec.times or ()),
             "orbit_file": c.orbit_file}
            for c in catalogue
        ]  # fmt: skip
        say(json.dumps(rows, indent=1))
        return 0
    if show is not None:
        say(show_case(catalogue[0]))
        return 0
    wide = max(len(c.name) for c in catalogue)
    for c in catalogue:
        say(f"{c.name:<{wide}}  {c.orbit_class:<17}  {c.title}")
    say(f"\n{len(catalogue)} cases; truefall cases --show NAME tells the story of one")
    return 0


@cli.command()
@click.argument("directory", default="truefall-demo", metavar="[DIR]")
def demo(directory: str) -> int:
    """The main job end to end on invented data; leaves a folder to look at."""
    from truefall.validate.demo import run_demo

    run_demo(directory)
    return 0


@cli.command()
@click.argument("path", metavar="F.h5")
@click.option(
    "--verify",
    type=click.IntRange(min=0),
    default=0,
    metavar="N",
    help="Recompute N random samples and hold them against the stored bounds.",
)
@click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout.")
def inspect(path: str, verify: int, as_json: bool) -> int:
    """Look at a result set: conformance, content, digest, bounds."""
    from truefall.validate.inspection import inspect_set

    found = inspect_set(path, verify=verify)
    say(found.text(), err=as_json)
    if as_json:
        say(json.dumps(found.as_json(), indent=1))
    return 0 if found.conforms else 1


cli.add_command(nightly)
cli.add_command(make)
cli.add_command(convert)
cli.add_command(bench)
cli.add_command(selftest)


def _fault(error: BaseException) -> str:
    """One sentence for a fault of truefall; with TRUEFALL_DEBUG also the traceback, at once."""
    if os.environ.get("TRUEFALL_DEBUG"):
        import traceback

        say("".join(traceback.format_exception(error)), err=True)
    return (
        f"a fault of truefall itself: {type(error).__name__}: {error}; please report it to the "
        "project with the input and the output of truefall --version (TRUEFALL_DEBUG=1 shows "
        "the traceback)"
    )


def _terminated(_number: int, _frame: object) -> NoReturn:
    """Leave by an exception, so that unfinished files are removed on the way."""
    raise SystemExit(128 + signal.SIGTERM)


def main(args: list[str] | None = None) -> None:
    """Run the command line and exit with the documented status."""
    prepare_streams()
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, _terminated)
    try:
        status = cli.main(args=args, prog_name="truefall", standalone_mode=False)
    except click.exceptions.Exit as error:
        status = error.exit_code
    except click.ClickException as error:
        if isinstance(error, getattr(click.exceptions, "NoArgsIsHelpError", ())):
            error.show()  # newer versions of click call the lone command an error
        else:
            say(f"truefall: {error.format_message()}; see {_help_of(error)}", err=True)
        status = 2
    except (UsageError, InputError) as error:
        say(f"truefall: {error}", err=True)
        status = error.status
    except (KeyboardInterrupt, click.Abort):
        say("truefall: interrupted", err=True)
        status = INTERRUPTED
    except BrokenPipeError:
        silence(sys.stdout)
        status = 0
    except Exception as error:
        say(f"truefall: {_fault(error)}", err=True)
        status = FAULT
    try:
        sys.stdout.flush()
    except BrokenPipeError:
        silence(sys.stdout)
    sys.exit(status if isinstance(status, int) else 0)


def _help_of(error: click.ClickException) -> str:
    context = getattr(error, "ctx", None)
    return f"{context.command_path if context else 'truefall'} --help"
