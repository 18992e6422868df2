"""Acceptances: somebody says that tonight's figures of a case are the new measure."""

from __future__ import annotations

import difflib
import fnmatch
import json
from collections.abc import Mapping, Sequence
from pathlib import Path

from truefall.validate.errors import InputError, UsageError
from truefall.validate.nightly.noticing import Accepted, Past

__all__ = ["accept", "read_accepted"]

_NAME = "accepted.json"


def read_accepted(folder: Path) -> dict[str, Accepted]:
    """Acceptances by key.

    Raises
    ------
    InputError
        If the file is damaged.
    """
    path = folder / _NAME
    if not path.exists():
        return {}
    try:
        stored = json.loads(path.read_text("utf-8"))
        return {
            key: Accepted(int(a["night"]), {q: float(e) for q, e in a["errors"].items()},
                          bool(a["gone"]))
            for key, a in stored["accepted"].items()
        }  # fmt: skip
    except (OSError, ValueError, KeyError, TypeError, AttributeError) as error:
        raise InputError(f"is damaged ({error}); remove it and accept again", path) from None


def accept(
    folder: Path,
    patterns: Sequence[str],
    past: Mapping[str, Past],
    missing: Sequence[str],
    latest: int,
) -> list[str]:
    """Accept the latest figures of the cases named; returns their keys.

    Parameters
    ----------
    patterns : sequence of str
        "propagator/case", a case's name alone, or a pattern such as "ours/*".
    past : mapping
        Latest figures by key.
    missing : sequence of str
        Keys whose end is accepted when they are named.
    latest : int
        Number of the last night.

    Raises
    ------
    UsageError
        For a name that is no case; nothing is accepted then.
    """
    from truefall.validate.formats.files import replace_file

    chosen: list[str] = []
    for pattern in patterns:
        found = [
            key for key in sorted(past)
            if fnmatch.fnmatchcase(key, pattern) or fnmatch.fnmatchcase(key.split("/")[1], pattern)
        ]  # fmt: skip
        if not found:
            near = difflib.get_close_matches(pattern, past, n=1)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise UsageError(f"--accept {pattern!r}: no such case in night {latest}{hint}")
        chosen += [key for key in found if key not in chosen]
    accepted = read_accepted(folder)
    for key in chosen:
        gone = key in missing
        night = latest if gone else past[key].night
        accepted[key] = Accepted(night, dict(past[key].errors), gone)
    plain = {
        key: {"night": a.night, "errors": dict(a.errors), "gone": a.gone}
        for key, a in sorted(accepted.items())
    }
    text = json.dumps({"accepted": plain}, indent=1) + "\n"
    replace_file(folder / _NAME, lambda path: _write(path, text))
    return chosen


def _write(path: Path, text: str) -> None:
    path.write_text(text, "utf-8")
