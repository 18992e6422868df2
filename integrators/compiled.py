"""How kernels are compiled and where the compiled code is kept.

Numba's cache stamps one file at a time: a kernel that calls a changed helper of another file
would go on running the old code.  Here the folder's name holds a digest of every source of this
package, so that a changed line anywhere means a new folder.  The cache is made of pickles:
whoever may write there may run code, hence the folder is private to the user, and without such a
folder nothing is kept.
"""

from __future__ import annotations

import hashlib
import os
import stat
import types
import warnings
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

import numba

__all__ = ["KERNELS", "cache_folder", "kernel", "specialised"]

F = TypeVar("F", bound=Callable[..., Any])

#: Every compiled function of the package by full name; the tests hold each against its source.
KERNELS: dict[str, Any] = {}


def _digest() -> str:
    """Digest of all sources of the package and of Numba's version."""
    found = hashlib.sha256(numba.__version__.encode())
    room = Path(__file__).resolve().parent
    for path in sorted(room.rglob("*.py")):
        found.update(path.relative_to(room).as_posix().encode() + b"\0" + path.read_bytes())
    return found.hexdigest()[:20]


def _base() -> Path:
    """The user's folder for things that can be made again."""
    chosen = os.environ.get("NUMBA_CACHE_DIR") or os.environ.get("XDG_CACHE_HOME")
    return Path(chosen) if chosen else Path.home() / ".cache"


@cache
def cache_folder() -> str | None:
    """The private folder of this build, made if need be; None, with one warning, without it."""
    try:
        folder = _base() / "truefall" / f"kernels-{_digest()}"
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        about = folder.stat()
        if about.st_uid != os.getuid() or about.st_mode & (stat.S_IWGRP | stat.S_IWOTH):
            raise PermissionError(f"{folder} belongs to, or can be written by, somebody else")
        if not os.access(folder, os.W_OK | os.X_OK):
            raise PermissionError(f"{folder} cannot be written")
    except (OSError, RuntimeError) as error:
        warnings.warn(
            f"compiled integrators are not kept between runs: {error}", RuntimeWarning, stacklevel=2
        )
        return None
    return str(folder)


def kernel(function: F) -> F:
    """Compile when first called: no fast-math, IEEE division, the lock of Python let go."""
    folder = cache_folder()
    config: Any = numba.config
    before = config.CACHE_DIR
    if folder is not None:
        config.CACHE_DIR = folder
    try:
        made: Any = numba.njit(cache=folder is not None, error_model="numpy", nogil=True)(function)
    finally:
        config.CACHE_DIR = before
    KERNELS[f"{function.__module__}.{function.__qualname__}"] = made
    compiled: F = made
    return compiled


def specialised(template: Callable[..., Any], name: str, **names: Any) -> Any:
    """A kernel with the template's lines in which some global names mean these kernels.

    Numba then compiles a loop around each method's step without pointers; the name tells the
    copies apart, also in the cache.
    """
    globals_ = {**template.__globals__, **names}
    made = types.FunctionType(template.__code__, globals_, name)
    made.__qualname__ = name
    made.__doc__ = template.__doc__
    return kernel(made)
