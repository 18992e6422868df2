"""The compiled loop behind :mod:`.table`: plain arrays in, arrays filled, nothing checked.

No fast-math, no unbounded loop; held against its interpreted source in the tests.
"""

from __future__ import annotations

from math import floor

import numpy as np
import numpy.typing as npt
from numba import njit

__all__ = ["DEGREE", "SLACK", "fill"]

#: Degree of the polynomials (odd).
DEGREE = 13
#: Share of a period by which pieces reach beyond it.
SLACK = 1e-9

Floats = npt.NDArray[np.float64]


@njit(cache=True, error_model="numpy", nogil=True)
def _two_sum(a: float, b: float) -> tuple[float, float]:
    """Knuth's exact sum: ``a + b = s + e``."""
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


@njit(cache=True, error_model="numpy", nogil=True)
def _two_product(a: float, b: float) -> tuple[float, float]:
    """Dekker's exact product (Veltkamp's split): ``a b = p + e``."""
    p = a * b
    t = 134217729.0 * a
    a1 = t - (t - a)
    a2 = a - a1
    t = 134217729.0 * b
    b1 = t - (t - b)
    b2 = b - b1
    return p, ((a1 * b1 - p) + a1 * b2 + a2 * b1) + a2 * b2


@njit(cache=True, error_model="numpy", nogil=True)
def _find(edges: Floats, time: float, guess: int) -> int:
    """Index of the interval that holds ``time``; neighbours of the last one are tried first."""
    last = edges.size - 2
    if edges[guess] <= time:
        if time < edges[guess + 1] or guess == last:
            return guess
        if guess + 1 == last or time < edges[guess + 2]:
            return guess + 1
    low, high = 0, last
    for _ in range(64):
        if low >= high:
            break
        middle = (low + high + 1) // 2
        if edges[middle] <= time:
            low = middle
        else:
            high = middle - 1
    return low


@njit(cache=True, error_model="numpy", nogil=True)
def _rotation(turns: float, turn: Floats, circle: Floats, out: Floats) -> None:
    """Cosine and sine of ``turns`` times an angle, two words each: ``out`` (4,).

    The angle is taken from the nearest of the circle's even angles; the cosine and sine of the
    rest, at most pi/128, are those of a short series, and the rest of the cosine is that of 1.
    """
    p, e = _two_product(turns, turn[0])
    whole = floor(p / 6.283185307179586)
    q, f = _two_product(whole, 6.283185307179586)
    high = p - q
    low = e - f + turns * turn[1] - whole * 2.4492935982947064e-16
    count = circle.shape[0]
    step = 6.283185307179586 / count
    near = floor(high / step + 0.5)
    # near is a whole number below 2^9 and count a power of two: near 2 pi/count is exact to the
    # words of 2 pi
    p, e = _two_product(near, step)
    rest = (high - p) - e + low - near * (2.4492935982947064e-16 / count)
    square = rest * rest
    sine = rest * (1.0 + square * (-1.0 / 6.0 + square * (1.0 / 120.0 - square / 5040.0)))
    less = square * (-0.5 + square * (1.0 / 24.0 + square * (-1.0 / 720.0 + square / 40320.0)))
    k = int(near) % count
    c, c_low, s, s_low = circle[k, 0], circle[k, 1], circle[k, 2], circle[k, 3]
    out[0], out[1] = _two_sum(c, c_low + (c * less - s * sine))
    out[2], out[3] = _two_sum(s, s_low + (s * less + c * sine))


@njit(cache=True, error_model="numpy", nogil=True)
def _turned(frame: Floats, low: Floats, angle: Floats, out: Floats) -> None:
    """``frame`` turned by an angle with cosine and sine ``angle`` (4,): (3, 2, 2), two words."""
    for row in range(3):
        for column in range(2):
            first, second = (0, 1) if column == 0 else (1, 0)
            sign = 1.0 if column == 0 else -1.0
            c, c_low, s, s_low = angle[0], angle[1], sign * angle[2], sign * angle[3]
            p, e = _two_product(frame[row, first], c)
            q, f = _two_product(frame[row, second], s)
            high, rest = _two_sum(p, q)
            rest += e + f + low[row, first] * c + low[row, second] * s
            rest += frame[row, first] * c_low + frame[row, second] * s_low
            out[row, column, 0], out[row, column, 1] = _two_sum(high, rest)


