"""What the table is made from: planar values of an orbit and its radial period, as two words."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.reference.orbit import Orbit

__all__ = ["azimuths", "planar", "reduction"]

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


def reduction(orbit: Orbit) -> tuple[float, float, Floats, Floats] | None:
    """One radial period in elapsed time and what it adds, each as two words; None if none.

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
