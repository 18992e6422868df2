"""Metadata as text: TOML lines for CSV, NPZ and Parquet, flat attributes for HDF5."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from typing import Any

__all__ = ["ELEMENT_KEYS", "dump_toml", "flatten", "unflatten"]

#: Keys of [start] besides time, position and velocity.
ELEMENT_KEYS = (
    "semilatus_rectum", "eccentricity", "inclination", "node", "periapsis", "anomaly",
)  # fmt: skip
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+", re.ASCII)
#: Keys that say how a file came about, not what it holds.
_LEFT_OUT = ("samples", "case", "producer")


def _key(key: str) -> str:
    return key if _BARE_KEY.fullmatch(key) else _toml_value(key)


def _toml_value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str):
        quoted = value.replace("\\", "\\\\").replace('"', '\\"')
        return '"' + "".join(c if c.isprintable() else f"\\U{ord(c):08x}" for c in quoted) + '"'
    if isinstance(value, Mapping):
        inner = ", ".join(f"{_key(k)} = {_toml_value(v)}" for k, v in value.items())
        return "{ " + inner + " }"
    return "[" + ", ".join(_toml_value(v) for v in value) + "]"


def dump_toml(metadata: Mapping[str, Any]) -> list[str]:
    """Lines ``key = value``; tables become dotted keys."""
    lines = []
    for key, value in metadata.items():
        if key in _LEFT_OUT:
            continue
        if isinstance(value, Mapping):
            lines += [f"{_key(key)}.{_key(k)} = {_toml_value(v)}" for k, v in value.items()]
        else:
            lines.append(f"{_key(key)} = {_toml_value(value)}")
    return lines


def flatten(metadata: Mapping[str, Any]) -> dict[str, Any]:
    """Metadata as HDF5 attributes: start.position becomes start_position, budget TOML text."""
    flat = {k: v for k, v in metadata.items() if k not in ("start", "budget", "name", *_LEFT_OUT)}
    flat |= {f"start_{key}": value for key, value in metadata.get("start", {}).items()}
    if metadata.get("budget"):
        flat["budget"] = _toml_value(metadata["budget"])
    return flat


def unflatten(attributes: Mapping[str, Any]) -> dict[str, Any]:
    """The reverse of :func:`flatten`; ValueError if the budget is not TOML.

    Elements are the start as it was given; position and velocity beside them are their rounding,
    written for readers that know no elements.
    """
    found = dict(attributes)
    start = {
        key: found.pop(f"start_{key}")
        for key in ("time", "position", "velocity", *ELEMENT_KEYS)
        if f"start_{key}" in found
    }
    if any(key in start for key in ELEMENT_KEYS):
        start = {k: v for k, v in start.items() if k not in ("position", "velocity")}
    if start:
        found["start"] = start
    if "budget" in found:
        found["budget"] = tomllib.loads(f"budget = {found['budget']}")["budget"]
    return found
