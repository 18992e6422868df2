"""CCSDS Orbit Ephemeris Message, KVN form (CCSDS 502.0-B-3), under private agreement.

The standard has no value for a bare mass or for a chart, so an OEM carries a trajectory here
only together with a sidecar or options that say gm, chart, clock and particle; nothing is
inferred from its labels, and its comments are for people.  The agreement:

- kilometres and kilometres per second: the "astronomical" system.  A trajectory in SI is
  divided by 1000 on writing, rounded once, and comes back as "astronomical".
- ``time`` is the number of seconds since 2000-01-01T00:00:00 of the message's own time scale,
  every day of 86400 s; written with all decimals of the shortest form and never less than 15,
  so that stamps come back exactly and a reader sees that they were not cut.
- The standard allows 16 digits, which do not hold every float64: numbers are written with 16,
  correctly rounded, and a reader counts half a unit of the last as quantisation.
"""

from __future__ import annotations

import datetime
import re
from collections.abc import Mapping
from decimal import Decimal, localcontext
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import arrays_of, make_trajectory
from truefall.validate.formats.text_digits import NUMBER, file_quanta
from truefall.validate.trajectory import Trajectory

__all__ = ["read", "text"]

_LIMIT = 1 << 30
_LINE = 254
_STAMP_DECIMALS = 15
_ZERO = datetime.datetime(2000, 1, 1)
_DAY = 86400
_EPOCH = re.compile(
    r"(\d{4})-(?:(\d{2})-(\d{2})|(\d{3}))T(\d{2}):(\d{2}):(\d{2})(?:\.(\d+))?Z?", re.ASCII
)
_COLUMNS = ("time", "x", "y", "z", "vx", "vy", "vz")
_MANDATORY = (
    "OBJECT_NAME", "OBJECT_ID", "CENTER_NAME", "REF_FRAME", "TIME_SYSTEM", "START_TIME",
    "STOP_TIME",
)  # fmt: skip
_AGREED = "PRIVATE AGREEMENT"

Floats = npt.NDArray[np.float64]


def _seconds(stamp: str, line: int, path: Path) -> str:
    """Seconds since 2000 as decimal text, with the decimals of the epoch."""
    match = _EPOCH.fullmatch(stamp)
    if match is None:
        raise InputError(
            f"line {line}: {stamp!r} is no epoch; expected YYYY-MM-DDThh:mm:ss.d or "
            "YYYY-DDDThh:mm:ss.d",
            path,
        )
    hour, minute, second = int(match[5]), int(match[6]), int(match[7])
    try:
        if match[4]:
            day = datetime.datetime.strptime(f"{match[1]} {match[4]}", "%Y %j")
            if day.year != int(match[1]):
                raise ValueError("that year has 365 days")
        else:
            day = datetime.datetime(int(match[1]), int(match[2]), int(match[3]))
        datetime.time(hour, minute, second)
    except ValueError as error:
        raise InputError(f"line {line}: {stamp!r} is no date ({error})", path) from None
    whole = (day - _ZERO).days * _DAY + hour * 3600 + minute * 60 + second
    fraction = match[8] or ""
    if whole >= 0 or not int(fraction or 0):
        return f"{whole}.{fraction}" if fraction else str(whole)
    scaled = whole * 10 ** len(fraction) + int(fraction)  # before 2000: fractions count upwards
    return str(Decimal(scaled).scaleb(-len(fraction)))


def _lines(path: Path) -> list[str]:
    try:
        if path.stat().st_size > _LIMIT:
            raise InputError("is larger than 1 GB; use HDF5 for trajectories of that size", path)
        data = path.read_bytes().decode("ascii")
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    except UnicodeDecodeError:
        raise InputError("is not ASCII text, as an OEM must be", path) from None
    return re.split(r"\r\n|\n\r|\n|\r", data)


def _data_start(lines: list[str], path: Path) -> int:
    """Index of the first line after the one metadata block, whose keywords are checked."""
    stripped = [line.strip() for line in lines]
    first = next((line for line in stripped if line), "")
    if not first.startswith("CCSDS_OEM_VERS"):
        raise InputError("does not begin with CCSDS_OEM_VERS; is it an OEM in KVN form?", path)
    if stripped.count("META_START") != 1 or stripped.count("META_STOP") != 1:
        raise InputError("must hold exactly one segment (META_START ... META_STOP)", path)
    begin, end = stripped.index("META_START"), stripped.index("META_STOP")
    keys = [line.split("=")[0].strip() for line in stripped[begin + 1 : end] if "=" in line]
    keys = [key for key in keys if not key.startswith("COMMENT")]
    missing = [key for key in _MANDATORY if key not in keys]
    if missing:
        raise InputError(f"its metadata block lacks {', '.join(missing)}", path)
    for key in keys:
        if keys.count(key) > 1:
            raise InputError(f"its metadata block has {key} twice", path)
    return end + 1


