"""Harmonic radius R = r - 1, static time (Weinberg 1972, section 8.2, from memory)."""

from __future__ import annotations

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Radial
from truefall.integrators.tape import Row

__all__ = ["metric", "radial"]


@kernel
def radial(size: float) -> Radial:
    """The inverse metric at a radius: a, a', b, b', c, c', d, d'."""
    g = 1.0 / (size - 1.0)
    k = 1.0 / (size + 1.0)
    return (
        1.0 + 2.0 * g, -2.0 * g * g, 0.0, 0.0, size * size * k * k, 2.0 * size * k * k * k,
        -k * k, 2.0 * k * k * k,
    )  # fmt: skip


def metric(size: Row) -> tuple[Row | float, Row | float, Row | float, Row | float]:
    """``-g_TT``, ``g_TR``, the tangential ``g`` and the radial ``g_RR``."""
    stretch = (1.0 + 1.0 / size) * (1.0 + 1.0 / size)
    lapse = (size - 1.0) / (size + 1.0)
    return lapse, 0.0, stretch, 1.0 / lapse
