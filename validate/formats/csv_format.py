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
from truefall.validate.formats.assemble import check_columns, make_trajectory
from truefall.validate.formats.text_digits import NUMBER, column_quantisation, file_is_shortest
from truefall.validate.orbit_file import merge
from truefall.validate.trajectory import VECTORS, Quantisation, Trajectory

__all__ = ["dump_toml", "read", "read_times", "write_rows"]

_LIMIT = 1 << 31
_KEY_LINE = re.compile(r"#\s*[A-Za-z_][\w.-]*\s*=", re.ASCII)

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


def _metadata_line(line: str, number: int, path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(line.lstrip("#").strip())
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            f'line {number} is no TOML assignment ({error}); write for example # chart = "areal"',
            path,
        ) from None


def _split(path: Path) -> tuple[dict[str, Any], list[str], list[list[str]], int]:
    """Metadata, header, rows of texts, and the line number of the first row."""
    lines = _read_text(path).splitlines()
    metadata: dict[str, Any] = {}
    start = 0
    for start, line in enumerate(lines):
        if line.startswith("#"):
            if _KEY_LINE.match(line):
                metadata = merge(_metadata_line(line, start + 1, path), metadata)
        elif line.strip():
            break
    else:
        raise InputError("has no header line; expected time,x,y,z,...", path)
    csv.field_size_limit(1 << 20)
    try:
        rows = list(csv.reader(io.StringIO("\n".join(lines[start:])), strict=True))
    except csv.Error as error:
        raise InputError(f"is not CSV: {error}", path) from None
    header = [name.strip() for name in rows[0]]
    return metadata, header, rows[1:], start + 2


def _explain(text: str, column: str, line: int, path: Path) -> InputError:
    """The sentence for an entry that is no number."""
    plain = text.strip()
    place = f"line {line}, column {column!r}: {plain!r}"
    if not plain:
        return InputError(f"line {line}, column {column!r}: is empty, expected a number", path)
    if plain.lower().lstrip("+-") in ("nan", "inf", "infinity"):
        return InputError(f"{place} is not a finite number; every entry must be finite", path)
    if re.fullmatch(r"[+-]?\d*\.?\d*[dD][+-]?\d+", plain):
        return InputError(
            f"{place} has a Fortran exponent; write e in place of {plain[re.search('[dD]', plain).start()]!r}",  # type: ignore[union-attr]  # noqa: E501
            path,
        )
    if re.fullmatch(r"[+-]?\d+,\d+([eE][+-]?\d+)?", plain):
        return InputError(f"{place} has a decimal comma; write a point", path)
    return InputError(f"{place} is text where a number belongs", path)


def _columns(
    header: list[str], rows: list[list[str]], first: int, path: Path
) -> tuple[dict[str, list[str]], dict[str, Floats]]:
    kept: list[list[str]] = []
    lines: list[int] = []
    for k, row in enumerate(rows):
        if not row or (len(row) == 1 and not row[0].strip()):
            continue
        if len(row) != len(header):
            hint = ""
            if len(row) == 2 * len(header):
                hint = "; decimal commas? write points"
            raise InputError(
                f"line {first + k} has {len(row)} entries, the header has {len(header)}{hint}", path
            )
        kept.append(row)
        lines.append(first + k)
    if not kept:
        raise InputError("holds a header but no rows", path)
    texts: dict[str, list[str]] = {}
    values: dict[str, Floats] = {}
    for k, name in enumerate(header):
        column = [row[k].strip() for row in kept]
        for j, text in enumerate(column):
            match = NUMBER.fullmatch(text)
            if match is None or not (match[2] or match[3]):
                raise _explain(text, name, lines[j], path)
        texts[name] = column
        values[name] = np.array([float(t) for t in column])
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
    shortest = file_is_shortest(texts, values)
    quanta = {
        name: column_quantisation(
            texts[name], values[name], shortest_file=shortest, stamps=name == "time"
        )
        for name in header
    }
    arrays = {"time": values["time"]}
    for vector, names in VECTORS.items():
        if names[0] in values:
            arrays[vector] = np.column_stack([values[n] for n in names])
    for name in ("proper_time", "coordinate_time", "affine"):
        if name in values:
            arrays[name] = values[name]
    quantisation = Quantisation(
        time=float(quanta["time"].max()),
        position=np.column_stack([quanta[n] for n in VECTORS["position"]]),
        velocity=np.column_stack([quanta[n] for n in VECTORS["velocity"]])
        if "vx" in quanta
        else np.zeros(3),
        clock=max(
            (float(quanta[n].max()) for n in quanta if n in ("proper_time", "affine")), default=0.0
        ),
    )
    name = str(metadata.get("name", path.stem))
    return metadata, make_trajectory(path, name, arrays, metadata, quantisation)


def read_times(path: str | Path) -> list[float]:
    """The column ``time`` of a CSV file of sample times; other columns are ignored."""
    path = Path(path)
    _, header, rows, first = _split(path)
    if "time" not in header:
        raise InputError(f"has no column 'time'; its columns are {', '.join(header)}", path)
    k = header.index("time")
    if any(len(row) <= k for row in rows if row):
        raise InputError("has a row without an entry in column 'time'", path)
    _, values = _columns(["time"], [[row[k]] for row in rows if row], first, path)
    times: list[float] = values["time"].tolist()
    return times


def _toml_value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str):
        quoted = value.replace("\\", "\\\\").replace('"', '\\"')
        return '"' + "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in quoted) + '"'
    if isinstance(value, Mapping):
        inner = ", ".join(f"{k} = {_toml_value(v)}" for k, v in value.items())
        return "{ " + inner + " }"
    return "[" + ", ".join(_toml_value(v) for v in value) + "]"


def dump_toml(metadata: Mapping[str, Any]) -> list[str]:
    """Lines ``key = value``; tables become dotted keys."""
    lines = []
    for key, value in metadata.items():
        if isinstance(value, Mapping):
            lines += [f"{key}.{k} = {_toml_value(v)}" for k, v in value.items()]
        else:
            lines.append(f"{key} = {_toml_value(value)}")
    return lines


def write_rows(metadata: Mapping[str, Any], columns: Mapping[str, Floats]) -> bytes:
    """The bytes of a CSV file: metadata, header, rows in the shortest form that round-trips."""
    out = [f"# {line}" for line in dump_toml(metadata)]
    out.append(",".join(columns))
    table = [column.tolist() for column in columns.values()]
    out += [",".join(map(repr, row)) for row in zip(*table, strict=True)]
    return ("\n".join(out) + "\n").encode()
