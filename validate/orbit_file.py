"""Orbit files: what is propagated, in which units, from which start, at which times."""

from __future__ import annotations

import difflib
import json
import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.reference import Orbit

__all__ = [
    "DECLARATIONS",
    "OrbitSpec",
    "check_times",
    "merge",
    "number",
    "parse_orbit",
    "read_mapping",
    "read_orbit_file",
    "refuse_unknown",
]

SYSTEMS = ("geometric", "SI", "astronomical")
PARTICLES = ("massive", "light")
CHARTS = (
    "areal", "isotropic", "harmonic", "kerr-schild", "painleve-gullstrand",
    "eddington-finkelstein",
)  # fmt: skip
CLOCKS = ("coordinate", "proper")
#: Keys that every trajectory must declare, with the values allowed.
DECLARATIONS: dict[str, Sequence[str] | None] = {
    "system": SYSTEMS, "gm": None, "particle": PARTICLES, "chart": CHARTS, "clock": CLOCKS,
}  # fmt: skip
#: Keys that files written by truefall carry besides; they inform and decide nothing.
INFORMATIVE = ("ends_at", "end_reason", "orbit_class", "producer")
_TOP = (*DECLARATIONS, "name", "start", "samples", "budget", "case", *INFORMATIVE)
_ELEMENTS = (
    "semilatus_rectum", "eccentricity", "inclination", "node", "periapsis", "anomaly",
)  # fmt: skip
_START = ("time", "position", "velocity", *_ELEMENTS)
_SAMPLES = ("times", "first", "last", "count", "from_file")


@dataclass(frozen=True)
class OrbitSpec:
    """A parsed orbit file.  ``times`` is None where none were asked for."""

    name: str
    system: str
    gm: float
    particle: str
    chart: str
    clock: str
    start_time: float
    position: tuple[float, ...] | None
    velocity: tuple[float, ...] | None
    elements: Mapping[str, float] | None
    times: tuple[float, ...] | None
    budget: Mapping[str, Any] = field(default_factory=dict)
    path: str = "orbit"

    def orbit(self) -> Orbit:
        """The exact orbit; raises InputError, naming file and key, if the start is none."""
        from truefall.reference import Orbit, StartError

        common: dict[str, Any] = {
            "system": self.system,
            "gm": self.gm,
            "particle": self.particle,
            "clock": self.clock,
            "start_time": self.start_time,
        }
        try:
            if self.elements is not None:
                return Orbit.from_elements(**{**common, **self.elements})
            if self.position is None or self.velocity is None:
                raise InputError("the start has no position and velocity", self.path)
            return Orbit(**common, chart=self.chart, position=self.position, velocity=self.velocity)
        except StartError as error:
            raise InputError(f"{error.key}: {error}", self.path) from None


def refuse_unknown(given: Mapping[str, Any], known: Sequence[str], what: str, where: str) -> None:
    """InputError for the first unknown key, with the nearest known one."""
    for key in given:
        if key not in known:
            near = difflib.get_close_matches(str(key), known, n=1)
            hint = f"; did you mean {near[0]!r}?" if near else f"; known are {', '.join(known)}"
            raise InputError(f"unknown key {key!r} in {what}{hint}", where)


