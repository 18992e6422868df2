"""Colours, axes and units that the pictures share."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "ALONG",
    "CROSS",
    "EXPECTED",
    "GUARD",
    "LIMIT",
    "OBTAINED",
    "POSITION",
    "RADIAL",
    "length_scale",
    "log_axis",
    "readable",
    "time_scale",
]

Floats = npt.NDArray[np.float64]

# Okabe & Ito's palette, told apart with every common kind of colour vision (Okabe and Ito 2008,
# "Color Universal Design", from memory).
EXPECTED = RADIAL = "#0072B2"
OBTAINED = CROSS = "#D55E00"
ALONG = "#009E73"
LIMIT = "#CC79A7"
POSITION = "#000000"
GUARD = "#777777"

_LENGTHS = ((1e12, "10^9 km"), (1e9, "10^6 km"), (1e6, "10^3 km"), (1e3, "km"), (1.0, "m"))
_TIMES = ((31_557_600.0, "yr"), (86_400.0, "d"), (3_600.0, "h"), (1.0, "s"), (1e-3, "ms"))


def readable(unit: str) -> str:
    """A unit's name with its powers set as such: ``GM/c^2`` becomes mathematics."""
    head, hat, tail = unit.partition("^")
    if not hat:
        return unit
    return f"{head}$^{{{tail[:1]}}}${tail[1:]}"


def length_scale(size: float, unit: str) -> tuple[float, str]:
    """Factor and name of the unit in which ``size`` (in ``unit``) is a short number."""
    if unit not in ("m", "km"):
        return 1.0, unit
    base = 1000.0 if unit == "km" else 1.0
    for factor, name in _LENGTHS:
        if size * base >= 3 * factor:
            return factor / base, name
    return 1.0 / base, "m"


def time_scale(span: float, unit: str) -> tuple[float, str]:
    """Factor and name of the unit in which ``span`` is a short number."""
    if unit != "s":
        return 1.0, unit
    for factor, name in _TIMES:
        if span >= 3 * factor:
            return factor, name
    return 1e-6, "us"


def log_axis(
    axes: Axes, values: Floats, guard: Floats | None, limit: Floats | None, *, grid: bool = True
) -> None:
    """A logarithmic axis over what matters: the bulk of the values, guard and limit near them.

    The start, where errors vanish or are 1e-70, would otherwise squeeze all else together.
    """
    positive = values[np.isfinite(values) & (values > 0)]
    if not positive.size:
        axes.text(0.5, 0.5, "zero throughout", transform=axes.transAxes, ha="center", va="center")
        axes.set_yticks([])
        return
    low, high = float(np.percentile(positive, 3)) / 3, float(positive.max()) * 3
    for curve in (guard, limit):
        if curve is None:
            continue
        shown = curve[(curve > 0) & (curve < 1e12 * high)]
        if shown.size:
            high = max(high, 2 * float(shown.max()))
            if float(shown.min()) > 1e-4 * low:
                low = min(low, float(shown.min()) / 3)
    axes.set_yscale("log")
    axes.set_ylim(low, high)
    if grid:
        axes.grid(True, which="major", color="0.9", lw=0.6)
