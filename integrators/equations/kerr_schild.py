"""Kerr-Schild coordinates, ingoing: regular through the future horizon."""

from __future__ import annotations

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Radial
from truefall.integrators.tape import Row

__all__ = ["metric", "radial"]


@kernel
def radial(size: float) -> Radial:
    """The inverse metric at a radius: a, a', b, b', c, c', d, d'."""
    v = 1.0 / size
    v2 = 2.0 * v * v
    return 1.0 + 2.0 * v, -v2, 2.0 * v, -v2, 1.0, 0.0, -2.0 * v, v2


def metric(size: Row) -> tuple[Row | float, Row | float, Row | float, Row | float]:
    """``-g_TT``, ``g_TR``, the tangential ``g`` and the radial ``g_RR``."""
    return (size - 2.0) / size, 2.0 / size, 1.0, 1.0 + 2.0 / size
