"""What an orbit returns: values with second words and proven bounds, and the ends of orbits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Bounded", "End", "EndReached", "Floats", "States"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Bounded:
    """A number: ``value + low`` to about 32 digits, ``bound`` proven on ``|value - truth|``."""

    value: float
    low: float
    bound: float


@dataclass(frozen=True)
class End:
    """Where an orbit ends.

    Attributes
    ----------
    time : float
        On the orbit's clock, in the system's time unit, start time included; the nearest
        float64.
    reason : str
        What is reached there.
    radius : float
        Areal radius there, in the system's length unit.
    """

    time: float
    reason: str
    radius: float


class EndReached(ValueError):
    """A time was asked for that the orbit never reaches.

    Attributes
    ----------
    end : End
    index : int
        Position of the first such time in the request.
    time : float
        That time.
    """

    def __init__(self, end: End, index: int, time: float) -> None:
        super().__init__(
            f"the orbit ends at {end.reason} at time {end.time!r}, and time {time!r} "
            f"(sample {index + 1}) lies beyond"
        )
        self.end, self.index, self.time = end, index, time


@dataclass(frozen=True)
class States:
    """An orbit at ``n`` times; float64 arrays in the units of the orbit's system.

    For each quantity ``x``: ``x`` is the float64 nearest to the truth, ``x_low`` a second word
    (``x + x_low`` is right to about 32 digits of the vector's size), ``x_bound`` a proven bound
    on ``|x - truth|``, rounded up.

    Attributes
    ----------
    time : (n,)
        As asked for.
    position : (n, 3)
        Cartesian in the chart, length units.
    velocity : (n, 3)
        ``d position / d (chart time)``.
    proper_time : (n,) or None
        Since the start; None for light.
    affine : (n,) or None
        Affine parameter since the start (E = 1, so in length units); None for massive particles.
    coordinate_time : (n,) or None
        The chart's time since the start where ``time`` is proper time; else None.
    radius : (n,)
        Areal radius.
    azimuth : (n,)
        Angle swept since the start, radians, not wrapped.
    winding : (n,)
        The same in turns.
    """

    time: Floats
    position: Floats
    position_low: Floats
    position_bound: Floats
    velocity: Floats
    velocity_low: Floats
    velocity_bound: Floats
    proper_time: Floats | None
    proper_time_low: Floats | None
    proper_time_bound: Floats | None
    affine: Floats | None
    affine_low: Floats | None
    affine_bound: Floats | None
    coordinate_time: Floats | None
    coordinate_time_low: Floats | None
    coordinate_time_bound: Floats | None
    radius: Floats
    azimuth: Floats
    azimuth_low: Floats
    azimuth_bound: Floats
    winding: Floats