def number(value: Any, key: str, where: str) -> float:
    """A finite float64 from a TOML or JSON number."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise InputError(f"{key} must be a number, not {value!r}", where)
    try:
        result = float(value)
    except OverflowError:
        result = math.inf
    if not math.isfinite(result):
        raise InputError(f"{key} must be a finite number, not {value!r}", where)
    return result


def _vector(value: Any, key: str, where: str) -> tuple[float, ...]:
    if not isinstance(value, Sequence) or isinstance(value, str) or len(value) != 3:
        raise InputError(f"{key} must be a list of three numbers, not {value!r}", where)
    return tuple(number(v, f"{key}[{k}]", where) for k, v in enumerate(value))


def _table(value: Any, key: str, where: str) -> Mapping[str, Any]:
    if not isinstance(value, Mapping):
        raise InputError(f"[{key}] must be a table, not {value!r}", where)
    return value


def check_times(times: Sequence[float], where: str, what: str = "samples.times") -> None:
    """Refuse times that are neither strictly increasing nor strictly decreasing."""
    if len(times) < 2:
        return
    rising = times[1] > times[0]
    for k in range(1, len(times)):
        if times[k] == times[k - 1]:
            raise InputError(
                f"{what}: row {k + 1} repeats the time {times[k]!r} of row {k}; times must be "
                "strictly increasing or strictly decreasing",
                where,
            )
        if (times[k] > times[k - 1]) != rising:
            raise InputError(
                f"{what}: row {k + 1} ({times[k]!r}) turns back after row {k} "
                f"({times[k - 1]!r}); times must be strictly increasing or strictly decreasing",
                where,
            )


def _sample_times(table: Mapping[str, Any], where: str) -> tuple[float, ...]:
    refuse_unknown(table, _SAMPLES, "[samples]", where)
    ways = [k for k in ("times", "from_file") if k in table]
    if any(k in table for k in ("first", "last", "count")):
        ways.append("first/last/count")
    if len(ways) != 1:
        raise InputError(
            "[samples] must give exactly one of: times; first, last and count; from_file", where
        )
    if ways[0] == "times":
        values = table["times"]
        if not isinstance(values, Sequence) or isinstance(values, str) or not values:
            raise InputError("samples.times must be a list of numbers", where)
        times = tuple(number(t, f"samples.times[{k}]", where) for k, t in enumerate(values))
    elif ways[0] == "from_file":
        times = _times_file(table["from_file"], where)
    else:
        times = _regular_times(table, where)
    check_times(times, where)
    return times


def _regular_times(table: Mapping[str, Any], where: str) -> tuple[float, ...]:
    """Time i is the float64 nearest to first + i (last - first)/(count - 1), taken exactly."""
    missing = [k for k in ("first", "last", "count") if k not in table]
    if missing:
        raise InputError(f"[samples] lacks {', '.join(missing)}", where)
    count = table["count"]
    if isinstance(count, bool) or not isinstance(count, int) or not 2 <= count <= 100_000_000:
        raise InputError(
            f"samples.count must be a whole number from 2 to 100000000, not {count!r}", where
        )
    first = Fraction(number(table["first"], "samples.first", where))
    step = (Fraction(number(table["last"], "samples.last", where)) - first) / (count - 1)
    if step == 0:
        raise InputError("samples.first and samples.last must differ", where)
    base, over = first, step.denominator * first.denominator
    a, b = base.numerator * step.denominator, step.numerator * base.denominator
    return tuple((a + k * b) / over for k in range(count))


def _times_file(name: Any, where: str) -> tuple[float, ...]:
    from truefall.validate.formats.csv_format import read_times

    if not isinstance(name, str):
        raise InputError(f"samples.from_file must be a path, not {name!r}", where)
    path = Path(where).parent / name
    return tuple(float(t) for t in read_times(path))


def parse_orbit(
    mapping: Mapping[str, Any],
    where: str | Path,
    *,
    need_start: bool = True,
    need_samples: bool = False,
) -> OrbitSpec:
    """Check the keys of an orbit file.

    Parameters
    ----------
    mapping : mapping
        As read from TOML or JSON.
    where : str or Path
        The file, for messages and relative paths.
    need_start, need_samples : bool
        Whether [start] and [samples] must be there.

    Raises
    ------
    InputError
        Naming the key, what is allowed and what to do.
    """
    where = str(where)
    refuse_unknown(mapping, _TOP, "the orbit file", where)
    missing = [k for k in DECLARATIONS if k not in mapping]
    if missing:
        raise InputError(
            f"{', '.join(missing)} missing: truefall never guesses units, chart or clock; write "
            "them into the orbit file (or the trajectory's header or sidecar), or give options "
            + " ".join(f"--{k}" for k in missing),
            where,
        )
    for key, allowed in DECLARATIONS.items():
        if allowed is not None and mapping[key] not in allowed:
            near = difflib.get_close_matches(str(mapping[key]), allowed, n=1, cutoff=0.5)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise InputError(
                f"{key} is {mapping[key]!r}; allowed are {', '.join(allowed)}{hint}", where
            )
    gm = number(mapping["gm"], "gm", where)
    _check_declarations(mapping, gm, where)
    start = _table(mapping.get("start", {}), "start", where)
    refuse_unknown(start, _START, "[start]", where)
    position, velocity, elements = _parse_start(start, mapping["chart"], where, need_start)
    samples = mapping.get("samples")
    if samples is None and need_samples:
        raise InputError(
            "[samples] missing: give times, or first, last and count, or from_file", where
        )
    name = mapping.get("name", Path(where).stem)
    if not isinstance(name, str) or not name or any(ord(c) < 32 for c in name):
        raise InputError(f"name must be a line of text, not {name!r}", where)
    times = None if samples is None else _sample_times(_table(samples, "samples", where), where)
    return OrbitSpec(
        name=name,
        system=mapping["system"],
        gm=gm,
        particle=mapping["particle"],
        chart=mapping["chart"],
        clock=mapping["clock"],
        start_time=number(start.get("time", 0.0), "start.time", where),
        position=position,
        velocity=velocity,
        elements=elements,
        times=times,
        budget=_table(mapping.get("budget", {}), "budget", where),
        path=where,
    )


def _check_declarations(mapping: Mapping[str, Any], gm: float, where: str) -> None:
    if mapping["system"] == "geometric" and gm != 1.0:
        raise InputError(
            f"gm is {gm!r}, but geometric units mean gm = 1; write gm = 1.0, or declare system "
            '"SI" (m, s) or "astronomical" (km, s)',
            where,
        )
    if not gm > 0:
        raise InputError(f"gm must be positive, not {gm!r}", where)
    if mapping["particle"] == "light" and mapping["clock"] == "proper":
        raise InputError('light has no proper time; write clock = "coordinate"', where)


def _parse_start(
    start: Mapping[str, Any], chart: str, where: str, needed: bool
) -> tuple[tuple[float, ...] | None, tuple[float, ...] | None, dict[str, float] | None]:
    given = [k for k in _ELEMENTS if k in start]
    if given:
        if "position" in start or "velocity" in start:
            raise InputError("[start] mixes elements with position and velocity", where)
        if chart != "areal":
            raise InputError(f'elements are areal; chart is {chart!r}, write "areal"', where)
        missing = [k for k in ("semilatus_rectum", "eccentricity") if k not in start]
        if missing:
            raise InputError(f"[start] lacks {', '.join(missing)}", where)
        return None, None, {k: number(start[k], f"start.{k}", where) for k in given}
    missing = [k for k in ("position", "velocity") if k not in start]
    if missing and (needed or len(missing) == 1):
        raise InputError(
            f"[start] lacks {' and '.join(missing)}: three Cartesian components in the chart "
            "(or give elements: semilatus_rectum, eccentricity, ...)",
            where,
        )
    if missing:
        return None, None, None
    return (
        _vector(start["position"], "start.position", where),
        _vector(start["velocity"], "start.velocity", where),
        None,
    )


def read_mapping(path: str | Path) -> dict[str, Any]:
    """The keys of a TOML or JSON file; InputError with line and column if it is neither."""
    path = Path(path)
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    if len(data) > 64 << 20:
        raise InputError("is larger than 64 MB, too large for an orbit file", path)
    try:
        text = data.decode("utf-8-sig")
        mapping = json.loads(text) if path.suffix == ".json" else tomllib.loads(text)
    except UnicodeDecodeError:
        raise InputError("is not UTF-8 text", path) from None
    except (tomllib.TOMLDecodeError, json.JSONDecodeError) as error:
        kind = "JSON" if path.suffix == ".json" else "TOML"
        raise InputError(f"is not valid {kind}: {error}", path) from None
    if not isinstance(mapping, dict):
        raise InputError("must hold a table of keys", path)
    return mapping


def read_orbit_file(path: str | Path, *, need_samples: bool = False) -> OrbitSpec:
    """Read and check an orbit file (.toml, or .json with the same keys)."""
    return parse_orbit(read_mapping(path), path, need_samples=need_samples)


def merge(*layers: Mapping[str, Any]) -> dict[str, Any]:
    """Metadata by precedence: earlier layers win, key by key, also inside tables.

    A layer that gives elements replaces position and velocity of later ones, and the reverse.
    """
    merged: dict[str, Any] = {}
    for layer in reversed(layers):
        for key, value in layer.items():
            old = merged.get(key)
            if key == "start" and isinstance(old, dict) and isinstance(value, Mapping):
                merged[key] = _merge_start(old, value)
            elif isinstance(old, dict) and isinstance(value, Mapping):
                merged[key] = {**old, **value}
            else:
                merged[key] = dict(value) if isinstance(value, Mapping) else value
    return merged


def _merge_start(old: Mapping[str, Any], new: Mapping[str, Any]) -> dict[str, Any]:
    kept = dict(old)
    if any(k in new for k in _ELEMENTS):
        kept = {k: v for k, v in kept.items() if k not in ("position", "velocity")}
    elif "position" in new or "velocity" in new:
        kept = {k: v for k, v in kept.items() if k not in _ELEMENTS}
    return {**kept, **new}
