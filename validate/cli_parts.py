"""Parts of the command line: a group that knows near misses, numbers, versions, causes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from truefall.validate.terminal import say, working

if TYPE_CHECKING:
    from collections.abc import Callable

    from truefall.validate.check import CheckResult

__all__ = [
    "CHARTS",
    "SYSTEMS",
    "Commands",
    "declarations",
    "finite_number",
    "overrides_of",
    "partner_of",
    "show_versions",
    "with_causes",
]

#: Rows of a long file among which causes are sought.
_MOST_ROWS = 2000
SYSTEMS = ("geometric", "SI", "astronomical")
CHARTS = (
    "areal", "isotropic", "harmonic", "kerr-schild", "painleve-gullstrand",
    "eddington-finkelstein",
)  # fmt: skip

_LIBRARIES = (
    "numpy", "scipy", "numba", "h5py", "python-flint", "matplotlib", "click", "rich", "pyarrow",
)  # fmt: skip


class Commands(click.Group):
    """A group that names the nearest command when it does not know one."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """The command, or a usage error that names the nearest one."""
        name = args[0]
        if self.get_command(ctx, name) is None and not name.startswith("-"):
            import difflib

            near = difflib.get_close_matches(name, self.list_commands(ctx), n=1)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            known = ", ".join(self.list_commands(ctx))
            raise click.UsageError(f"no command {name!r}{hint} (commands: {known})")
        return super().resolve_command(ctx, args)


def finite_number(ctx: click.Context, param: click.Parameter, value: str | None) -> float | None:
    """Callback of an option that takes a number (for gm: a positive one)."""
    import math

    if value is None:
        return None
    try:
        result = float(value)
    except ValueError:
        result = math.nan
    positive = param.name == "gm"
    if not math.isfinite(result) or (positive and result <= 0):
        kind = "a positive finite number" if positive else "a finite number"
        raise click.BadParameter(f"{value!r} is not {kind}", ctx=ctx, param=param)
    return result


def show_versions(ctx: click.Context, _param: click.Parameter, value: bool) -> None:
    """Callback of ``--version``."""
    if not value or ctx.resilient_parsing:
        return
    import platform
    from importlib.metadata import PackageNotFoundError, version

    say(f"truefall {version('truefall')}")
    say(f"python {platform.python_version()} on {platform.system()} {platform.machine()}")
    for name in _LIBRARIES:
        try:
            inside = f" ({inner})" if (inner := _bundled(name)) else ""
            say(f"{name} {version(name)}{inside}")
        except PackageNotFoundError:
            say(f"{name} not installed")
    ctx.exit()


def _bundled(name: str) -> str:
    """The C library that a Python package brings along, as it names it itself."""
    try:
        if name == "h5py":
            import h5py

            return f"HDF5 {h5py.version.hdf5_version}"
        if name == "python-flint":
            import flint

            return f"FLINT {flint.__FLINT_VERSION__}"
    except (ImportError, AttributeError):
        return "its library cannot be loaded"
    return ""


def partner_of(result: CheckResult, results: list[CheckResult]) -> CheckResult | None:
    """The one other result of the same orbit, if there is exactly one with the same stamps."""
    if result.orbit is None or result.comparison is None:
        return None
    time = result.comparison.time
    same = [
        r for r in results
        if r is not result and r.orbit is not None and r.comparison is not None
        and (r.orbit.position, r.orbit.velocity) == (result.orbit.position, result.orbit.velocity)
        and r.comparison.time.shape == time.shape and bool((r.comparison.time == time).all())
    ]  # fmt: skip
    return same[0] if len(same) == 1 else None


def with_causes(
    result: CheckResult, *, always: bool, other: CheckResult | None = None
) -> CheckResult:
    """The result with the causes of its residual, unless it passes and nobody asked.

    ``other`` is a second run of the same orbit, from which the order of a method is told.
    """
    if result.comparison is None or (result.verdict == "pass" and not always):
        return result
    from dataclasses import replace

    from truefall.validate.causes import explain

    with working(f"{result.name}: looking for causes") as tell:
        found = explain(
            _thinned(result),
            progress=lambda f: tell(f"{result.name}: trying causes: {f}"),
            second_file=None if other is None else _thinned(other),
        )
    return replace(result, explanation=found)


def _thinned(result: CheckResult) -> CheckResult:
    """A long file's result with few enough of the rows kept for causes to be sought in seconds."""
    trajectory = result.trajectory
    if result.totals is None or trajectory is None or len(trajectory) <= _MOST_ROWS:
        return result
    from dataclasses import replace

    import numpy as np

    from truefall.validate.compare import picked

    total = len(trajectory)
    rows = np.unique(np.linspace(0, total - 1, _MOST_ROWS).astype(np.int64))
    return replace(
        result,
        trajectory=picked(trajectory, rows, total),
        expected=picked(result.expected, rows, total),
        comparison=picked(result.comparison, rows, total),
    )


def overrides_of(options: dict[str, Any]) -> dict[str, Any]:
    """Metadata that options give, as in an orbit file."""
    found: dict[str, Any] = {
        k: options[k]
        for k in ("system", "gm", "particle", "chart", "clock")
        if options[k] is not None
    }
    if options.get("start_time") is not None:
        found["start"] = {"time": options["start_time"]}
    return found


def declarations(command: Callable[..., int]) -> Callable[..., int]:
    """Options that say what a file does not say about itself."""
    for option in (
        click.option(
            "--start-time",
            metavar="NUMBER",
            callback=finite_number,
            help="Reading of the clock at the start.",
        ),
        click.option(
            "--clock", type=click.Choice(("coordinate", "proper")), help="What time means."
        ),
        click.option("--chart", type=click.Choice(CHARTS), help="Coordinates of the file."),
        click.option("--particle", type=click.Choice(("massive", "light")), help="What moves."),
        click.option(
            "--gm", metavar="NUMBER", callback=finite_number, help="GM in the system's units."
        ),
        click.option("--system", type=click.Choice(SYSTEMS), help="Unit system of the file."),
    ):
        command = option(command)
    return command
