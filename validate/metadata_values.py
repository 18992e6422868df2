"""Values of TOML and JSON metadata, checked and returned."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping, Sequence
from typing import Any

from truefall.validate.errors import InputError

__all__ = ["number", "refuse_unknown", "shown", "table", "vector"]

_SHOWN = 60


def shown(value: Any) -> str:
    """A value as it may stand in a sentence: printable and not long."""
    text = ascii(value) if not str(value).isprintable() else repr(value)
    return text if len(text) <= _SHOWN else text[: _SHOWN - 4] + "..."


def refuse_unknown(given: Mapping[str, Any], known: Sequence[str], what: str, where: str) -> None:
    """InputError for the first unknown key, with the nearest known one."""
    for key in given:
        if key not in known:
            near = difflib.get_close_matches(str(key), known, n=1)
            hint = f"; did you mean {near[0]!r}?" if near else f"; known are {', '.join(known)}"
            raise InputError(f"unknown key {shown(key)} in {what}{hint}", where)


def number(value: Any, key: str, where: str) -> float:
    """A finite float64 from a TOML or JSON number."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise InputError(f"{key} must be a number, not {shown(value)}", where)
    try:
        result = float(value)
    except OverflowError:
        result = math.inf
    if not math.isfinite(result):
        raise InputError(f"{key} must be a finite number, not {shown(value)}", where)
    return result


def vector(value: Any, key: str, where: str) -> tuple[float, ...]:
    """Three finite numbers."""
    if not isinstance(value, Sequence) or isinstance(value, str) or len(value) != 3:
        raise InputError(f"{key} must be a list of three numbers, not {shown(value)}", where)
    return tuple(number(v, f"{key}[{k}]", where) for k, v in enumerate(value))


def table(value: Any, key: str, where: str) -> Mapping[str, Any]:
    """A table of keys."""
    if not isinstance(value, Mapping):
        raise InputError(f"[{key}] must be a table, not {shown(value)}", where)
    return value
