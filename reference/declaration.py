"""What a start declares: systems, charts, clocks, and numbers checked once at the entrance."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from math import isfinite

from flint import fmpq

from truefall.reference.exact.start import INGOING, StartError

__all__ = [
    "CHARTS",
    "CLOCKS",
    "PARTICLES",
    "SYSTEMS",
    "choice",
    "finite_number",
    "rational",
    "three_numbers",
]

#: Exact speed of light in each system's units (BIPM, SI brochure, 9th edition 2019).
SYSTEMS = {
    "geometric": Fraction(1),
    "SI": Fraction(299_792_458),
    "astronomical": Fraction(299_792_458, 1000),
}
CHARTS = ("areal", "isotropic", "harmonic", *INGOING)
PARTICLES = ("massive", "light")
CLOCKS = ("coordinate", "proper")


def choice(value: str, allowed: Sequence[str], key: str) -> str:
    """``value`` if allowed, else StartError with the list."""
    if value not in allowed:
        raise StartError(f"{key} is {value!r}; allowed are {', '.join(allowed)}", key)
    return value


def finite_number(value: object, key: str) -> float:
    """A finite float, else StartError naming the key."""
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        raise StartError(f"{key} must be a number, not {value!r}", key) from None
    if not isfinite(number):
        raise StartError(f"{key} must be finite, not {number}", key)
    return number


def three_numbers(values: object, key: str) -> tuple[float, float, float]:
    """Three finite floats, else StartError naming the key."""
    items = list(values) if not isinstance(values, str) else []  # type: ignore[call-overload]
    if len(items) != 3:
        raise StartError(f"{key} must hold three numbers", key)
    a, b, c = (finite_number(v, key) for v in items)
    return a, b, c


def rational(value: Fraction) -> fmpq:
    """The same rational in flint's type."""
    return fmpq(value.numerator, value.denominator)
