"""From the planar motion to Cartesian chart coordinates, in balls."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from flint import arb, fmpq

from truefall.reference.exact.solution import Instant

__all__ = ["ElementsFrame", "Frame", "StartFrame", "chart_state"]


@dataclass(frozen=True)
class Frame:
    """Unit vectors of the start's radius and of the motion across it, in balls."""

    radial: tuple[arb, ...]
    across: tuple[arb, ...]


class StartFrame:
    """The orbit's plane from position and velocity (exact rationals)."""

    def __init__(self, position: tuple[Fraction, ...], velocity: tuple[Fraction, ...]) -> None:
        self._x = [fmpq(c.numerator, c.denominator) for c in position]
        v = [fmpq(c.numerator, c.denominator) for c in velocity]
        self._x2 = sum((c * c for c in self._x), fmpq(0))
        along = sum((a * b for a, b in zip(self._x, v, strict=True)), fmpq(0)) / self._x2
        self._t = [b - a * along for a, b in zip(self._x, v, strict=True)]
        self._t2 = sum((c * c for c in self._t), fmpq(0))
        self._v = v

    def start_state(self, velocity: list[arb], massive: bool) -> tuple[list[arb], list[arb]]:
        """Position and velocity at the start itself, where zero components are exact zeros.

        For light the direction is exact and its size is taken from ``velocity``.
        """
        position = [arb(c) for c in self._x]
        if massive:
            return position, [arb(c) for c in self._v]
        size2 = sum((c * c for c in self._v), fmpq(0))
        along = sum((a * b for a, b in zip(velocity, self._v, strict=True)), arb(0))
        return position, [c * (along / size2) if c != 0 else arb(0) for c in self._v]

    def balls(self) -> Frame:
        """The frame at flint's current precision; components that vanish are exact zeros."""
        size = arb(self._x2).sqrt()
        radial = tuple(arb(c) / size for c in self._x)
        if self._t2 == 0:
            return Frame(radial, (arb(0), arb(0), arb(0)))
        size = arb(self._t2).sqrt()
        return Frame(radial, tuple(arb(c) / size for c in self._t))

    def momentum_direction(self) -> tuple[arb, ...]:
        """Unit vector along the angular momentum; zeros for radial motion."""
        return _cross(self.balls())


class ElementsFrame:
    """The orbit's plane from node, inclination and the argument of the start (radians)."""

    def __init__(self, inclination: Fraction, node: Fraction, argument: Fraction) -> None:
        self._angles = [fmpq(a.numerator, a.denominator) for a in (inclination, node, argument)]

    def start_state(self, velocity: list[arb], massive: bool) -> None:
        """Elements give no exact components."""

    def balls(self) -> Frame:
        """The frame at flint's current precision."""
        tilt, node, place = (arb(a) for a in self._angles)
        ci, si = tilt.cos(), tilt.sin()
        cn, sn = node.cos(), node.sin()
        ct, st = place.cos(), place.sin()
        radial = (cn * ct - sn * st * ci, sn * ct + cn * st * ci, st * si)
        across = (-cn * st - sn * ct * ci, -sn * st + cn * ct * ci, ct * si)
        return Frame(radial, across)

    def momentum_direction(self) -> tuple[arb, ...]:
        """Unit vector along the angular momentum."""
        return _cross(self.balls())


def _cross(frame: Frame) -> tuple[arb, ...]:
    a, b = frame.radial, frame.across
    return (
        a[1] * b[2] - a[2] * b[1],
        a[2] * b[0] - a[0] * b[2],
        a[0] * b[1] - a[1] * b[0],
    )


def chart_state(
    chart: str, instant: Instant, momentum: arb, frame: Frame
) -> tuple[list[arb], list[arb]]:
    """Position and velocity ``d position / d (chart time)``, GM = c = 1.

    Returns
    -------
    position, velocity : three balls each
    """
    u, w, gap = instant.u, instant.w, instant.gap
    r = 1 / u
    rdot = -w / (u * u) / instant.rate
    phidot = momentum / instant.rate
    if chart == "harmonic":
        rho, rhodot = r - 1, rdot
    elif chart == "isotropic":
        root = gap.sqrt()
        rho = (r - 1 + r * root) / 2
        rhodot = rdot * rho * u / root  # dr/drho = r sqrt(1 - 2/r) / rho
    else:
        rho, rhodot = r, rdot
    sine, cosine = instant.azimuth.sin_cos()
    position, velocity = [], []
    for a, b in zip(frame.radial, frame.across, strict=True):
        outward = a * cosine + b * sine
        across = b * cosine - a * sine
        position.append(rho * outward)
        velocity.append(rhodot * outward + rho * phidot * across)
    return position, velocity
