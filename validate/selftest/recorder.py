"""First child process: everything runs as interpreted source, and what kernels were given is kept.

Started with ``NUMBA_DISABLE_JIT=1``.  Each function that asks for compilation is wrapped before
its module is imported; the scenarios then call the package as its users do, and of each function,
the helpers called by others included, a few calls are kept: arguments before, arguments after and
value, all from the interpreted source.
"""

from __future__ import annotations

import functools
import importlib
import math
import pickle
import pkgutil
import sys
import threading
import traceback
import types
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from truefall.validate.selftest.arguments import Kept, keep, size

__all__ = ["Call", "full_name", "import_all", "main"]

#: Calls of a function that are kept, by number: the first ones and some later.
_KEPT = (1, 2, 3, 7, 20, 50, 120, 300, 1000)
_MATHEMATICS = (
    "sqrt", "sin", "cos", "tan", "asin", "acos", "atan", "atan2", "exp", "expm1", "log", "log1p",
    "log2", "log10", "hypot", "pow", "sinh", "cosh", "tanh",
)  # fmt: skip
#: Largest arguments that are kept, in bytes.
_MOST_BYTES = 4_000_000

#: Arguments before the call, arguments after it, value.
Call = tuple[Kept, Kept, Kept]


def full_name(function: Callable[..., Any]) -> str:
    """Module and name of a function; copies of a template are told apart by their names."""
    return f"{function.__module__}.{function.__qualname__}"


def import_all(packages: Sequence[str]) -> None:
    """Import every module of some packages."""
    for package in packages:
        found = importlib.import_module(package)
        for place in pkgutil.walk_packages(getattr(found, "__path__", []), package + "."):
            if not place.name.endswith("__main__"):
                importlib.import_module(place.name)


class _Store:
    """What was recorded: calls by function, and functions that were never called."""

    def __init__(self) -> None:
        self.calls: dict[str, list[Call]] = {}
        self._count: dict[str, int] = {}
        self._lock = threading.Lock()

    def due(self, name: str, arguments: tuple[Any, ...]) -> bool:
        """Whether this call is one to keep."""
        with self._lock:
            self._count[name] += 1
            number = self._count[name]
        return number in _KEPT and size(arguments) <= _MOST_BYTES

    def wrapped(self, function: Callable[..., Any]) -> Callable[..., Any]:
        """The function, recording; registered by its name."""
        name = full_name(function)
        self.calls.setdefault(name, [])
        self._count.setdefault(name, 0)

        made: list[Any] = []

        @functools.wraps(function)
        def recording(*arguments: Any) -> Any:
            if not made:  # not before the first call, when the module has all its names
                made.append(_soft(function))
            if not self.due(name, arguments):
                return made[0](*arguments)
            before = keep(arguments)
            value = made[0](*arguments)
            self.calls[name].append((before, keep(arguments), keep((value,))))
            return value

        recording.py_func = function  # type: ignore[attr-defined]
        return recording


def _decorator(store: _Store) -> Callable[..., Any]:
    def njit(*given: Any, **options: Any) -> Any:
        del options
        if given and callable(given[0]):
            return store.wrapped(given[0])
        return store.wrapped

    return njit


def _ieee(function: Callable[..., float]) -> Callable[..., Any]:
    """A function of ``math`` as compiled code has it: IEEE's numbers, where Python raises."""
    import numpy as np

    @functools.wraps(function)
    def softened(*values: Any) -> Any:
        try:
            return np.float64(function(*values))
        except ValueError:
            return np.float64(np.nan)
        except OverflowError:
            return np.float64(np.inf)

    return softened


def _soft(function: Any) -> Any:
    """The function with IEEE's mathematics; the module keeps its own names."""
    soft = {getattr(math, name): _ieee(getattr(math, name)) for name in _MATHEMATICS}
    names = dict(function.__globals__)
    for name in function.__code__.co_names:
        found = names.get(name)
        if isinstance(found, types.BuiltinFunctionType) and found in soft:
            names[name] = soft[found]
    made = types.FunctionType(
        function.__code__, names, function.__name__, function.__defaults__, function.__closure__
    )
    made.__kwdefaults__ = function.__kwdefaults__
    return made


def main(arguments: Sequence[str]) -> int:
    """``OUT PACKAGES SCENARIOS``: comma-separated; a scenario is ``module:function``."""
    import numba
    import numpy as np

    out, packages, scenarios = Path(arguments[0]), arguments[1], arguments[2]
    store = _Store()
    for name in ("njit", "jit"):
        setattr(numba, name, _decorator(store))
    failures = []
    with np.errstate(all="ignore"):
        import_all(packages.split(","))
        for scenario in scenarios.split(","):
            module, _, name = scenario.partition(":")
            try:
                getattr(importlib.import_module(module), name)()
            except Exception:  # whatever it was is told by the parent; the others still count
                failures.append((scenario, traceback.format_exc()))
    out.write_bytes(pickle.dumps((store.calls, failures)))
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
