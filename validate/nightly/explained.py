"""The causes of a failing case's errors; kept, because most failures fail alike every night."""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from truefall.validate.nightly.kept import kept_folder
from truefall.validate.nightly.record import CaseRecord

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["explained"]

_LONGEST = 30.0
#: How many nights try again what took too long.
_ATTEMPTS = 3


class _TooLongError(Exception):
    """The search for causes took longer than it may."""


@contextmanager
def _at_most(seconds: float) -> Iterator[None]:
    """A limit on what happens inside; none in a thread that cannot be interrupted."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def stop(*_: object) -> NoReturn:
        raise _TooLongError

    before = signal.signal(signal.SIGALRM, stop)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        signal.signal(signal.SIGALRM, before)


@cache
def _sources() -> str:
    """A digest of all that searches for causes."""
    import truefall.validate.causes as place

    found = hashlib.sha256()
    room = Path(str(place.__file__)).resolve().parent
    for path in sorted(room.rglob("*.py")):
        found.update(path.relative_to(room).as_posix().encode() + b"\0" + path.read_bytes())
    return found.hexdigest()


def _path(record: CaseRecord) -> Path | None:
    folder = kept_folder()
    if folder is None:
        return None
    name = hashlib.sha256(
        "\0".join([_sources(), record.case_digest, record.digest]).encode()
    ).hexdigest()
    return Path(folder) / f"causes-{name}.json"


def explained(record: CaseRecord, result: CheckResult, kept: bool) -> CaseRecord:
    """The record of a failing case with its findings; others, and what fails here, as they are.

    Parameters
    ----------
    record : CaseRecord
        With the digest of the obtained numbers.
    kept : bool
        Whether findings may be read from and written to the user's folder.
    """
    if result.verdict != "fail" or result.comparison is None:
        return record
    path = _path(record) if kept else None
    stored = None if path is None else _read(path)
    attempts = 0 if stored is None else int(stored["attempts"])
    if stored is None or 0 < attempts < _ATTEMPTS:
        stored = _searched(result, attempts)
        if path is not None and stored is not None:
            _write(path, stored)
    if stored is None:
        return replace(record, description="the search for causes failed")
    return replace(
        record, findings=tuple(stored["findings"]), description=str(stored["description"])
    )


def _searched(result: CheckResult, attempts: int) -> dict[str, Any] | None:
    """What the search says; ``attempts`` counts the nights on which it took too long."""
    try:
        with _at_most(_LONGEST):
            from truefall.validate.causes import explain

            found = explain(result)
        words = {
            "findings": [f.as_json() for f in found.findings],
            "description": str(found.description), "attempts": 0,
        }  # fmt: skip
        plain: dict[str, Any] = json.loads(json.dumps(words))
        return plain
    except _TooLongError:
        sentence = f"no cause was found within {_LONGEST:g} s"
        return {"findings": [], "description": sentence, "attempts": attempts + 1}
    except Exception:  # a help for the reader: the verdict does not depend on it
        return None


def _read(path: Path) -> dict[str, Any] | None:
    """What an earlier night found; None where nothing of use is there."""
    try:
        stored = json.loads(path.read_text("utf-8"))
        usable = isinstance(stored["findings"], list) and isinstance(stored["attempts"], int)
        return {**stored, "description": stored["description"]} if usable else None
    except (OSError, ValueError, KeyError, TypeError):
        return None


def _write(path: Path, words: dict[str, Any]) -> None:
    with contextlib.suppress(OSError):
        temporary = path.with_name(f".{path.name}.{os.getpid()}-{threading.get_ident()}")
        temporary.write_text(json.dumps(words), "utf-8")
        temporary.replace(path)
