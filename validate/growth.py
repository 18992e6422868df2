"""How an error grows: the exponent of a power law, or an exponential, or neither."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Growth", "growth_of"]

Floats = npt.NDArray[np.float64]

_ENOUGH = 8
_BINS = 24
#: Share of the logarithmic scatter that a law must explain to be named.
_EXPLAINED = 0.8


@dataclass(frozen=True)
class Growth:
    """``kind`` is none, bounded, linear, quadratic, power, exponential or irregular.

    ``exponent`` is that of time for power laws, and the rate per unit of time for an
    exponential; None where no law is named.
    """

    exponent: float | None
    kind: str


def _envelope(elapsed: Floats, error: Floats) -> tuple[Floats, Floats]:
    """Largest error in bins even in log time: the orbit's own oscillation is not growth."""
    edges = np.geomspace(elapsed.min(), elapsed.max() * (1 + 1e-12), _BINS + 1)
    index = np.clip(np.searchsorted(edges, elapsed, side="right") - 1, 0, _BINS - 1)
    t, e = [], []
    for k in range(_BINS):
        inside = index == k
        if inside.any():
            best = np.argmax(np.where(inside, error, -1.0))
            t.append(elapsed[best])
            e.append(error[best])
    return np.array(t), np.array(e)


def _fit(x: Floats, y: Floats) -> tuple[float, float]:
    """Slope of a straight line, and the share of the scatter it explains."""
    total = float(np.sum((y - y.mean()) ** 2))
    slope, offset = np.polyfit(x, y, 1)
    rest = float(np.sum((y - (slope * x + offset)) ** 2))
    return float(slope), 1.0 - rest / total if total > 0 else 0.0


def growth_of(time: Floats, error: Floats, floor: Floats, start: float) -> Growth:
    """The law of growth of a position error.

    Parameters
    ----------
    time, error, floor : (n,)
        Samples at or below ``floor`` (the guard) say nothing about growth and are left out.
    start : float
        Time of the start, where the error is zero by construction.
    """
    elapsed = np.abs(time - start)
    use = (elapsed > 0) & (error > np.maximum(floor, 0.0)) & np.isfinite(error)
    if use.sum() < _ENOUGH or elapsed[use].max() < 2 * elapsed[use].min():
        return Growth(None, "none" if not use.any() else "irregular")
    t, e = _envelope(elapsed[use], error[use])
    if t.size < 4:
        return Growth(None, "irregular")
    power, explained = _fit(np.log(t), np.log(e))
    rate, explained_exponential = _fit(t, np.log(e))
    if rate * (t.max() - t.min()) > 3 and explained_exponential > max(explained, _EXPLAINED):
        return Growth(rate, "exponential")
    if abs(power) < 0.25:
        return Growth(power, "bounded")
    if explained < _EXPLAINED:
        return Growth(None, "irregular")
    kind = "linear" if abs(power - 1) < 0.2 else "quadratic" if abs(power - 2) < 0.2 else "power"
    return Growth(power, kind)
