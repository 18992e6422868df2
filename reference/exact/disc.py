"""Truncated power series together with a bound on a disc of the complex plane.

A :class:`Disc` is an analytic function known by its first ``n`` Taylor coefficients (balls) and
by a bound ``|f| <= 2^sup`` on ``|x| <= 2^radius``.  Cauchy's estimate then bounds every omitted
coefficient, ``|f_k| <= 2^(sup - k radius)``, and so the remainder anywhere inside.  Sums,
products, reciprocals and square roots carry the bound along.

Magnitudes are kept as base-2 logarithms in float64: they only steer radii and bounds, and every
step is inflated by :data:`SLACK`, which exceeds the rounding error of that arithmetic by a
factor of a thousand.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from math import inf, log2

import flint
import numpy as np
import numpy.typing as npt
from flint import arb, arb_series

__all__ = [
    "SLACK",
    "Disc",
    "TooSmall",
    "log2_lower",
    "log2_upper",
    "pow2_ball",
    "series_logs",
    "tail_log2",
    "working",
]

SLACK = 1e-9
_KEEP = 1.0 / 16.0  # a reciprocal's argument keeps at least this share of its central value

Floats = npt.NDArray[np.float64]


@contextmanager
def working(precision: int) -> Iterator[None]:
    """Set flint's working precision, and lift its cap on the length of series."""
    cap = flint.ctx.cap
    flint.ctx.cap = 1 << 20
    try:
        with flint.ctx.workprec(precision):
            yield
    finally:
        flint.ctx.cap = cap


class TooSmall(ArithmeticError):
    """No disc is left on which the function is bounded: its centre sits on a singularity."""


def _log2(ball: arb) -> float:
    """Base-2 logarithm of an exact positive ball; ``-inf`` for zero."""
    mantissa, exponent = ball.man_exp()
    if mantissa == 0:
        return -inf
    m = int(mantissa)
    shift = max(m.bit_length() - 60, 0)
    return log2(m >> shift) + shift + int(exponent)


def log2_upper(ball: arb) -> float:
    """An upper bound of ``log2 |ball|``."""
    size = ball.abs_upper()
    value = float(size)  # the centre, to half an ulp
    if 1e-290 < value < 1e290:
        return log2(value) + SLACK
    return _log2(size) + SLACK


def log2_lower(ball: arb) -> float:
    """A lower bound of ``log2 |ball|``; ``-inf`` if the ball contains zero."""
    return _log2(ball.abs_lower()) - SLACK


def series_logs(coefficients: list[arb]) -> Floats:
    """Upper bounds of ``log2 |c_k|``."""
    return np.array([log2_upper(c) for c in coefficients])


def tail_log2(sup: float, ratio: float, order: int) -> float:
    """``log2`` of ``2^sup sum_{k >= order} q^k`` with ``q = 2^ratio < 1``."""
    return sup + order * ratio - log2(-np.expm1(ratio * 0.6931471805599453)) + SLACK


def _log2_sum(terms: Floats) -> float:
    top = float(np.max(terms)) if terms.size else -inf
    if top == -inf:
        return -inf
    return top + log2(float(np.sum(np.exp2(terms - top)))) + SLACK


def pow2_ball(exponent: float) -> arb:
    """The ball ``0 +/- 2^exponent``, rounded outward."""
    if exponent == -inf:
        return arb(0)
    whole = int(np.floor(exponent))
    return arb(0, 1) * arb((1 + int((2.0 ** (exponent - whole)) * 2.0**20), whole - 20))


