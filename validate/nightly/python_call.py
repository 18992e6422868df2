"""A Python function under test, called in a process of its own."""

from __future__ import annotations

import importlib
import json
import os
import sys
from typing import Any

__all__ = ["call"]

_WRONG_RESULT, _NO_FUNCTION = 65, 66
_NAMES = ("time", "position", "velocity")


def _second_clock(orbit: dict[str, Any]) -> str:
    """What a fourth array is."""
    if orbit["particle"] == "light":
        return "affine"
    return "coordinate_time" if orbit["clock"] == "proper" else "proper_time"


def _find(name: str) -> Any:
    """The function named "package.module:function"; a sentence where there is none."""
    module, _, path = name.partition(":")
    found: Any = importlib.import_module(module)
    for part in path.split("."):
        found = getattr(found, part)
    return found


def _refuse(out: str, sentence: str, status: int) -> int:
    with open(f"{out}.refusal", "w", encoding="utf-8") as stream:
        stream.write(sentence)
    return status


def call(name: str, suite: str, orbit_path: str, out: str) -> int:
    """Call the function with the orbit as a dict and write what it returns as NPZ.

    Parameters
    ----------
    name : str
        "package.module:function".
    suite : str
        The suite's folder, searched first for modules.
    orbit_path : str
        The orbit file (JSON).
    out : str
        Where to write.

    Returns
    -------
    int
        Exit status; with another than 0 the file ``OUT.refusal`` holds a sentence, or the function
        has raised.
    """
    import numpy as np

    sys.path.insert(0, suite)
    with open(orbit_path, encoding="utf-8") as stream:
        orbit = json.load(stream)
    module = name.partition(":")[0]
    try:
        function = _find(name)
    except AttributeError:
        return _refuse(out, f"there is no {name.partition(':')[2]!r} in {module}", _NO_FUNCTION)
    except ModuleNotFoundError as error:
        if error.name is None or not (module + ".").startswith(error.name + "."):
            raise
        return _refuse(
            out,
            f"there is no module {module!r} in the suite's folder or where Python looks "
            "(PYTHONPATH, installed packages)",
            _NO_FUNCTION,
        )
    returned = function(orbit)
    clock = _second_clock(orbit)
    names = (*_NAMES, clock)
    wanted = f"it must return time (n,), position (n, 3), velocity (n, 3) and may add {clock} (n,)"
    if not isinstance(returned, tuple | list) or len(returned) not in (3, 4):
        kind = type(returned).__name__
        count = f" of {len(returned)}" if isinstance(returned, tuple | list) else ""
        return _refuse(out, f"{name} returned {kind}{count}; {wanted}", _WRONG_RESULT)
    arrays: dict[str, Any] = {}
    for label, values in zip(names, returned, strict=False):
        try:
            arrays[label] = np.asarray(values, dtype=np.float64)
        except (TypeError, ValueError) as error:
            return _refuse(
                out, f"{label} is no array of numbers ({error}); {wanted}", _WRONG_RESULT
            )
    temporary = f"{out}.unfinished"
    with open(temporary, "wb") as file:
        np.savez(file, **arrays)
    os.replace(temporary, out)
    return 0
