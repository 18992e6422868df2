"""What all faults of the battery share.

``FAULTS`` maps a name to a function ``make(case, size) -> (rows, causes) or None`` where ``size``
runs from 0 (barely above the floor) to 1 (gross); None where the fault makes no sense for a case.
Rows hold time, position, velocity, second clock, in the case's units.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import numpy as np


def sibling(name):
    """A module of this folder."""
    full = f"battery_{name}"
    if full not in sys.modules:
        path = Path(__file__).parent / f"{name}.py"
        spec = importlib.util.spec_from_file_location(full, path)
        module = importlib.util.module_from_spec(spec)
        sys.modules[full] = module
        spec.loader.exec_module(module)
    return sys.modules[full]


p = sibling("propagator")
FAULTS = {}


def fault(*causes):
    def keep(make):
        def made(case, size):
            rows = make(case, size)
            return None if rows is None else (rows, causes)

        FAULTS[make.__name__] = made
        return made

    return keep


def between(size, least, most):
    return least * (most / least) ** size


def natural(case):
    """Newton's acceleration at the start, in c^4/GM."""
    return 1 / (np.linalg.norm(case.position) / case.units[0]) ** 2


def unit(v):
    return np.array(v) / np.linalg.norm(v)
