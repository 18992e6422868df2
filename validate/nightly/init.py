"""A suite to start from: commented, with adaptors that work as they are."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

from truefall.validate.errors import InputError, UsageError

__all__ = ["write_skeleton"]

#: Name in the package and name that is written.
_FILES = {
    "suite.toml": "suite.toml",
    "adaptor.py.txt": "adaptor.py",
    "adaptor.c": "adaptor.c",
    "adaptor.f90": "adaptor.f90",
}


def write_skeleton(folder: Path) -> list[Path]:
    """Write suite and adaptors; returns their paths.

    Raises
    ------
    UsageError
        If one of them is there already; nothing is written then.
    InputError
        If the folder cannot be written.
    """
    there = [name for name in _FILES.values() if (folder / name).exists()]
    if there:
        raise UsageError(
            f"{folder / there[0]} is there already; --init overwrites nothing, name another folder"
        )
    source = resources.files("truefall.validate.nightly") / "skeleton"
    written = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for stored, name in _FILES.items():
            path = folder / name
            path.write_text((source / stored).read_text("utf-8"), "utf-8")
            written.append(path)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", folder) from None
    return written
