"""Areal radius, static time (Schwarzschild's coordinates, Cartesian form)."""

from __future__ import annotations

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Radial
from truefall.integrators.tape import Row

__all__ = ["metric", "radial"]


@kernel
def radial(size: float) -> Radial:
    """The inverse metric at a radius: a, a', b, b', c, c', d, d'."""
    v = 1.0 / size
    g = 1.0 / (size - 2.0)
    return 1.0 + 2.0 * g, -2.0 * g * g, 0.0, 0.0, 1.0, 0.0, -2.0 * v, 2.0 * v * v


def metric(size: Row) -> tuple[Row | float, Row | float, Row | float, Row | float]:
    """``-g_TT``, ``g_TR``, the tangential ``g`` and the radial ``g_RR``."""
    return (size - 2.0) / size, 0.0, 1.0, size / (size - 2.0)
