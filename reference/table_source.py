"""What the table is made from: planar values of an orbit and its radial period, as two words."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from flint import arb, ctx

if TYPE_CHECKING:
    from truefall.reference.orbit import Orbit

__all__ = ["azimuths", "circle_points", "planar", "reduction"]

Floats = npt.NDArray[np.float64]


def planar(orbit: Orbit, elapsed: Floats) -> Floats:
    """Planar position and velocity and the second clock at elapsed times, as two words.

    Returns
    -------
    (n, 5, 2)
        Along the start's radius and across it; the clock of :class:`States` (proper time,
        affine parameter, or chart time on the proper clock).
    """
    clock, other = orbit.engine_clocks
    return orbit.enclosure.planar(clock, other, orbit.engine_times(elapsed))


def azimuths(orbit: Orbit, elapsed: Floats) -> Floats:
    """Azimuth since the start at elapsed times, (n,), radians."""
    return np.array(orbit.enclosure.azimuths(orbit.engine_clocks[0], orbit.engine_times(elapsed)))


@cache
def circle_points(count: int) -> Floats:
    """Cosine and sine of ``count`` even angles of a circle, two words each, (count, 4)."""
    found = np.empty((count, 4))
    with ctx.workprec(256):
        for k in range(count):
            angle = 2 * arb.pi() * k / count
            for j, ball in enumerate((angle.cos(), angle.sin())):
                high = float(ball.mid())
                found[k, 2 * j : 2 * j + 2] = high, float((ball - arb(high)).mid())
    return found


def reduction(orbit: Orbit) -> tuple[float, float, Floats, Floats] | None:
    """One period in elapsed time and what it adds, each as two words; None if none.

    The radial period, or the whole turn of a circular orbit.

    Returns
    -------
    low, high : float
        The period that holds the start.
    period : (4,)
        Its length and the second clock's advance.
    turn : (2,)
        The azimuth it adds, modulo 2 pi.
    """
    found = orbit.enclosure.reduction(*orbit.engine_clocks)
    if found is None:
        return None
    low, words, turn = found
    return low, low + words[0], words, turn
