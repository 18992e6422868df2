"""What could change the bits of a result without a change of the code under test."""

from __future__ import annotations

import hashlib
import os
import platform
import sys
from collections.abc import Mapping
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

__all__ = ["environment", "fingerprint"]

_LIBRARIES = ("truefall", "numpy", "scipy", "numba", "llvmlite", "icc-rt", "mkl")
#: Variables that choose code paths or numbers of threads.
_VARIABLES = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS", "OPENBLAS_CORETYPE", "NPY_DISABLE_CPU_FEATURES",
    "NUMBA_CPU_NAME", "NUMBA_CPU_FEATURES", "NUMBA_DISABLE_JIT", "LD_PRELOAD",
    "GLIBC_TUNABLES", "MKL_CBWR",
)  # fmt: skip


def _processor() -> tuple[str, str]:
    """Model and a digest of the instruction sets."""
    model, flags = platform.processor() or platform.machine(), ""
    try:
        text = Path("/proc/cpuinfo").read_text("utf-8", "replace")
    except OSError:
        return model, ""
    for line in text.split("\n\n")[0].splitlines():
        key, _, value = line.partition(":")
        if key.strip() == "model name":
            model = value.strip()
        elif key.strip() in ("flags", "Features"):
            flags = hashlib.sha256(" ".join(sorted(value.split())).encode()).hexdigest()[:12]
    return model, flags


@cache
def _parts() -> tuple[tuple[str, str], ...]:
    from truefall.validate.nightly.kept import engine_digest

    model, flags = _processor()
    libc = " ".join(platform.libc_ver()).strip()
    found = {
        "processor": model,
        "instruction sets": flags,
        "cpus": str(os.cpu_count() or 0),
        "system": f"{platform.system()} {platform.machine()}",
        "libc": libc,
        "python": f"{platform.python_implementation()} {platform.python_version()}",
        "byte order": sys.byteorder,
        "reference": engine_digest(),
    }
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return tuple(found.items())


def environment() -> dict[str, str]:
    """The parts of the fingerprint, by name."""
    found = dict(_parts())
    for name in _VARIABLES:
        if name in os.environ:
            found[name] = os.environ[name]
    return found


def fingerprint(parts: Mapping[str, str]) -> str:
    """A digest of the parts."""
    text = "\0".join(f"{key}={parts[key]}" for key in sorted(parts))
    return hashlib.sha256(text.encode()).hexdigest()[:16]
