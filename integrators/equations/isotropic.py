"""Isotropic radius rho, r = rho (1 + 1/(2 rho))^2, static time."""

from __future__ import annotations

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Radial
from truefall.integrators.tape import Row

__all__ = ["metric", "radial"]


@kernel
def radial(size: float) -> Radial:
    """The inverse metric at a radius: a, a', b, b', c, c', d, d'."""
    v = 1.0 / size
    k = 1.0 / (1.0 + 0.5 * v)
    g = 1.0 / (1.0 - 0.5 * v)
    ratio = 2.0 * g - 1.0
    k4 = k * k * k * k
    return (
        ratio * ratio, -2.0 * ratio * g * g * v * v, 0.0, 0.0, k4, 2.0 * k4 * k * v * v, 0.0, 0.0,
    )  # fmt: skip


def metric(size: Row) -> tuple[Row | float, Row | float, Row | float, Row | float]:
    """``-g_TT``, ``g_TR``, the tangential ``g`` and the radial ``g_RR``."""
    q = 0.5 / size
    lapse = (1.0 - q) / (1.0 + q)
    stretch = (1.0 + q) * (1.0 + q) * (1.0 + q) * (1.0 + q)
    return lapse * lapse, 0.0, stretch, stretch
