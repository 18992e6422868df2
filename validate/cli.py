"""The command ``truefall``.  Heavy modules are imported by the commands that need them."""

from __future__ import annotations

import json
import os
import sys
from typing import Any

import click

from truefall.validate.errors import InputError, UsageError

__all__ = ["cli", "main"]

_SYSTEMS = ("geometric", "SI", "astronomical")
_CHARTS = (
    "areal", "isotropic", "harmonic", "kerr-schild", "painleve-gullstrand",
    "eddington-finkelstein",
)  # fmt: skip
FAULT, INTERRUPTED = 70, 130


class _Commands(click.Group):
    """A group that names the nearest command when it does not know one."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        name = args[0]
        if self.get_command(ctx, name) is None and not name.startswith("-"):
            import difflib

            near = difflib.get_close_matches(name, self.list_commands(ctx), n=1)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            known = ", ".join(self.list_commands(ctx))
            raise click.UsageError(f"no command {name!r}{hint} (commands: {known})")
        return super().resolve_command(ctx, args)


def _versions(ctx: click.Context, _param: click.Parameter, value: bool) -> None:
    if not value or ctx.resilient_parsing:
        return
    import platform
    from importlib.metadata import PackageNotFoundError, version

    click.echo(f"truefall {version('truefall')}")
    click.echo(f"python {platform.python_version()} on {platform.system()} {platform.machine()}")
    for name in ("numpy", "scipy", "numba", "h5py", "python-flint", "matplotlib", "pyarrow"):
        try:
            click.echo(f"{name} {version(name)}")
        except PackageNotFoundError:
            click.echo(f"{name} not installed")
    ctx.exit()


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_versions,
    help="Print the versions that matter and exit.",
)  # fmt: skip
def cli() -> None:
    """Judge orbits and light rays near a mass against the exact Schwarzschild solution.

    \b
    Exit status: 0 within budget, 1 out of budget, 2 wrong command line, 3 undecided,
    4 an input cannot be used, 5 nothing was judged, 70 a fault of truefall, 130 interrupted.
    """


def _colour(stream: Any) -> bool:
    if os.environ.get("NO_COLOR"):
        return False
    if os.environ.get("FORCE_COLOR"):
        return True
    return bool(stream.isatty()) and os.environ.get("TERM") != "dumb"


def _say(text: str, *, err: bool = False, colour: str | None = None) -> None:
    stream = sys.stderr if err else sys.stdout
    if colour and _colour(stream):
        head, newline, rest = text.partition("\n")
        word, gap, tail = head.partition("  ")
        text = click.style(word, fg=colour, bold=True) + gap + tail + newline + rest
    click.echo(text, err=err, color=_colour(stream))


def _overrides(options: dict[str, Any]) -> dict[str, Any]:
    found: dict[str, Any] = {
        k: options[k]
        for k in ("system", "gm", "particle", "chart", "clock")
        if options[k] is not None
    }
    if options.get("start_time") is not None:
        found["start"] = {"time": options["start_time"]}
    return found


def _declarations(command: Any) -> Any:
    """Options that say what a file does not say about itself."""
    for option in (
        click.option("--start-time", type=float, help="Reading of the clock at the start."),
        click.option(
            "--clock", type=click.Choice(("coordinate", "proper")), help="What time means."
        ),
        click.option("--chart", type=click.Choice(_CHARTS), help="Coordinates of the file."),
        click.option("--particle", type=click.Choice(("massive", "light")), help="What moves."),
        click.option("--gm", type=float, help="GM in the system's units."),
        click.option("--system", type=click.Choice(_SYSTEMS), help="Unit system of the file."),
    ):
        command = option(command)
    return command


@cli.command()
@click.argument("files", nargs=-1, required=True, metavar="FILE...")
@click.option("--orbit", "orbit_file", metavar="F.toml", help="Orbit file: start and metadata.")
@click.option("--budget", multiple=True, metavar="KEY=VALUE", help="Tolerance, e.g. position=1e-6.")
@click.option("--against", metavar="REF.h5", help="Expected values from a stored result set.")
@click.option("--report", metavar="DIR", help="Write report.txt, report.json and pictures there.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout.")
@click.option("--fit", is_flag=True, help="Find the start that fits the file best.")
@click.option("--explain", is_flag=True, help="Describe the residual in words.")
@_declarations
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
    if orbit_file is not None:
        from truefall.validate.orbit_file import parse_orbit, read_mapping

        parse_orbit(
            {**read_mapping(orbit_file), **_overrides(options)}, orbit_file, need_start=False
        )
    from truefall.validate.check import CheckResult, check_file, exit_status
    from truefall.validate.report.text import VERDICTS, explain_residual, render

    results: list[CheckResult] = []
    for path in files:
        found = check_file(
            path,
            orbit_file=orbit_file,
            overrides=_overrides(options),
            budget=table,
            against=against,
            fit=fit,
        )
        results += found
        for result in found:
            text = render(result)
            if explain:
                text += "\n" + explain_residual(result)
            _say(text, err=as_json, colour=VERDICTS[result.verdict][1])
    if report is not None:
        from truefall.validate.report import write_report

        for written in write_report(results, report):
            _say(f"wrote {written}", err=True)
    if as_json:
        from truefall.validate.report.document import document

        click.echo(json.dumps(document(results), indent=1, allow_nan=False))
    return exit_status(results)


@cli.command()
@click.argument("orbit_file", required=False, metavar="ORBIT.toml")
@click.option("--case", "case_name", metavar="NAME", help="A case of the catalogue instead.")
@click.option("--out", required=True, metavar="F", help="Where to write; format by suffix.")
@click.option("--truncate", is_flag=True, help="Stop at the orbit's end instead of refusing.")
@click.option("--certified", is_flag=True, help="HDF5: second words beside the bounds.")
@click.option("--reproducible", is_flag=True, help="HDF5: byte-identical when repeated.")
def make(
    orbit_file: str | None,
    case_name: str | None,
    out: str,
    truncate: bool,
    certified: bool,
    reproducible: bool,
) -> int:
    """Write a reference trajectory at exactly the times of an orbit file."""
    if (orbit_file is None) == (case_name is None):
        raise UsageError("make needs an orbit file, or --case NAME, and not both")
    from truefall.validate.formats import suffix_of
    from truefall.validate.make import make as make_file
    from truefall.validate.orbit_file import read_orbit_file

    suffix_of(out)
    if case_name is not None:
        from truefall.validate.cases import case

        spec = case(case_name).spec
    else:
        spec = read_orbit_file(str(orbit_file), need_samples=True)
    made = make_file(spec, out, truncate=truncate, certified=certified, reproducible=reproducible)
    note = f"; {made.end_note}" if made.end_note else ""
    _say(f"wrote {made.path}: {made.rows} rows, {made.orbit_class} orbit{note}", err=True)
    return 0


@cli.command()
@click.argument("source", metavar="IN")
@click.argument("target", metavar="OUT")
@click.option("--orbit", "orbit_file", metavar="F.toml", help="Orbit file with the metadata.")
@click.option("--reproducible", is_flag=True, help="HDF5: byte-identical when repeated.")
@_declarations
def convert(
    source: str, target: str, orbit_file: str | None, reproducible: bool, **options: Any
) -> int:
    """Convert a trajectory between CSV, HDF5, NPZ, Parquet and OEM."""
    from truefall.validate.formats import read_trajectories, suffix_of, write_trajectory

    suffix_of(target)
    found = read_trajectories(source, overrides=_overrides(options), orbit_file=orbit_file)
    if len(found) != 1:
        names = ", ".join(t.name for t in found)
        raise InputError(f"holds {len(found)} trajectories ({names}); convert takes one", source)
    write_trajectory(target, found[0], reproducible=reproducible)
    _say(f"wrote {target}: {len(found[0])} rows", err=True)
    return 0


@cli.command()
@click.option("--show", metavar="NAME", help="One case: its story and its orbit file.")
@click.option("--json", "as_json", is_flag=True, help="The list as JSON on stdout.")
def cases(show: str | None, as_json: bool) -> int:
    """List the catalogue of reference orbits."""
    from truefall.validate.cases import case, load_cases, show_case

    if show is not None:
        _say(show_case(case(show)))
        return 0
    catalogue = load_cases()
    if as_json:
        rows = [
            {"name": c.name, "class": c.orbit_class, "title": c.title, "level": c.level,
             "why": c.why, "samples": len(c.spec.times or ())}
            for c in catalogue
        ]  # fmt: skip
        click.echo(json.dumps(rows, indent=1))
        return 0
    wide = max(len(c.name) for c in catalogue)
    for c in catalogue:
        _say(f"{c.name:<{wide}}  {c.orbit_class:<17}  {c.title}")
    _say(f"\n{len(catalogue)} cases; truefall cases --show NAME tells the story of one")
    return 0


@cli.command()
@click.argument("directory", default="truefall-demo", metavar="[DIR]")
def demo(directory: str) -> int:
    """The main job end to end on invented data; leaves a folder to look at."""
    from truefall.validate.demo import run_demo

    run_demo(directory, lambda text: _say(text))
    return 0


def main(args: list[str] | None = None) -> None:
    """Run the command line and exit with the documented status."""
    try:
        status = cli.main(args=args, prog_name="truefall", standalone_mode=False)
        sys.stdout.flush()
    except click.exceptions.Exit as error:
        status = error.exit_code
    except click.ClickException as error:
        error.show()
        status = 2
    except (UsageError, InputError) as error:
        click.echo(f"truefall: {error}", err=True)
        status = error.status
    except (KeyboardInterrupt, click.Abort):
        click.echo("truefall: interrupted", err=True)
        status = INTERRUPTED
    except BrokenPipeError:
        # the reader of a pipe left: nothing more can be said there
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        status = 141
    except Exception as error:
        if os.environ.get("TRUEFALL_DEBUG"):
            raise
        click.echo(
            f"truefall: a fault of truefall itself: {type(error).__name__}: {error}; please report "
            "it with the input (TRUEFALL_DEBUG=1 shows the traceback)",
            err=True,
        )
        status = FAULT
    sys.exit(status if isinstance(status, int) else 0)
