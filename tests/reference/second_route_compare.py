"""Comparing the engine's double words with texts of 34 digits and more."""

from __future__ import annotations

from typing import Any

import mpmath
import numpy as np

#: Orbit-file keys that make an orbit.
KEYS = ("system", "gm", "particle", "chart", "clock", "position", "velocity")


def two_words(high: Any, low: Any) -> list[Any]:
    """High and low words as mpmath numbers, flattened."""
    pairs = zip(np.ravel(high).tolist(), np.ravel(low).tolist(), strict=True)
    return [mpmath.mpf(a) + mpmath.mpf(b) for a, b in pairs]


def expected_numbers(value: Any) -> list[Any]:
    return [mpmath.mpf(q) for q in (value if isinstance(value, list) else [value])]


def compare_row(states: Any, index: int, row: dict[str, Any], relative: float) -> list[str]:
    """What disagrees between one sample and its expected row; empty if nothing.

    Both words together: ``relative`` of the vector's size.  The high word alone: the nearest
    float64 (half an ulp, and ``relative`` of the size).  The proven bound: the expected value
    lies within it.
    """
    faults = []
    for name, value in row.items():
        high = np.ravel(getattr(states, name)[index])
        low = np.ravel(getattr(states, f"{name}_low")[index])
        bound = np.ravel(getattr(states, f"{name}_bound")[index])
        expected = expected_numbers(value)
        size = max(abs(q) for q in expected)
        for k, (both, exact) in enumerate(zip(two_words(high, low), expected, strict=True)):
            if abs(both - exact) > relative * size:
                faults.append(
                    f"{name}[{k}] of sample {index}: high + low is off by "
                    f"{mpmath.nstr((both - exact) / size, 3)} of the size"
                )
            half = mpmath.mpf(0.5 * float(np.spacing(abs(float(exact)))))
            if abs(mpmath.mpf(float(high[k])) - exact) > half + relative * size:
                faults.append(f"{name}[{k}] of sample {index}: high word is not the nearest")
            slack = mpmath.mpf(10) ** -33 * size  # of the expected text itself
            if abs(mpmath.mpf(float(high[k])) - exact) > mpmath.mpf(float(bound[k])) + slack:
                faults.append(f"{name}[{k}] of sample {index}: outside its proven bound")
    return faults
