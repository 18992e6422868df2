"""Truncated Taylor series that grow by one coefficient at a time, over any numbers.

The numbers may be ``mpmath.mpf`` or (faster) ``gmpy2.mpfr``; only ``+ - * /`` are used.
"""

from __future__ import annotations

from operator import mul
from typing import Any


class Series:
    """Coefficients known so far (``c``); subclasses find the next one in :meth:`extend`."""

    def __init__(self, tape: list[Series] | None) -> None:
        self.c: list[Any] = []
        self.tape = tape
        if tape is not None:
            tape.append(self)

    def extend(self) -> None:
        """Append one coefficient; variables are extended by whoever integrates."""

    def __mul__(self, other: Any) -> Series:
        return Product(self, other) if isinstance(other, Series) else Scaled(self, other, 0)

    __rmul__ = __mul__

    def __add__(self, other: Any) -> Series:
        if isinstance(other, Series):
            return Total(self, other)
        return Scaled(self, 1, other)

    __radd__ = __add__

    def __sub__(self, other: Any) -> Series:
        return self + (-1) * other

    def __rsub__(self, other: Any) -> Series:
        return Scaled(self, -1, other)

    def __truediv__(self, other: int) -> Series:
        return Scaled(self, 1, 0, other)

    def __rtruediv__(self, other: Any) -> Series:
        return Reciprocal(self, other)


class Variable(Series):
    """A series whose coefficients are set from outside."""

    def __init__(self, start: Any) -> None:
        super().__init__(None)
        self.c.append(start)


class Product(Series):
    """Cauchy product."""

    def __init__(self, left: Series, right: Series) -> None:
        super().__init__(left.tape if left.tape is not None else right.tape)
        self.left, self.right = left.c, right.c

    def extend(self) -> None:
        k = len(self.c) + 1
        self.c.append(sum(map(mul, self.left[:k], reversed(self.right[:k]))))


class Scaled(Series):
    """``factor x + constant`` (over an integer divisor)."""

    def __init__(self, base: Series, factor: Any, constant: Any, divisor: int = 1) -> None:
        super().__init__(base.tape)
        self.base, self.factor, self.constant, self.divisor = base.c, factor, constant, divisor

    def extend(self) -> None:
        k = len(self.c)
        term = self.factor * self.base[k]
        if self.divisor != 1:
            term = term / self.divisor
        self.c.append(term + self.constant if k == 0 else term)


class Total(Series):
    """Sum of two series."""

    def __init__(self, left: Series, right: Series) -> None:
        super().__init__(left.tape if left.tape is not None else right.tape)
        self.left, self.right = left.c, right.c

    def extend(self) -> None:
        k = len(self.c)
        self.c.append(self.left[k] + self.right[k])


class Reciprocal(Series):
    """``constant / x`` from ``x y = constant``."""

    def __init__(self, base: Series, constant: Any) -> None:
        super().__init__(base.tape)
        self.base, self.constant = base.c, constant

    def extend(self) -> None:
        k = len(self.c)
        known = sum(map(mul, self.base[1 : k + 1], reversed(self.c[:k])))
        self.c.append(((self.constant if k == 0 else 0) - known) / self.base[0])


class Power(Series):
    """``x^(numerator/denominator)``, from ``x y' = exponent x' y`` (first value given)."""

    def __init__(self, base: Series, first: Any, numerator: int, denominator: int) -> None:
        super().__init__(base.tape)
        self.base, self.first = base.c, first
        self.numerator, self.denominator = numerator, denominator

    def extend(self) -> None:
        k = len(self.c)
        if k == 0:
            self.c.append(self.first)
            return
        n, d, q, y = self.numerator, self.denominator, self.base, self.c
        known = sum((n * j - d * (k - j)) * (q[j] * y[k - j]) for j in range(1, k + 1))
        self.c.append(known / (d * k * q[0]))


def evaluate(coefficients: list[Any], h: Any) -> Any:
    """Horner."""
    total = coefficients[-1]
    for c in reversed(coefficients[:-1]):
        total = total * h + c
    return total
