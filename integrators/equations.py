"""Equations of motion in chart time, GM = c = 1, from the metric of each chart.

A set of equations turns position and velocity into a vector ``y`` of six numbers, gives
``dy/dT``, and turns ``y`` back.  Massive particles and light obey the same equations.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["EQUATIONS", "Equations"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Equations:
    """A set of equations of motion.

    Attributes
    ----------
    chart : str
        Name of the coordinates.
    begin : callable
        ``(position (3,), velocity (3,)) -> y (6,)``.
    rate : callable
        ``y -> dy/dT``.
    state : callable
        ``y -> (position, velocity)``.
    """

    chart: str
    begin: Callable[[Floats, Floats], Floats]
    rate: Callable[[Floats], Floats]
    state: Callable[[Floats], tuple[Floats, Floats]]


def _join(position: Floats, velocity: Floats) -> Floats:
    return np.concatenate([position, velocity])


def _split(y: Floats) -> tuple[Floats, Floats]:
    return y[:3], y[3:]


def _static(metric: Callable[[float], tuple[float, ...]]) -> Callable[[Floats], Floats]:
    """Geodesics of ``-A dt^2 + B dx^2 + C (n.dx)^2`` in chart time.

    ``metric`` gives A'/A, A'/2, B, B', C, C' at a radius.  From the Lagrangian, with s = n.v::

        d2x/dt2 = -g^-1 (A'/2 n + S) + (A'/A) s v
        S = s B' v + n (s^2 C'/2 + C (v^2 - s^2)/R - B' v^2/2)
    """

    def rate(y: Floats) -> Floats:
        x, v = y[:3], y[3:]
        radius = float(np.sqrt(x @ x))
        n = x / radius
        s, v2 = float(n @ v), float(v @ v)
        slope, half, b, db, c, dc = metric(radius)
        pull = half + 0.5 * s * s * dc + c * (v2 - s * s) / radius - 0.5 * db * v2
        force = pull * n + (s * db) * v
        along = float(n @ force)
        lifted = (force - along * n) / b + (along / (b + c)) * n
        return np.concatenate([v, slope * s * v - lifted])

    return rate


def _harmonic(radius: float) -> tuple[float, ...]:
    """Harmonic coordinates: Weinberg 1972, section 8.2 (from memory)."""
    a, da = (radius - 1) / (radius + 1), 2 / (radius + 1) ** 2
    b, db = (1 + 1 / radius) ** 2, -2 * (1 + 1 / radius) / radius**2
    c = (radius + 1) / ((radius - 1) * radius**2)
    dc = c * (1 / (radius + 1) - 1 / (radius - 1) - 2 / radius)
    return da / a, da / 2, b, db, c, dc


def _isotropic(radius: float) -> tuple[float, ...]:
    """Isotropic coordinates (textbook form)."""
    q = 0.5 / radius
    root = (1 - q) / (1 + q)
    dq = -q / radius
    da = -4 * root * dq / (1 + q) ** 2
    return da / root**2, da / 2, (1 + q) ** 4, 4 * (1 + q) ** 3 * dq, 0.0, 0.0


def _flow(x: Floats) -> Floats:
    """Velocity at which the Painleve-Gullstrand space flows inward, turned outward."""
    out: Floats = np.sqrt(2.0) * x * float(x @ x) ** -0.75
    return out


def _fall_begin(position: Floats, velocity: Floats) -> Floats:
    """Momentum seen by an observer who fell from rest at infinity.

    Raises
    ------
    ValueError
        For a velocity at or above that of light.
    """
    seen = velocity + _flow(position)
    rest = 1.0 - float(seen @ seen)
    if not rest > 0:
        raise ValueError("the velocity is at or above the speed of light there")
    return np.concatenate([position, seen / np.sqrt(rest)])


def _fall_rate(y: Floats) -> Floats:
    """Hamilton's equations of ``-dT^2 + |dx + beta dT|^2``: through the horizon, particles only."""
    x, p = y[:3], y[3:]
    r2, along = float(x @ x), float(x @ p)
    u = np.sqrt(1.0 + float(p @ p))
    slope = np.sqrt(2.0) * (p * r2**-0.75 - 1.5 * along * x * r2**-1.75)
    return np.concatenate([p / u - _flow(x), slope])


def _fall_state(y: Floats) -> tuple[Floats, Floats]:
    x, p = y[:3], y[3:]
    return x, p / np.sqrt(1.0 + float(p @ p)) - _flow(x)


#: Name to equations; one line adds a set.
EQUATIONS = {
    "harmonic": Equations("harmonic", _join, _static(_harmonic), _split),
    "isotropic": Equations("isotropic", _join, _static(_isotropic), _split),
    "painleve-gullstrand": Equations("painleve-gullstrand", _fall_begin, _fall_rate, _fall_state),
}
