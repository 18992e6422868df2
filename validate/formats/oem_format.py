"""CCSDS Orbit Ephemeris Message, KVN form (CCSDS 502.0-B-3), under private agreement.

The standard has no value for a bare mass or for a chart, so an OEM carries a trajectory here
only together with a sidecar or options that say gm, chart, clock and particle; nothing is
inferred from its labels.  Agreement: kilometres and kilometres per second (the "astronomical"
system); ``time`` is the number of seconds since 2000-01-01T00:00:00 of the message's own time
scale, every day of 86400 s.  The standard allows 16 digits, which lose the last bit of some
float64 numbers: the reader counts them as quantisation.
"""

from __future__ import annotations

import datetime
import re
from collections.abc import Mapping
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import make_trajectory
from truefall.validate.formats.text_digits import NUMBER
from truefall.validate.trajectory import Quantisation, Trajectory

__all__ = ["read", "text"]

_ZERO = datetime.datetime(2000, 1, 1)
_EPOCH = re.compile(
    r"(\d{4})-(?:(\d{2})-(\d{2})|(\d{3}))T(\d{2}):(\d{2}):(\d{2})(?:\.(\d+))?Z?", re.ASCII
)
_STAMP_DIGITS = 12
Floats = npt.NDArray[np.float64]


def _seconds(stamp: str, line: int, path: Path) -> tuple[Fraction, int]:
    match = _EPOCH.fullmatch(stamp)
    if match is None:
        raise InputError(
            f"line {line}: {stamp!r} is no epoch; expected YYYY-MM-DDThh:mm:ss.d or "
            "YYYY-DDDThh:mm:ss.d",
            path,
        )
    try:
        day = (
            datetime.datetime(int(match[1]), 1, 1) + datetime.timedelta(int(match[4]) - 1)
            if match[4]
            else datetime.datetime(int(match[1]), int(match[2]), int(match[3]))
        )
    except ValueError as error:
        raise InputError(f"line {line}: {stamp!r} is no date: {error}", path) from None
    whole = (day - _ZERO).days * 86400 + int(match[5]) * 3600 + int(match[6]) * 60 + int(match[7])
    fraction = match[8] or ""
    return whole + Fraction(int(fraction or 0), 10 ** len(fraction)), len(fraction)


def read(path: str | Path) -> tuple[dict[str, Any], Trajectory]:
    """Metadata (only the unit system) and trajectory of an OEM with one segment."""
    path = Path(path)
    try:
        lines = path.read_bytes().decode("ascii").splitlines()
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    except UnicodeDecodeError:
        raise InputError("is not ASCII text, as an OEM must be", path) from None
    if not any(line.startswith("CCSDS_OEM_VERS") for line in lines[:3]):
        raise InputError("does not begin with CCSDS_OEM_VERS; is it an OEM in KVN form?", path)
    if sum(line.strip() == "META_START" for line in lines) != 1:
        raise InputError("must hold exactly one segment (META_START ... META_STOP)", path)
    try:
        start = [line.strip() for line in lines].index("META_STOP") + 1
    except ValueError:
        raise InputError("has no META_STOP", path) from None
    rows, times, decimals, digits = [], [], 0, 0
    for k, line in enumerate(lines[start:], start + 1):
        if not line.strip() or line.startswith("COMMENT"):
            continue
        if line.strip() == "COVARIANCE_START":
            break
        parts = line.split()
        if len(parts) not in (7, 10):
            raise InputError(
                f"line {k} has {len(parts)} entries, expected epoch and 6 numbers", path
            )
        for text_ in parts[1:7]:
            if not NUMBER.fullmatch(text_):
                raise InputError(f"line {k}: {text_!r} is no number", path)
            mantissa = text_.lower().split("e")[0]
            digits = max(digits, len(re.sub(r"\D", "", mantissa).lstrip("0")))
        seconds, places = _seconds(parts[0], k, path)
        decimals = max(decimals, places)
        times.append(seconds)
        rows.append([float(v) for v in parts[1:7]])
    if not rows:
        raise InputError("holds no ephemeris lines", path)
    table = np.array(rows)
    exact = all(Fraction(float(t)) == t for t in times)
    with np.errstate(divide="ignore"):
        power = np.floor(np.log10(np.abs(table)))
    power[table == 0.0] = -300.0
    quanta = 0.5 * 10.0 ** (power - (max(digits, 1) - 1))
    arrays = {
        "time": np.array([float(t) for t in times]),
        "position": table[:, :3],
        "velocity": table[:, 3:],
    }
    quantisation = Quantisation(
        time=0.0 if exact else 0.5 * 10.0**-decimals,
        position=quanta[:, :3],
        velocity=quanta[:, 3:],
    )
    metadata = {"system": "astronomical"}
    return metadata, make_trajectory(path, path.stem, arrays, metadata, quantisation)


def _stamp(time: float, path: Path) -> str:
    exact = Fraction(time)
    units = round(exact * 10**_STAMP_DIGITS)
    whole, rest = divmod(units, 10**_STAMP_DIGITS)
    try:
        moment = _ZERO + datetime.timedelta(seconds=whole)
    except OverflowError:
        raise InputError(
            f"time {time!r} s lies outside the years 1 to 9999 of an OEM", path
        ) from None
    fraction = f"{rest:0{_STAMP_DIGITS}d}".rstrip("0") or "0"
    return f"{moment:%Y-%m-%dT%H:%M:%S}.{fraction}"


def text(path: Path, metadata: Mapping[str, Any], position: Floats, velocity: Floats | None,
         time: Floats, created: str) -> bytes:  # fmt: skip
    """The bytes of an OEM; positions and velocities in the metadata's system.

    Raises
    ------
    InputError
        For geometric units, or a trajectory without velocities.
    """
    if metadata["system"] == "geometric":
        raise InputError("an OEM is in kilometres; a trajectory in geometric units has none", path)
    if velocity is None:
        raise InputError("an OEM needs velocities, and this trajectory has none", path)
    scale = Decimal(1) if metadata["system"] == "astronomical" else Decimal(1000)
    stamps = [_stamp(t, path) for t in time.tolist()]
    ends = (stamps[0], stamps[-1]) if time[-1] >= time[0] else (stamps[-1], stamps[0])
    out = [
        "CCSDS_OEM_VERS = 3.0",
        f"COMMENT chart {metadata['chart']}, clock {metadata['clock']}, gm {metadata['gm']!r} "
        f"({metadata['system']})",
        f"CREATION_DATE = {created.removesuffix('Z')}",
        "ORIGINATOR = TRUEFALL",
        "META_START",
        "OBJECT_NAME = " + re.sub(r"[^A-Z0-9 -]", " ", str(metadata.get("name", "ORBIT")).upper()),
        "OBJECT_ID = UNKNOWN",
        "CENTER_NAME = PRIVATE AGREEMENT",
        "REF_FRAME = PRIVATE AGREEMENT",
        "TIME_SYSTEM = TDB",
        f"START_TIME = {ends[0]}",
        f"STOP_TIME = {ends[1]}",
        "META_STOP",
    ]
    order = range(len(stamps)) if time[-1] >= time[0] else range(len(stamps) - 1, -1, -1)
    for k in order:
        numbers = [*position[k].tolist(), *velocity[k].tolist()]
        out.append(" ".join([stamps[k], *(f"{Decimal(v) / scale:.15e}" for v in numbers)]))
    return ("\n".join(out) + "\n").encode("ascii")
