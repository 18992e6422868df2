"""Exact arithmetic in towers of square roots over the rationals.

The constants of an orbit are rational functions of the start (float64 numbers, so rationals),
of the chart radius ``|x|`` (a square root of a rational) and, in the Painleve-Gullstrand chart,
of ``sqrt(2/r)``.  Whether an orbit is *exactly* circular, parabolic, radial or bound to whirl
for ever is a question about zeros of such numbers.  Ball arithmetic can never answer "yes" to
it; this module can.
"""

from __future__ import annotations

from typing import TypeAlias, cast

import flint
from flint import arb, fmpq

__all__ = ["Exact", "Surd", "is_zero", "sign", "sqrt_of", "to_ball"]

Exact: TypeAlias = "fmpq | Surd"

#: Working precisions (bits) tried for the sign of a number already known not to be zero.
_SIGN_PRECISIONS = tuple(64 << k for k in range(14))


class Surd:
    """The exact number ``x + y sqrt(d)``, with ``x``, ``y``, ``d`` one storey lower.

    Surds that meet in an operation must stand on the same ``d`` (the same object), or one of
    them must be of the lower storey.
    """

    __slots__ = ("d", "x", "y")

    def __init__(self, x: Exact, y: Exact, d: Exact) -> None:
        self.x, self.y, self.d = x, y, d

    def _parts(self, other: Exact | int) -> tuple[Exact, Exact] | None:
        if isinstance(other, Surd) and other.d is self.d:
            return other.x, other.y
        if isinstance(other, Surd) and _storey(other) >= _storey(self):
            if _storey(other) == _storey(self):
                raise ValueError("the two numbers stand on different square roots")
            return None
        return (fmpq(other) if isinstance(other, int) else other), fmpq(0)

    def __add__(self, other: Exact | int) -> Surd:
        parts = self._parts(other)
        if parts is None:  # the other stands higher; Python tries no reflection between equal types
            return cast("Surd", other) + self
        return Surd(self.x + parts[0], self.y + parts[1], self.d)

    __radd__ = __add__

    def __neg__(self) -> Surd:
        return Surd(-self.x, -self.y, self.d)

    def __sub__(self, other: Exact | int) -> Surd:
        return self + (-other)

    def __rsub__(self, other: Exact | int) -> Surd:
        return (-self) + other

    def __mul__(self, other: Exact | int) -> Surd:
        parts = self._parts(other)
        if parts is None:
            return cast("Surd", other) * self
        x, y = parts
        return Surd(self.x * x + self.y * y * self.d, self.x * y + self.y * x, self.d)

    __rmul__ = __mul__

    def inverse(self) -> Surd:
        """``1/self``; raises ZeroDivisionError for an exact zero."""
        norm = self.x * self.x - self.y * self.y * self.d
        if is_zero(norm):
            # sqrt(d) lies in the lower storey after all, so the number equals 2x or 0.
            if is_zero(self):
                raise ZeroDivisionError("inverse of an exact zero")
            return Surd(_reciprocal(self.x + self.x), fmpq(0), self.d)
        scale = _reciprocal(norm)
        return Surd(self.x * scale, -(self.y * scale), self.d)

    def __truediv__(self, other: Exact | int) -> Surd:
        return self * _reciprocal(fmpq(other) if isinstance(other, int) else other)

    def __rtruediv__(self, other: Exact | int) -> Surd:
        return self.inverse() * other


def _storey(value: Exact) -> int:
    return 0 if not isinstance(value, Surd) else 1 + _storey(value.d)


def _reciprocal(value: Exact) -> Exact:
    return value.inverse() if isinstance(value, Surd) else 1 / value


def sqrt_of(d: Exact) -> Exact:
    """The exact non-negative square root of ``d >= 0`` as a number one storey up.

    A rational square of a rational stays rational, which keeps the usual starts cheap.
    """
    if isinstance(d, fmpq):
        numerator, denominator = d.numer().isqrt(), d.denom().isqrt()
        if numerator * numerator == d.numer() and denominator * denominator == d.denom():
            return fmpq(numerator, denominator)
    return Surd(fmpq(0), fmpq(1), d)


def is_zero(value: Exact) -> bool:
    """True if the number is exactly zero."""
    if not isinstance(value, Surd):
        return bool(value == 0)
    x, y, d = value.x, value.y, value.d
    if is_zero(y) or is_zero(d):
        return is_zero(x)
    if not is_zero(x * x - y * y * d):
        return False
    # |x| = |y| sqrt(d): zero unless both have the same sign.
    return is_zero(x) or sign(x) != sign(y)


def sign(value: Exact) -> int:
    """-1, 0 or 1, exactly."""
    if not isinstance(value, Surd):
        return int(value > 0) - int(value < 0)
    if is_zero(value):
        return 0
    for precision in _SIGN_PRECISIONS:
        with flint.ctx.workprec(precision):
            ball = to_ball(value)
        if ball > 0:
            return 1
        if ball < 0:
            return -1
    raise ArithmeticError("the sign of a non-zero number could not be settled")


def to_ball(value: Exact) -> arb:
    """An enclosure of the number at flint's current working precision."""
    if not isinstance(value, Surd):
        return arb(value)
    return to_ball(value.x) + to_ball(value.y) * to_ball(value.d).sqrt()
