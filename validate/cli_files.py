"""The commands that write files: make and convert."""

from __future__ import annotations

from typing import Any

import click

from truefall.validate.cli_parts import declarations, overrides_of
from truefall.validate.errors import InputError, UsageError
from truefall.validate.terminal import say, working

__all__ = ["convert", "make"]


def _writable(target: str) -> None:
    """Refuse an output that cannot be, before anything is computed."""
    from pathlib import Path

    from truefall.validate.formats import suffix_of

    try:
        if not target:
            raise UsageError("an empty name for the output; is a variable of the shell unset?")
        suffix_of(target)
    except InputError as error:
        raise UsageError(f"the output {error}") from None
    if Path(target).is_dir():
        raise InputError("is a folder; name a file to write", target)
    if not Path(target).absolute().parent.is_dir():
        raise InputError("cannot be written: there is no such folder; make it first", target)


@click.command()
@click.argument("orbit_file", required=False, metavar="ORBIT.toml")
@click.option("--case", "case_name", metavar="NAME", help="A case of the catalogue instead.")
@click.option("--all-cases", is_flag=True, help="Every case, NAME.h5 each, into the folder F.")
@click.option("--out", required=True, metavar="F", help="Where to write; format by suffix.")
@click.option("--truncate", is_flag=True, help="Stop at the orbit's end instead of refusing.")
@click.option("--certified", is_flag=True, help="HDF5: second words beside the bounds.")
@click.option("--reproducible", is_flag=True, help="HDF5: byte-identical when repeated.")
def make(
    orbit_file: str | None,
    case_name: str | None,
    all_cases: bool,
    out: str,
    **how: bool,
) -> int:
    """Write a reference trajectory at exactly the times of an orbit file."""
    if [orbit_file is not None, case_name is not None, all_cases].count(True) != 1:
        raise UsageError("make needs one of: an orbit file, --case NAME, --all-cases")
    if all_cases:
        return _make_all(out, how)
    _writable(out)
    if how["certified"] and not out.lower().endswith((".h5", ".hdf5")):
        raise UsageError(f"--certified needs HDF5 (.h5), the only format with bounds, not {out}")
    from truefall.validate.make import make as make_file
    from truefall.validate.orbit_file import read_orbit_file

    if case_name is not None:
        from truefall.validate.cases import case

        spec = case(case_name).spec
    else:
        spec = read_orbit_file(str(orbit_file), need_samples=True)
    with working(f"making {out}"):
        made = make_file(spec, out, **how)
    note = f"; {made.end_note}" if made.end_note else ""
    say(f"wrote {made.path}: {made.rows} rows, {made.orbit_class} orbit{note}", err=True)
    return 0


def _make_all(folder: str, how: dict[str, bool]) -> int:
    """Every case of the catalogue, NAME.h5 each."""
    from pathlib import Path

    from truefall.validate.cases import load_cases
    from truefall.validate.make import make as make_file

    if not folder:
        raise UsageError("an empty name for the output; is a variable of the shell unset?")
    place = Path(folder)
    if not place.absolute().parent.is_dir() or (place.exists() and not place.is_dir()):
        raise InputError("cannot be made: with --all-cases name a folder", place)
    place.mkdir(exist_ok=True)
    rows = 0
    cases = load_cases()
    for case in cases:
        with working(f"making {case.name}"):
            rows += make_file(case.spec, place / f"{case.name}.h5", **how).rows
    say(f"wrote {len(cases)} sets into {place}: {rows} rows", err=True)
    return 0


@click.command()
@click.argument("source", metavar="IN")
@click.argument("target", metavar="OUT")
@click.option("--orbit", "orbit_file", metavar="F.toml", help="Orbit file with the metadata.")
@click.option("--trajectory", metavar="NAME", help="Which one, if IN holds several.")
@click.option("--reproducible", is_flag=True, help="HDF5: byte-identical when repeated.")
@declarations
def convert(
    source: str,
    target: str,
    orbit_file: str | None,
    trajectory: str | None,
    reproducible: bool,
    **options: Any,
) -> int:
    """Convert a trajectory between CSV, HDF5, NPZ, Parquet and OEM."""
    _writable(target)
    from truefall.validate.formats import losses, read_trajectory, write_trajectory

    with working(f"converting {source}"):
        found = read_trajectory(
            source, trajectory=trajectory, overrides=overrides_of(options), orbit_file=orbit_file
        )
        write_trajectory(target, found, reproducible=reproducible)
    say(f"wrote {target}: {len(found)} rows", err=True)
    for sentence in losses(target, found):
        say(f"note: {sentence}", err=True)
    return 0
