"""The in-house propagator of the demo: small, fixed-step, and wrong where a story says so.

It stands for somebody's code under test.  It shares nothing with the reference: plane polar
equations of motion in the areal chart, geometric units, the classical Runge-Kutta method.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

__all__ = ["Force", "Row", "geodesic", "light_speed", "newton", "propagate"]

State = tuple[float, float, float, float, float]
Force = Callable[[float, float, float], tuple[float, float]]


@dataclass(frozen=True)
class Row:
    """One sample: time, position, velocity and proper time since the start."""

    time: float
    position: tuple[float, float, float]
    velocity: tuple[float, float, float]
    proper_time: float


def geodesic(r: float, rdot: float, phidot: float) -> tuple[float, float]:
    """Second derivatives of r and phi in areal time, particles and light alike.

    The geodesic equation of the areal line element with t as parameter (own derivation).
    """
    f = 1.0 - 2.0 / r
    return (
        r * f * phidot**2 - f / r**2 + 3.0 * rdot**2 / (f * r**2),
        -2.0 * rdot * phidot / r * (1.0 - 1.0 / (r * f)),
    )


def newton(r: float, rdot: float, phidot: float) -> tuple[float, float]:
    """The same with relativity forgotten."""
    return r * phidot**2 - 1.0 / r**2, -2.0 * rdot * phidot / r


def light_speed(x: float, y: float, ux: float, uy: float) -> tuple[float, float]:
    """Velocity of light in a direction: the areal line element set to zero."""
    r, size = math.hypot(x, y), math.hypot(ux, uy)
    radial = (x * ux + y * uy) / (r * size)
    f = 1.0 - 2.0 / r
    speed = math.sqrt(f / (radial**2 / f + 1.0 - radial**2))
    return speed * ux / size, speed * uy / size


def _rate(state: State, force: Force) -> State:
    r, _, rdot, phidot, _ = state
    f = 1.0 - 2.0 / r
    lapse2 = f - rdot**2 / f - (r * phidot) ** 2
    a, b = force(r, rdot, phidot)
    return rdot, phidot, a, b, math.sqrt(max(lapse2, 0.0))


def _moved(s: State, k: State, h: float) -> State:
    return (
        s[0] + h * k[0], s[1] + h * k[1], s[2] + h * k[2], s[3] + h * k[3], s[4] + h * k[4],
    )  # fmt: skip


def _step(state: State, h: float, force: Force) -> State:
    k1 = _rate(state, force)
    k2 = _rate(_moved(state, k1, h / 2), force)
    k3 = _rate(_moved(state, k2, h / 2), force)
    k4 = _rate(_moved(state, k3, h), force)
    state = _moved(state, k1, h / 6)
    state = _moved(state, k2, h / 3)
    state = _moved(state, k3, h / 3)
    return _moved(state, k4, h / 6)


def propagate(
    position: tuple[float, float],
    velocity: tuple[float, float],
    *,
    rows: int,
    interval: float,
    steps: int,
    force: Force = geodesic,
) -> list[Row]:
    """An orbit in the plane z = 0, ``steps`` steps between two rows.

    Parameters
    ----------
    position, velocity : (2,)
        Areal chart, GM = c = 1.
    rows : int
    interval : float
        Between rows, GM/c^3.
    steps : int
    force : Force
    """
    (x, y), (vx, vy) = position, velocity
    r = math.hypot(x, y)
    state = (r, math.atan2(y, x), (x * vx + y * vy) / r, (x * vy - y * vx) / r**2, 0.0)
    found = []
    for k in range(rows):
        r, phi, rdot, phidot, tau = state
        c, s = math.cos(phi), math.sin(phi)
        found.append(
            Row(
                k * interval,
                (r * c, r * s, 0.0),
                (rdot * c - r * phidot * s, rdot * s + r * phidot * c, 0.0),
                tau,
            )
        )
        for _ in range(steps if k < rows - 1 else 0):
            state = _step(state, interval / steps, force)
    return found
