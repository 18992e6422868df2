"""Opening what is a plain file; writing that leaves a whole file or none."""

from __future__ import annotations

import datetime
import os
import tempfile
from collections.abc import Callable
from pathlib import Path

from truefall.validate.errors import InputError, UsageError

__all__ = ["check_readable", "creation_date", "producer", "replace_file"]


def check_readable(path: Path) -> None:
    """Refuse what is no plain file: a missing one, a folder, a device, a pipe.

    Raises
    ------
    InputError
        Saying which.
    """
    try:
        if path.is_dir():
            raise InputError("is a folder; name a file", path)
        if not path.exists():
            raise InputError("there is no such file", path)
        if not path.is_file():
            raise InputError("is a device or pipe; name a plain file", path)
    except (OSError, ValueError) as error:
        raise InputError(f"cannot be read ({error})", path) from None


def producer() -> str:
    """Name and version of this package, for the files it writes."""
    from importlib.metadata import PackageNotFoundError, version

    try:
        return f"truefall {version('truefall')}"
    except PackageNotFoundError:
        return "truefall"


def creation_date(reproducible: bool) -> str:
    """Now, in UTC; SOURCE_DATE_EPOCH if that is set; 1970 if the file must be reproducible.

    Raises
    ------
    UsageError
        If SOURCE_DATE_EPOCH is no number of seconds.
    """
    epoch = os.environ.get("SOURCE_DATE_EPOCH") or ("0" if reproducible else "")
    if not epoch:
        return datetime.datetime.now(datetime.UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    try:
        moment = datetime.datetime.fromtimestamp(int(epoch), datetime.UTC)
    except (ValueError, OverflowError, OSError):
        raise UsageError(
            f"the environment variable SOURCE_DATE_EPOCH is {epoch!r}; it must be a whole number "
            "of seconds since 1970"
        ) from None
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def _sync_folder(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def replace_file(path: str | Path, write: Callable[[Path], None]) -> None:
    """Let ``write`` fill a temporary file beside ``path``, then put it in place.

    A reader of the old file keeps seeing the old content; a crash at any moment leaves the old
    file or the new one.

    Raises
    ------
    InputError
        If the folder does not exist or cannot be written; nothing is left behind.
    """
    path = Path(path)
    try:
        handle, name = tempfile.mkstemp(prefix=".truefall-", suffix=path.suffix, dir=path.parent)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", path) from None
    os.close(handle)
    temporary = Path(name)
    try:
        write(temporary)
        with temporary.open("rb+") as stream:
            os.fsync(stream.fileno())
        umask = os.umask(0)
        os.umask(umask)
        temporary.chmod(0o666 & ~umask)  # mkstemp gave 0600
        temporary.replace(path)
        _sync_folder(path.parent)
    except OSError as error:
        temporary.unlink(missing_ok=True)
        raise InputError(f"cannot be written ({error.strerror or error})", path) from None
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
