"""CSV: leading lines ``# key = value`` (TOML values), a header line, rows."""

from __future__ import annotations

import csv
import io
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import arrays_of, check_columns, make_trajectory
from truefall.validate.formats.metadata import dump_toml
from truefall.validate.formats.text_digits import NUMBER, file_quanta
from truefall.validate.trajectory import Trajectory

__all__ = ["leading_lines", "read", "read_times", "write_rows"]

_LIMIT = 1 << 31
_MOST_LINES = 1000
_LONGEST_LINE = 1 << 16
_KEY_LINE = re.compile(r"#\s*([A-Za-z_][\w-]*(?:\.[\w-]+)*)\s*=", re.ASCII)
_FORTRAN = re.compile(r"[+-]?[0-9]*\.?[0-9]*[dDqQ][+-]?[0-9]+")
_DECIMAL_COMMA = re.compile(r"[+-]?[0-9]+,[0-9]+(?:[eE][+-]?[0-9]+)?")

Floats = npt.NDArray[np.float64]


def _read_text(path: Path) -> str:
    try:
        if path.stat().st_size > _LIMIT:
            raise InputError("is larger than 2 GB; use HDF5 for trajectories of that size", path)
        data = path.read_bytes()
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    if not data.strip():
        raise InputError("is empty; expected a header line and rows", path)
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        raise InputError("is not UTF-8 text; is it a CSV file?", path) from None


def _metadata(lines: list[tuple[int, str]], path: Path) -> dict[str, Any]:
    """The assignments among the leading comment lines, as one TOML document."""
    assignments = [line.lstrip("#").strip() for _, line in lines]
    try:
        return tomllib.loads("\n".join(assignments))
    except (tomllib.TOMLDecodeError, RecursionError):
        pass  # find the line at fault
    for (number, _), assignment in zip(lines, assignments, strict=True):
        try:
            tomllib.loads(assignment)
        except (tomllib.TOMLDecodeError, RecursionError) as error:
            raise InputError(
                f"line {number} is no TOML assignment ({error}); write for example "
                '# chart = "areal"',
                path,
            ) from None
    keys = [assignment.split("=")[0].strip() for assignment in assignments]
    number, again = next(
        ((n, k) for j, ((n, _), k) in enumerate(zip(lines, keys, strict=True)) if k in keys[:j]),
        (lines[-1][0], keys[-1]),
    )
    raise InputError(f"line {number} gives {again} a second time", path)


def leading_lines(path: Path) -> tuple[dict[str, Any], list[str], int] | None:
    """Metadata, column names, and the byte at which the rows begin; None for an unusual start.

    Raises
    ------
    InputError
        For metadata that are not TOML.
    """
    assignments: list[tuple[int, str]] = []
    place = 0
    with path.open("rb") as file:
        for number, raw in enumerate(file, start=1):
            if number > _MOST_LINES or len(raw) > _LONGEST_LINE or not raw.endswith(b"\n"):
                return None
            place += len(raw)
            try:
                line = raw.decode("utf-8-sig" if number == 1 else "utf-8").strip("\r\n")
            except UnicodeDecodeError:
                return None
            if line.startswith("#"):
                if _KEY_LINE.match(line):
                    assignments.append((number, line))
            elif line.strip():
                if '"' in line:
                    return None
                names = [name.strip() for name in line.split(",")]
                return _metadata(assignments, path) if assignments else {}, names, place
    return None


def _split(path: Path) -> tuple[dict[str, Any], list[str], list[list[str]], int]:
    """Metadata, header, rows of texts, and the line number of the first row."""
    text = _read_text(path).replace("\r\n", "\n").replace("\r", "\n")
    lines = text.split("\n")
    assignments: list[tuple[int, str]] = []
    start = 0
    for start, line in enumerate(lines):
        if line.startswith("#"):
            if _KEY_LINE.match(line):
                assignments.append((start + 1, line))
        elif line.strip():
            break
    else:
        raise InputError("has no header line; expected time,x,y,z,...", path)
    if len(assignments) > 1000:
        raise InputError("has more than 1000 lines of metadata", path)
    metadata = _metadata(assignments, path)
    csv.field_size_limit(1 << 20)
    try:
        rows = list(csv.reader(io.StringIO("\n".join(lines[start:])), strict=True))
    except csv.Error as error:
        raise InputError(f"is not CSV: {error}", path) from None
    header = [name.strip() for name in rows[0]]
    return metadata, header, rows[1:], start + 2


