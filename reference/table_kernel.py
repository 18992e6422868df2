"""The compiled loop behind :mod:`.table`: plain arrays in, arrays filled, nothing checked.

No fast-math, no unbounded loop; held against its interpreted source in the tests.
"""

from __future__ import annotations

from math import cos, floor, sin

import numpy as np
import numpy.typing as npt
from numba import njit

__all__ = ["fill"]

Floats = npt.NDArray[np.float64]


@njit(cache=True, error_model="numpy")
def _two_sum(a: float, b: float) -> tuple[float, float]:
    """Knuth's exact sum: ``a + b = s + e``."""
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def _turned(frame: Floats, low: Floats, c: float, s: float, out: Floats) -> None:
    """``frame`` turned by an angle: (3, 2, 2), each entry as two words."""
    for row in range(3):
        for column in range(2):
            first, second = (0, 1) if column == 0 else (1, 0)
            sign = s if column == 0 else -s
            p, e = _two_product(frame[row, first], c)
            q, f = _two_product(frame[row, second], sign)
            high, rest = _two_sum(p, q)
            rest += e + f + low[row, first] * c + low[row, second] * sign
            out[row, column, 0], out[row, column, 1] = _two_sum(high, rest)


@njit(cache=True, error_model="numpy")
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
    position: Floats,
    velocity: Floats,
    clock: Floats,
) -> None:
    """Fill position (n, 3), velocity (n, 3) and the second clock (n,) at ``times`` (n,).

    Parameters
    ----------
    edges, centres, scales : (k + 1,), (k,), (k,)
        Intervals of elapsed time, their centres and the reciprocals of their half-widths.
    coefficients : (k, d + 1, 5)
        Planar position, planar velocity and clock as powers of the scaled time.
    period : (4,)
        Radial period and the clock's advance over it, each as two words; zero if none.
    turn : (2,)
        Azimuth per period modulo 2 pi, as two words.
    frame, frame_low : (3, 2)
        Unit vectors of the orbit's plane, as two words.
    """
    degree = coefficients.shape[1] - 1
    index, known = 0, 0.0
    turned = np.zeros((3, 2, 2))
    _turned(frame, frame_low, 1.0, 0.0, turned)
    for row in range(times.size):
        high, low = _two_sum(times[row], -start)
        turns = 0.0
        if period[0] > 0.0:
            turns = floor((high - edges[0]) / period[0])
            if turns != 0.0:
                p, e = _two_product(turns, period[0])
                high, rest = _two_sum(high, -p)
                low += rest - e - turns * period[1]
                high, low = _two_sum(high, low)
                if high < edges[0]:
                    turns -= 1.0
                    high, rest = _two_sum(high, period[0])
                    low += rest + period[1]
        if turns != known:
            p, e = _two_product(turns, turn[0])
            whole = floor(p / 6.283185307179586)
            q, f = _two_product(whole, 6.283185307179586)
            angle = (p - q) + (e - f + turns * turn[1] - whole * 2.4492935982947064e-16)
            c, s = cos(angle), sin(angle)
            _turned(frame, frame_low, c, s, turned)
            known = turns
        index = _find(edges, high, index)
        x = ((high - centres[index]) + low) * scales[index]
        a = coefficients[index, degree, 0]
        b = coefficients[index, degree, 1]
        va = coefficients[index, degree, 2]
        vb = coefficients[index, degree, 3]
        tau = coefficients[index, degree, 4]
        for k in range(degree - 1, -1, -1):
            a = a * x + coefficients[index, k, 0]
            b = b * x + coefficients[index, k, 1]
            va = va * x + coefficients[index, k, 2]
            vb = vb * x + coefficients[index, k, 3]
            tau = tau * x + coefficients[index, k, 4]
        for k in range(3):
            low_part = turned[k, 0, 1] * a + turned[k, 1, 1] * b
            position[row, k] = turned[k, 0, 0] * a + (turned[k, 1, 0] * b + low_part)
            low_part = turned[k, 0, 1] * va + turned[k, 1, 1] * vb
            velocity[row, k] = turned[k, 0, 0] * va + (turned[k, 1, 0] * vb + low_part)
        p, e = _two_product(turns, period[2])
        s2, r2 = _two_sum(p, tau)
        clock[row] = s2 + (r2 + e + turns * period[3])