@dataclass(frozen=True)
class Disc:
    """``f(x) = sum_k f_k x^k`` with ``|f| <= 2^sup`` on ``|x| <= 2^radius``.

    ``series`` holds the first ``n`` coefficients; ``logs`` bounds their magnitudes.  ``exact``
    marks a polynomial (nothing omitted).
    """

    series: arb_series
    logs: Floats
    radius: float
    sup: float
    exact: bool = False

    @classmethod
    def build(cls, series: arb_series, order: int, radius: float, sup: float) -> Disc:
        """A disc from a series, padding the list of magnitudes to ``order``."""
        logs = series_logs(series.coeffs())
        if logs.size < order:
            logs = np.concatenate([logs, np.full(order - logs.size, -inf)])
        return cls(series, logs[:order], radius, sup)

    @property
    def order(self) -> int:
        """Number of coefficients kept."""
        return int(self.logs.size)

    def tail(self, radius: float) -> float:
        """``log2`` bound of the omitted terms on ``|x| <= 2^radius``."""
        if self.exact:
            return -inf
        return tail_log2(self.sup, radius - self.radius, self.order)

    def shrink(self, radius: float) -> Disc:
        """The same function on a smaller disc, with the bound taken from its coefficients."""
        return Disc(self.series, self.logs, radius, self.bound(radius), self.exact)

    def bound(self, radius: float, first: int = 0) -> float:
        """``log2`` bound of ``|sum_{k >= first} f_k x^k|`` on the smaller disc."""
        k = np.arange(first, self.order)
        return _log2_sum(np.append(self.logs[first:] + k * radius, self.tail(radius)))

    def __add__(self, other: Disc) -> Disc:
        radius = min(self.radius, other.radius)
        sup = float(np.logaddexp2(self._sup_on(radius), other._sup_on(radius))) + SLACK
        order = min(self.order, other.order)
        return Disc.build(self.series + other.series, order, radius, sup)

    def __mul__(self, other: Disc) -> Disc:
        radius = min(self.radius, other.radius)
        order = min(self.order, other.order)
        sup = self._sup_on(radius) + other._sup_on(radius) + SLACK
        return Disc.build(self.series * other.series, order, radius, sup)

    def _sup_on(self, radius: float) -> float:
        """The bound on a smaller disc: from the coefficients where that pays."""
        return self.sup if self.radius - radius < 0.5 else self.bound(radius)

    def scaled(self, factor: arb, offset: arb | int = 0) -> Disc:
        """``factor * f + offset``."""
        series = self.series * factor + offset
        sup = float(np.logaddexp2(self.sup + log2_upper(factor), log2_upper(arb(offset)))) + SLACK
        disc = Disc.build(series, self.order, self.radius, sup)
        return Disc(disc.series, disc.logs, disc.radius, disc.sup, self.exact)

    def clear_radius(self) -> float:
        """The largest radius (to a few per cent) on which ``|f| >= |f_0| / 16`` is certain."""
        floor = log2_lower(self.series[0])
        if floor == -inf:
            raise TooSmall("the function vanishes at the centre")
        target = floor + log2(1 - _KEEP) - SLACK
        # With an exact polynomial any radius may serve; otherwise the tail must converge.
        high = self.radius - (0.0 if self.exact else 0.1)
        if self.bound(high, 1) <= target:
            return high
        low = high - 1.0
        for _ in range(60):
            if self.bound(low, 1) <= target:
                break
            high, low = low, low - 2.0 * (high - low)
        else:
            raise TooSmall("no disc around the centre is free of zeros")
        while high - low > 0.03:
            middle = 0.5 * (low + high)
            if self.bound(middle, 1) <= target:
                low = middle
            else:
                high = middle
        return low

    def inverse(self) -> Disc:
        """``1/f`` on the largest disc found that is clear of zeros."""
        radius = self.clear_radius()
        sup = -(log2_lower(self.series[0]) + log2(_KEEP)) + SLACK
        return Disc.build(self.series.inv(), self.order, radius, sup)

    def sqrt(self) -> Disc:
        """``sqrt(f)`` on the largest disc found that is clear of zeros."""
        radius = self.clear_radius()
        return Disc.build(self.series.sqrt(), self.order, radius, 0.5 * self.bound(radius) + SLACK)

    def shifted(self, places: int) -> Disc:
        """``f(x) / x^places`` for a function whose first coefficients vanish (maximum modulus)."""
        coefficients = self.series.coeffs()[places:]
        series = arb_series(coefficients, self.order - places)
        sup = self.sup - places * self.radius + SLACK
        disc = Disc.build(series, self.order - places, self.radius, sup)
        return Disc(disc.series, disc.logs, disc.radius, disc.sup, self.exact)
