"""How far compiled and interpreted code may differ: not at all, with named exceptions."""

from __future__ import annotations

from collections.abc import Mapping

__all__ = ["ALLOWED", "allowed"]

#: Units in the last place by function, with the reason.
ALLOWED: Mapping[str, float] = {
    # whole powers are products when compiled and the C library's pow when interpreted
    "truefall.validate.causes.flight_kernel.fill_flight": 1.0,
}


def allowed(name: str) -> float:
    """The allowance of a function by its full name."""
    return ALLOWED.get(name, 0.0)
