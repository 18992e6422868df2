"""Areal radius in spherical coordinates: y = (r, theta, phi, p_r, p_theta, p_phi, T, lambda).

H = (-E^2 r/(r - 2) + (1 - 2/r) p_r^2 + (p_theta^2 + p_phi^2/sin^2 theta)/r^2)/2: the whole sphere
but its poles.
"""

from __future__ import annotations

from math import cos, sin

from truefall.integrators.compiled import kernel
from truefall.integrators.equations.types import Floats

__all__ = ["spherical_hamiltonian", "spherical_rate"]


@kernel
def spherical_hamiltonian(energy: float, y: Floats) -> float:
    """H: -1/2 along a particle's orbit, 0 along a ray."""
    r: float = y[0]
    s = sin(y[1])
    turning = y[4] * y[4] + y[5] * y[5] / (s * s)
    f = (r - 2.0) / r
    value: float = 0.5 * (-energy * energy / f + f * y[3] * y[3] + turning / (r * r))
    return value


@kernel
def spherical_rate(energy: float, y: Floats, out: Floats) -> float:
    """Fill ``d y/d lambda`` (8,); gives back r."""
    r: float = y[0]
    s = sin(y[1])
    v, g = 1.0 / r, 1.0 / (r - 2.0)
    v2 = v * v
    spin = y[5] / (s * s)
    out[0] = (1.0 - 2.0 * v) * y[3]
    out[1] = v2 * y[4]
    out[2] = v2 * spin
    turning = y[4] * y[4] + y[5] * spin
    out[3] = v2 * (v * turning - y[3] * y[3]) - (energy * energy) * (g * g)
    out[4] = v2 * (spin * y[5]) * (cos(y[1]) / s)
    out[5] = 0.0
    out[6] = energy * (1.0 + 2.0 * g)
    out[7] = 1.0
    return r