def _explain(text: str, column: str, line: int, path: Path) -> InputError:
    """The sentence for an entry that is no number."""
    where = f"line {line}, column {column!r}"
    shown = repr(text if len(text) <= 60 else text[:57] + "...")
    if not text:
        return InputError(f"{where}: is empty, expected a number", path)
    if text.lower().lstrip("+-") in ("nan", "inf", "infinity"):
        return InputError(f"{where}: {shown} is not finite; every entry must be a number", path)
    if _FORTRAN.fullmatch(text):
        return InputError(f"{where}: {shown} has a Fortran exponent; write E instead of D", path)
    if _DECIMAL_COMMA.fullmatch(text):
        return InputError(f"{where}: {shown} has a decimal comma; write a point", path)
    return InputError(f"{where}: {shown} is text where a number belongs", path)


def _rows(
    header: list[str], rows: list[list[str]], first: int, path: Path
) -> tuple[list[list[str]], list[int]]:
    """The rows that are not blank, and their line numbers."""
    kept: list[list[str]] = []
    lines: list[int] = []
    for k, row in enumerate(rows):
        if len(row) == len(header):
            kept.append(row)
            lines.append(first + k)
        elif len(row) > 1 or (row and row[0].strip()):
            hint = ""
            if len(row) == 2 * len(header):
                hint = "; if these are decimal commas, write points"
            raise InputError(
                f"line {first + k} has {len(row)} entries, the header has {len(header)}{hint}",
                path,
            )
    if not kept:
        raise InputError("has a header but no rows", path)
    return kept, lines


def _columns(
    header: list[str], rows: list[list[str]], first: int, path: Path
) -> tuple[dict[str, list[str]], dict[str, Floats]]:
    kept, lines = _rows(header, rows, first, path)
    texts: dict[str, list[str]] = {}
    values: dict[str, Floats] = {}
    for k, name in enumerate(header):
        column = [row[k].strip() for row in kept]
        if not all(map(NUMBER.fullmatch, column)):
            j = next(j for j, text in enumerate(column) if not NUMBER.fullmatch(text))
            raise _explain(column[j], name, lines[j], path)
        texts[name] = column
        values[name] = np.array(list(map(float, column)))
        if not np.isfinite(values[name]).all():
            j = int(np.argmin(np.isfinite(values[name])))
            raise InputError(
                f"line {lines[j]}, column {name!r}: {column[j]!r} is too large for float64", path
            )
    return texts, values


def read(path: str | Path) -> tuple[dict[str, Any], Trajectory]:
    """Metadata and trajectory of a CSV file.

    Raises
    ------
    InputError
        One sentence naming line and column.
    """
    path = Path(path)
    metadata, header, rows, first = _split(path)
    check_columns(header, path)
    texts, values = _columns(header, rows, first, path)
    quanta = file_quanta(texts, values)
    name = str(metadata.get("name", path.stem))
    return metadata, make_trajectory(path, name, arrays_of(values), arrays_of(quanta), metadata)


def read_times(path: str | Path) -> list[float]:
    """The column ``time`` of a CSV file of sample times; other columns are ignored."""
    path = Path(path)
    _, header, rows, first = _split(path)
    if "time" not in header:
        raise InputError(f"has no column 'time'; its columns are {', '.join(header)}", path)
    kept, lines = _rows(header, rows, first, path)
    k = header.index("time")
    times: list[float] = []
    for row, line in zip(kept, lines, strict=True):
        text = row[k].strip()
        if not NUMBER.fullmatch(text):
            raise _explain(text, "time", line, path)
        times.append(float(text))
    return times


def write_rows(metadata: Mapping[str, Any], columns: Mapping[str, Floats]) -> bytes:
    """The bytes of a CSV file: metadata, header, rows in the shortest form that round-trips."""
    out = [f"# {line}" for line in dump_toml(metadata)]
    out.append(",".join(columns))
    table = [column.tolist() for column in columns.values()]
    out += [",".join(map(repr, row)) for row in zip(*table, strict=True)]
    return ("\n".join(out) + "\n").encode()
