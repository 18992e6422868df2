"""The text of a suite file and its keys; one sentence with the line for everything wrong."""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from truefall.validate.errors import InputError, UsageError

__all__ = ["SuiteReader"]

_SIZE = re.compile(r"([0-9.]+)\s*(kB|MB|GB|TB)", re.ASCII)
_SIZES = {"kB": 10**3, "MB": 10**6, "GB": 10**9, "TB": 10**12}


class SuiteReader:
    """The text of a suite file, to say on which line something is wrong."""

    def __init__(self, path: Path) -> None:
        self.path = path
        from truefall.validate.orbit_file import read_mapping

        try:
            self.table = read_mapping(path)
            self.lines = path.read_text("utf-8-sig").splitlines()
        except InputError as error:
            raise UsageError(str(error)) from None

    def wrong(self, sentence: str, table: str = "", key: str = "") -> UsageError:
        """The error, with the line of the key, or of the table's header."""
        line = self._line(table, key)
        where = f"{self.path}, line {line}" if line else str(self.path)
        return UsageError(f"{where}: {sentence}")

    def _line(self, table: str, key: str) -> int:
        header = ""
        found = 0
        for number, line in enumerate(self.lines, 1):
            match = re.match(r"\s*\[([^\]]*)\]", line)
            if match:
                header = match[1].replace('"', "").replace("'", "").replace(" ", "")
                if header == table:
                    found = number
            elif (
                header == table and key and re.match(rf"\s*[\"']?{re.escape(key)}[\"']?\s*=", line)
            ):
                return number
        return found

    def known(self, given: Any, names: Sequence[str], table: str) -> Mapping[str, Any]:
        """The table, if it is one and has no unknown keys."""
        label = f"[{table}]" if table else "the suite"
        if not isinstance(given, Mapping):
            raise self.wrong(f"{label} must be a table, not {given!r}", table)
        for key in given:
            if key not in names:
                near = difflib.get_close_matches(str(key), names, n=1)
                hint = f"; did you mean {near[0]!r}?" if near else f"; known are {', '.join(names)}"
                raise self.wrong(f"unknown key {key!r} in {label}{hint}", table, str(key))
        return given

    def number(self, table: str, given: Mapping[str, Any], key: str, default: float) -> float:
        """A positive finite number."""
        value = given.get(key, default)
        if (
            isinstance(value, bool)
            or not isinstance(value, int | float)
            or not 0 < value < math.inf
        ):
            raise self.wrong(f"{key} must be a positive number, not {value!r}", table, key)
        return float(value)

    def texts(self, table: str, given: Mapping[str, Any], key: str) -> tuple[str, ...]:
        """A list of texts, none of them empty."""
        value = given[key]
        if (
            not isinstance(value, list)
            or not value
            or not all(isinstance(v, str) and v and "\0" not in v for v in value)
        ):
            raise self.wrong(f"{key} must be a list of texts, not {value!r}", table, key)
        return tuple(value)

    def size(
        self, table: str, given: Mapping[str, Any], key: str, default: int | None
    ) -> int | None:
        """A size in bytes."""
        if key not in given:
            return default
        value = given[key]
        if value == "none":
            return None
        match = _SIZE.fullmatch(value) if isinstance(value, str) else None
        try:
            size = int(float(match[1]) * _SIZES[match[2]]) if match else 0
        except ValueError:
            size = 0
        if size <= 0:
            raise self.wrong(
                f'{key} must be a size such as "512 MB", or "none", not {value!r}', table, key
            )
        return size
