"""Second child process: the recorded calls again, compiled, one kernel after another.

For every kernel a line is written before it runs and another after, so that the parent knows which
one stands still.
"""

from __future__ import annotations

import importlib
import json
import pickle
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from truefall.validate.selftest.arguments import give
from truefall.validate.selftest.recorder import Call, full_name, import_all

__all__ = ["distance", "main"]


def distance(obtained: Any, expected: Any) -> float:
    """Largest difference in units in the last place of the larger number; inf for another kind.

    Arrays count by the largest number in them, since a component that cancels keeps the rounding
    of those that made it.  Integers and truth values are equal or not.
    """
    import numpy as np

    if isinstance(expected, tuple):
        if not isinstance(obtained, tuple) or len(obtained) != len(expected):
            return np.inf
        pairs = zip(obtained, expected, strict=True)
        return max((distance(a, b) for a, b in pairs), default=0.0)
    if expected is None or isinstance(expected, str):
        return 0.0 if obtained == expected else np.inf
    a, b = np.asarray(obtained), np.asarray(expected)
    if a.shape != b.shape:
        return np.inf
    if a.dtype.kind != "f" and b.dtype.kind != "f":
        return 0.0 if np.array_equal(a, b) else np.inf
    a, b = a.astype(np.float64), b.astype(np.float64)
    same = (a == b) | (np.isnan(a) & np.isnan(b))
    if bool(same.all()):
        return 0.0
    if not bool((np.isfinite(a) & np.isfinite(b))[~same].all()):
        return np.inf
    finite = np.isfinite(b)
    unit = np.spacing(max(np.abs(b[finite]).max(), np.abs(a[finite]).max()))
    return float((np.abs(a - b)[~same]).max() / unit)


def _registry() -> dict[str, Any]:
    """Wrap ``numba.njit`` so that every compiled function is known by name."""
    import numba

    found: dict[str, Any] = {}
    original = numba.njit

    def njit(*given: Any, **options: Any) -> Any:
        def keep(function: Any) -> Any:
            made = original(**options)(function)
            found[full_name(function)] = made
            return made

        return keep(given[0]) if given and callable(given[0]) else keep

    numba.njit = njit
    return found


def _strangers(known: dict[str, Any], packages: Sequence[str]) -> list[str]:
    """Compiled functions in the packages' modules that ``njit`` did not make."""
    from numba.core.dispatcher import Dispatcher
    from numba.np.ufunc.dufunc import DUFunc

    ours = {id(made) for made in known.values()}
    found = set()
    for name, module in list(sys.modules.items()):
        if name.split(".")[0] not in {p.split(".")[0] for p in packages}:
            continue
        for value in list(vars(module).values()):
            if isinstance(value, Dispatcher | DUFunc) and id(value) not in ours:
                found.add(f"{name}.{getattr(value, '__name__', value)}")
    return sorted(found)


def _held(kernel: Any, calls: Sequence[Call]) -> float:
    """Largest distance over the calls, of value and of every argument."""
    worst = 0.0
    for before, after, value in calls:
        given = give(before)
        obtained = kernel(*given)
        worst = max(worst, distance((obtained,), give(value)), distance(given, give(after)))
    return worst


def main(arguments: Sequence[str]) -> int:
    """``CALLS PACKAGES PREPARE DONE``: DONE names kernels that were held before."""
    calls_file, packages, prepare, done = arguments
    known = _registry()
    import_all(packages.split(","))
    if prepare:
        module, _, name = prepare.partition(":")
        getattr(importlib.import_module(module), name)()
    calls, _ = pickle.loads(Path(calls_file).read_bytes())

    def tell(**line: Any) -> None:
        print(json.dumps(line), flush=True)

    skip = set(done.split(","))
    tell(kernels=sorted(known), strangers=_strangers(known, packages.split(",")))
    for name in sorted(known):
        if name in skip or not calls.get(name):
            continue
        tell(begin=name)
        try:
            tell(end=name, distance=_held(known[name], calls[name]))
        except Exception as error:
            tell(end=name, error=f"{type(error).__name__}: {str(error).strip()[:300]}")
    tell(finished=True)
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