def _row(line: str, number: int, path: Path) -> list[str]:
    parts = line.split()
    if len(parts) not in (7, 10):
        raise InputError(
            f"line {number} has {len(parts)} entries; expected an epoch and 6 numbers "
            "(or 9, with accelerations)",
            path,
        )
    for entry in parts[1:]:
        if not NUMBER.fullmatch(entry):
            raise InputError(f"line {number}: {entry[:60]!r} is no number", path)
    return [_seconds(parts[0], number, path), *parts[1:7]]


def read(path: str | Path) -> tuple[dict[str, Any], Trajectory]:
    """Metadata (only the unit system) and trajectory of an OEM with one segment.

    Raises
    ------
    InputError
        Naming the line at fault.
    """
    path = Path(path)
    lines = _lines(path)
    rows = []
    for number, line in enumerate(lines[(start := _data_start(lines, path)) :], start + 1):
        if line.strip() == "COVARIANCE_START":
            break
        if line.strip() and not line.startswith("COMMENT"):
            rows.append(_row(line, number, path))
    if not rows:
        raise InputError("holds no ephemeris lines", path)
    texts = {name: [row[k] for row in rows] for k, name in enumerate(_COLUMNS)}
    values = {name: np.array(list(map(float, column))) for name, column in texts.items()}
    quanta = file_quanta(texts, values, fixed=frozenset({"time"}))  # epochs have decimals only
    metadata = {"system": "astronomical"}
    return metadata, make_trajectory(
        path, path.stem, arrays_of(values), arrays_of(quanta), metadata
    )


def _stamp(time: float, path: Path) -> str:
    exact = Decimal(repr(time))
    with localcontext() as context:
        context.prec = 400
        whole = int(exact // 1) - (exact < 0 and exact % 1 != 0)
        fraction = exact - whole
    try:
        moment = _ZERO + datetime.timedelta(seconds=whole)
    except OverflowError:
        raise InputError(
            f"time {time!r} s lies outside the years 1 to 9999 of an OEM", path
        ) from None
    decimals = f"{fraction:f}".partition(".")[2].rstrip("0").ljust(_STAMP_DECIMALS, "0")
    stamp = f"{moment.isoformat(timespec='seconds')}.{decimals}"
    if len(stamp) > _LINE // 2:
        raise InputError(
            f"time {time!r} s has more decimals than a line of an OEM holds; use .h5 or .csv", path
        )
    return stamp


def _number(value: float, scale: int) -> str:
    with localcontext() as context:
        context.prec = 800  # every float64 and its thousandth are exact decimals
        return f"{Decimal(value) / scale:.15e}"


def _object_name(metadata: Mapping[str, Any]) -> str:
    name = re.sub(r"[^A-Z0-9 -]", " ", str(metadata.get("name", "")).upper())
    return " ".join(name.split())[:80] or "UNKNOWN"


def text(path: Path, metadata: Mapping[str, Any], position: Floats, velocity: Floats | None,
         time: Floats, created: str) -> bytes:  # fmt: skip
    """The bytes of an OEM; positions (n, 3) and velocities (n, 3) in the metadata's system.

    Raises
    ------
    InputError
        For geometric units, or a trajectory without velocities.
    """
    if metadata["system"] == "geometric":
        raise InputError("an OEM is in kilometres; a trajectory in geometric units has none", path)
    if velocity is None:
        raise InputError("an OEM needs velocities, and this trajectory has none", path)
    scale = 1 if metadata["system"] == "astronomical" else 1000
    stamps = [_stamp(t, path) for t in time.tolist()]
    order = range(len(stamps)) if time[-1] >= time[0] else range(len(stamps) - 1, -1, -1)
    out = [
        "CCSDS_OEM_VERS = 3.0",
        f"COMMENT chart {metadata['chart']}, clock {metadata['clock']}, particle "
        f"{metadata['particle']}, gm {metadata['gm']!r} ({metadata['system']})",
        "COMMENT epochs are seconds since 2000-01-01T00:00:00, every day of 86400 s",
        f"CREATION_DATE = {created.removesuffix('Z')}",
        "ORIGINATOR = TRUEFALL",
        "META_START",
        f"OBJECT_NAME = {_object_name(metadata)}",
        "OBJECT_ID = UNKNOWN",
        f"CENTER_NAME = {_AGREED}",
        f"REF_FRAME = {_AGREED}",
        f"TIME_SYSTEM = {_AGREED}",
        f"START_TIME = {stamps[order[0]]}",
        f"STOP_TIME = {stamps[order[-1]]}",
        "META_STOP",
    ]
    for k in order:
        numbers = [*position[k].tolist(), *velocity[k].tolist()]
        out.append(" ".join([stamps[k], *(_number(v, scale) for v in numbers)]))
    return ("\n".join(out) + "\n").encode("ascii")
