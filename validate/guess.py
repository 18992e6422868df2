"""First guesses of the velocity of a trajectory that gives positions alone."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.validate.trajectory import Trajectory

__all__ = ["kepler_guesses", "polynomial_guesses"]

Floats = npt.NDArray[np.float64]
_DEGREE = 6
_WINDOW_ROWS = 65
#: Speeds, as shares of the circular one, and elevations above the horizontal, in degrees.
_SHARES = (0.7, 0.9, 1.0, 1.1, 1.3)
_ELEVATIONS = (-50.0, -20.0, 0.0, 20.0, 50.0)


def polynomial_guesses(trajectory: Trajectory) -> list[Floats]:
    """Slopes at the first row of polynomials through windows of 3, 5, 9, 17, ... rows.

    Short windows suit coarse sampling, long ones positions with few digits.
    """
    n, guesses, window = len(trajectory), [], 3
    while window <= n:
        rows = np.unique(np.linspace(0, window - 1, min(window, _WINDOW_ROWS)).astype(int))
        t = trajectory.time[rows] - trajectory.time[0]
        scale = float(abs(t[-1]))
        degree = min(rows.size - 1, _DEGREE)
        powers = np.vander(t / scale, degree + 1, increasing=True)
        fitted = np.linalg.lstsq(powers, trajectory.position[rows], rcond=None)[0]
        guesses.append(np.asarray(fitted[1] / scale, dtype=np.float64))
        window = 2 * window - 1
    return guesses


def kepler_guesses(trajectory: Trajectory) -> list[Floats]:
    """A fan of speeds and directions in the plane of the first rows, about the circular speed.

    For files with a few rows a revolution, where no polynomial follows the orbit.
    """
    first = trajectory.position[0]
    r = float(np.linalg.norm(first))
    up = first / r
    others = trajectory.position[1:4]
    normals = np.cross(first, others)
    normal = normals[int(np.argmax(np.linalg.norm(normals, axis=1)))]
    size = float(np.linalg.norm(normal))
    if size < 1e-6 * r * r:
        return []
    along = np.cross(normal / size, up)
    speed = np.sqrt(float(trajectory.metadata["gm"]) / r)
    return [
        sense * share * speed * (np.cos(angle) * along + np.sin(angle) * up)
        for sense in (1.0, -1.0)
        for share in _SHARES
        for angle in np.radians(_ELEVATIONS)
    ]
