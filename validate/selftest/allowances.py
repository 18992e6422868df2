"""How far compiled and interpreted code may differ: not at all, with named exceptions."""

from __future__ import annotations

from collections.abc import Mapping

__all__ = ["ALLOWED", "allowed"]

#: Units in the last place by function, with the reason.
ALLOWED: Mapping[str, float] = {}


def allowed(name: str) -> float:
    """The allowance of a function by its full name."""
    return ALLOWED.get(name, 0.0)
