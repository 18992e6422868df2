"""What all faults of the battery share.

``FAULTS`` maps a name to a function ``make(case, size) -> (rows, causes) or None`` where ``size``
runs from 0 (barely above the floor) to 1 (gross); None where the fault makes no sense for a case.
Rows hold time, position, velocity, second clock, in the case's units.
"""

from __future__ import annotations

import numpy as np

from battery import propagator as p

__all__ = ["FAULTS", "between", "fault", "natural", "p", "unit"]

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
