"""Orbit files: what is propagated, in which units, from which start, at which times."""

from __future__ import annotations

import difflib
import json
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from truefall.validate.errors import InputError
from truefall.validate.metadata_values import number, refuse_unknown, shown, table, vector
from truefall.validate.sample_times import sample_times

if TYPE_CHECKING:
    from truefall.reference import Orbit

__all__ = [
    "DECLARATIONS",
    "OrbitSpec",
    "check_layer",
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
_LARGEST_FILE = 64 << 20


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


def check_layer(mapping: Mapping[str, Any], where: str | Path) -> None:
    """Check the keys that one file gives, complete or not.

    Raises
    ------
    InputError
        For an unknown key or a value that is not allowed.
    """
    where = str(where)
    refuse_unknown(mapping, _TOP, "the metadata", where)
    for key, allowed in DECLARATIONS.items():
        if key in mapping and allowed is not None and mapping[key] not in allowed:
            near = difflib.get_close_matches(str(mapping[key]), allowed, n=1, cutoff=0.5)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise InputError(
                f"{key} is {shown(mapping[key])}; allowed are {', '.join(allowed)}{hint}", where
            )
    for key in ("start", "samples", "budget"):
        table(mapping.get(key, {}), key, where)
    start = mapping.get("start", {})
    refuse_unknown(start, _START, "[start]", where)
    for key in ("time", *_ELEMENTS):
        if key in start:
            number(start[key], f"start.{key}", where)
    for key in ("position", "velocity"):
        if key in start:
            vector(start[key], f"start.{key}", where)
    name = mapping.get("name", "orbit")
    if not isinstance(name, str) or not name or not name.isprintable():
        raise InputError(f"name must be a line of text, not {shown(name)}", where)


def _refuse_missing(mapping: Mapping[str, Any], where: str, need_start: bool) -> None:
    """One sentence for all that is missing."""
    missing = [key for key in DECLARATIONS if key not in mapping]
    start = mapping.get("start", {})
    lacking = [key for key in ("position", "velocity") if key not in start]
    if any(key in start for key in _ELEMENTS) or not (need_start or len(lacking) == 1):
        lacking = []
    parts = []
    if missing:
        parts.append(
            f"{', '.join(missing)} missing: truefall never guesses units, chart or clock; write "
            "them into the orbit file (or the trajectory's header or sidecar), or give check or "
            "convert " + " ".join(f"--{key}" for key in missing)
        )
    if lacking:
        parts.append(
            f"[start] lacks {' and '.join(lacking)}: three Cartesian components in the chart "
            "(or give elements: semilatus_rectum, eccentricity, ...)"
        )
    if parts:
        raise InputError("; ".join(parts), where)


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
    check_layer(mapping, where)
    _refuse_missing(mapping, where, need_start)
    gm = number(mapping["gm"], "gm", where)
    _check_declarations(mapping, gm, where)
    start = mapping.get("start", {})
    position, velocity, elements = _parse_start(start, mapping["chart"], where)
    samples = mapping.get("samples")
    if samples is None and need_samples:
        raise InputError(
            "[samples] missing: give times, or first, last and count, or from_file", where
        )
    if mapping.get("budget"):
        from truefall.validate.budget import parse_budget

        parse_budget(mapping["budget"], mapping["system"], where)
    times = None if samples is None else sample_times(table(samples, "samples", where), where)
    return OrbitSpec(
        name=mapping.get("name", Path(where).stem),
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
        budget=mapping.get("budget", {}),
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
    start: Mapping[str, Any], chart: str, where: str
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
    if "position" not in start:
        return None, None, None
    return (
        vector(start["position"], "start.position", where),
        vector(start["velocity"], "start.velocity", where),
        None,
    )


def _no_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    table = dict(pairs)
    if len(table) < len(pairs):
        keys = [key for key, _ in pairs]
        again = next(key for k, key in enumerate(keys) if key in keys[:k])
        raise ValueError(f"key {again!r} stands twice in one table")
    return table


def read_mapping(path: str | Path) -> dict[str, Any]:
    """The keys of a TOML or JSON file; InputError with line and column if it is neither."""
    from truefall.validate.formats.files import check_readable

    path = Path(path)
    check_readable(path)
    is_json = path.suffix.lower() == ".json"
    try:
        if path.stat().st_size > _LARGEST_FILE:
            raise InputError("is larger than 64 MB, too large for an orbit file", path)
        text = path.read_bytes().decode("utf-8-sig")
        mapping = (
            json.loads(text, object_pairs_hook=_no_repeats) if is_json else tomllib.loads(text)
        )
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    except UnicodeDecodeError:
        raise InputError("is not UTF-8 text", path) from None
    except (ValueError, RecursionError) as error:  # both parsers' errors are ValueErrors
        kind = "JSON" if is_json else "TOML"
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
    if any(key in new for key in _ELEMENTS):
        kept = {k: v for k, v in kept.items() if k not in ("position", "velocity")}
    elif "position" in new or "velocity" in new:
        kept = {k: v for k, v in kept.items() if k not in _ELEMENTS}
    whole = ("position" in new and "velocity" in new) or "semilatus_rectum" in new
    if whole:  # a start of its own: where it names no time, it is at time 0
        kept.pop("time", None)
    return {**kept, **new}
