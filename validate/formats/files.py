"""Writing that leaves a whole file or none: temporary name, verify, fsync, rename."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from pathlib import Path

from truefall.validate.errors import InputError

__all__ = ["replace_file"]


def replace_file(path: str | Path, write: Callable[[Path], None]) -> None:
    """Let ``write`` fill a temporary file beside ``path``, then put it in place.

    Raises
    ------
    InputError
        If the folder does not exist or cannot be written; nothing is left behind.
    """
    path = Path(path)
    try:
        handle, name = tempfile.mkstemp(
            prefix=f".{path.name}.", suffix=path.suffix, dir=path.parent
        )
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", path) from None
    os.close(handle)
    temporary = Path(name)
    try:
        write(temporary)
        with temporary.open("rb") as stream:
            os.fsync(stream.fileno())
        umask = os.umask(0)
        os.umask(umask)
        temporary.chmod(0o666 & ~umask)
        temporary.replace(path)
        folder = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)
    except OSError as error:
        temporary.unlink(missing_ok=True)
        raise InputError(f"cannot be written ({error.strerror or error})", path) from None
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