@njit(cache=True, error_model="numpy", nogil=True)
def _values(coefficients: Floats, index: int, x: float) -> tuple[float, float, float, float, float]:
    """The five polynomials of a piece at ``x``."""
    # c0 + x q(x), the even and odd powers of q apart: two short chains in place of a long one,
    # and all but the last sum rounds quantities that are small beside c0
    square = x * x
    a = coefficients[index, DEGREE, 0]
    a2 = coefficients[index, DEGREE - 1, 0]
    b = coefficients[index, DEGREE, 1]
    b2 = coefficients[index, DEGREE - 1, 1]
    va = coefficients[index, DEGREE, 2]
    va2 = coefficients[index, DEGREE - 1, 2]
    vb = coefficients[index, DEGREE, 3]
    vb2 = coefficients[index, DEGREE - 1, 3]
    tau = coefficients[index, DEGREE, 4]
    tau2 = coefficients[index, DEGREE - 1, 4]
    for k in range(DEGREE - 2, 1, -2):
        a = a * square + coefficients[index, k, 0]
        a2 = a2 * square + coefficients[index, k - 1, 0]
        b = b * square + coefficients[index, k, 1]
        b2 = b2 * square + coefficients[index, k - 1, 1]
        va = va * square + coefficients[index, k, 2]
        va2 = va2 * square + coefficients[index, k - 1, 2]
        vb = vb * square + coefficients[index, k, 3]
        vb2 = vb2 * square + coefficients[index, k - 1, 3]
        tau = tau * square + coefficients[index, k, 4]
        tau2 = tau2 * square + coefficients[index, k - 1, 4]
    a = (a * square + coefficients[index, 1, 0]) + x * a2
    a = coefficients[index, 0, 0] + (x * a + coefficients[index, DEGREE + 1, 0])
    b = (b * square + coefficients[index, 1, 1]) + x * b2
    b = coefficients[index, 0, 1] + (x * b + coefficients[index, DEGREE + 1, 1])
    va = (va * square + coefficients[index, 1, 2]) + x * va2
    va = coefficients[index, 0, 2] + (x * va + coefficients[index, DEGREE + 1, 2])
    vb = (vb * square + coefficients[index, 1, 3]) + x * vb2
    vb = coefficients[index, 0, 3] + (x * vb + coefficients[index, DEGREE + 1, 3])
    tau = (tau * square + coefficients[index, 1, 4]) + x * tau2
    tau = coefficients[index, 0, 4] + (x * tau + coefficients[index, DEGREE + 1, 4])
    return a, b, va, vb, tau


@njit(cache=True, error_model="numpy", nogil=True)
def fill(
    times: Floats,
    start: float,
    edges: Floats,
    centres: Floats,
    scales: Floats,
    coefficients: Floats,
    period: Floats,
    turn: Floats,
    frame: Floats,
    frame_low: Floats,
    circle: Floats,
    position: Floats,
    velocity: Floats,
    clock: Floats,
) -> None:
    """Fill position (n, 3), velocity (n, 3) and the second clock (n,) at ``times`` (n,).

    Parameters
    ----------
    edges, centres, scales : (k + 1,), (k,), (k,)
        Intervals of elapsed time, their centres and the reciprocals of their half-widths.
    coefficients : (k, d + 2, 5)
        Planar position, planar velocity and clock as powers of the scaled time; last the second
        words of the constant terms.
    period : (4,)
        Radial period and the clock's advance over it, each as two words; zero if none.
    turn : (2,)
        Azimuth per period modulo 2 pi, as two words.
    frame, frame_low : (3, 2)
        Unit vectors of the orbit's plane, as two words.
    circle : (m, 4)
        Cosine and sine, two words each, of ``m`` even angles; ``m`` a power of two.
    """
    index, known, turns = 0, 0.0, 0.0
    turned = np.zeros((3, 2, 2))
    angle = np.array([1.0, 0.0, 0.0, 0.0])
    _turned(frame, frame_low, angle, turned)
    back, back_low, on, on_low = 0.0, 0.0, 0.0, 0.0  # what whole periods take from the times, add
    # the pieces reach beyond the period by a little; well inside it the last number of turns may
    # serve again, near its ends it is worked out anew, so that it depends on the time alone
    first = edges[0] + SLACK * period[0]
    inner, outer = first + SLACK * period[0], first + (1.0 - SLACK) * period[0]
    inverse = 1.0 / period[0] if period[0] > 0.0 else 0.0
    for row in range(times.size):
        high, low = _two_sum(times[row], -start)
        if inverse > 0.0:
            reduced = high - back
            if not inner <= reduced <= outer:
                turns = floor((high - first) * inverse)
                if high - turns * period[0] < first:
                    turns -= 1.0
            if turns != known:
                back, back_low = _two_product(turns, period[0])
                back_low += turns * period[1]
                on, on_low = _two_product(turns, period[2])
                on_low += turns * period[3]
                _rotation(turns, turn, circle, angle)
                _turned(frame, frame_low, angle, turned)
                known = turns
            high, rest = _two_sum(high, -back)
            low += rest - back_low
        index = _find(edges, high, index)
        x = ((high - centres[index]) + low) * scales[index]
        a, b, va, vb, tau = _values(coefficients, index, x)
        for k in range(3):
            low_part = turned[k, 0, 1] * a + turned[k, 1, 1] * b
            position[row, k] = turned[k, 0, 0] * a + (turned[k, 1, 0] * b + low_part)
            low_part = turned[k, 0, 1] * va + turned[k, 1, 1] * vb
            velocity[row, k] = turned[k, 0, 0] * va + (turned[k, 1, 0] * vb + low_part)
        total, rest = _two_sum(on, tau)
        clock[row] = total + (rest + on_low)
