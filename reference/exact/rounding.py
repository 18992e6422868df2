"""From balls to float64: correct rounding, second words, bounds rounded up."""

from __future__ import annotations

from math import inf, nextafter

from flint import arb

__all__ = ["Rounded", "ball_to_float", "round_ball", "upper_float"]

_SMALL, _LARGE = 1e-290, 1e290  # well inside the normal range
_TINIEST = -1080  # below half the smallest subnormal, as a power of two


def _exact_to_float(value: arb) -> float:
    """The float64 nearest to an exact ball (Python's integer division rounds correctly)."""
    quick = float(value)  # rounds to nearest; held against exact integers in the tests
    if _SMALL < abs(quick) < _LARGE:
        return quick
    mantissa, exponent = value.man_exp()
    m, e = int(mantissa), int(exponent)
    if m == 0:
        return 0.0
    top = m.bit_length() + e
    if top < _TINIEST:
        return 0.0 if m > 0 else -0.0
    if top > 1030:
        return inf if m > 0 else -inf
    if e >= 0:
        try:
            return float(m << e)
        except OverflowError:
            return inf if m > 0 else -inf
    return m / (1 << -e)


def ball_to_float(ball: arb) -> float:
    """The float64 nearest to the centre of a ball."""
    return _exact_to_float(ball.mid())


def upper_float(ball: arb) -> float:
    """A float64 not below ``|ball|``."""
    size = ball.abs_upper()
    value = _exact_to_float(size)
    return nextafter(value, inf) if value < inf and arb(value) < size else value


class Rounded:
    """A number as two float64 words with a proven bound.

    Attributes
    ----------
    value, low : float
        ``value + low`` approximates the number to about 32 digits; ``value`` is the nearest
        float64 if ``decided``.
    bound : float
        Proven bound on ``|value - truth|``.
    decided : bool
        Whether the ball settles the nearest float64.
    """

    __slots__ = ("bound", "decided", "low", "value")

    def __init__(self, value: float, low: float, bound: float, decided: bool) -> None:
        self.value, self.low, self.bound, self.decided = value, low, bound, decided


def round_ball(ball: arb) -> Rounded:
    """Round a ball (inside the precision it was made at).  An exact zero stays exactly zero."""
    if ball.is_zero():
        return Rounded(0.0, 0.0, 0.0, True)
    value = _exact_to_float(ball.mid())
    if not ball.is_finite() or value in (inf, -inf):
        return Rounded(value, 0.0, inf, False)
    decided = _exact_to_float(ball.lower()) == value == _exact_to_float(ball.upper())
    rest = ball - arb(value)
    return Rounded(value + 0.0, _exact_to_float(rest.mid()), upper_float(rest), decided)
