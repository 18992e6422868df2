"""Sums that keep what rounding drops, and numbers of two words (about 32 digits).

Knuth's two-sum and Dekker's product with Veltkamp's split (Knuth, The Art of Computer
Programming 2, 4.2.2; Dekker 1971, Numer. Math. 18, 224), compensated summation (Kahan 1965,
CACM 8, 40); the sloppy double-double operations of Hida, Li & Bailey 2001 (ARITH-15) with the
accurate sum.  All from memory; held against exact rationals in the tests.  A number of two words
is a pair ``(high, low)`` with ``|low| <= ulp(high)/2``.
"""

from __future__ import annotations

from math import atan2, sqrt

import numpy as np
import numpy.typing as npt

from truefall.integrators.compiled import kernel

__all__ = ["add", "angle", "compensated_add", "cosine_and_sine", "divide", "multiply", "root"]
__all__ += ["two_product", "two_sum"]

Floats = npt.NDArray[np.float64]
Pair = tuple[float, float]


@kernel
def two_sum(a: float, b: float) -> Pair:
    """``a + b`` exactly, as rounded sum and error."""
    s = a + b
    t = s - a
    return s, (a - (s - t)) + (b - t)


@kernel
def two_product(a: float, b: float) -> Pair:
    """``a b`` exactly, as rounded product and error (no overflow near 1e300)."""
    p = a * b
    t = 134217729.0 * a
    a1 = t - (t - a)
    a2 = a - a1
    t = 134217729.0 * b
    b1 = t - (t - b)
    b2 = b - b1
    return p, ((a1 * b1 - p) + a1 * b2 + a2 * b1) + a2 * b2


@kernel
def add(a: float, a_low: float, b: float, b_low: float) -> Pair:
    """Sum of two pairs, error about 3 units of 2^-106."""
    s, e = two_sum(a, b)
    t, f = two_sum(a_low, b_low)
    s, e = two_sum(s, e + t)
    return two_sum(s, e + f)


@kernel
def multiply(a: float, a_low: float, b: float, b_low: float) -> Pair:
    """Product of two pairs, error about 5 units of 2^-106."""
    p, e = two_product(a, b)
    return two_sum(p, e + (a * b_low + a_low * b))


@kernel
def divide(a: float, a_low: float, b: float, b_low: float) -> Pair:
    """Quotient of two pairs, by two corrections of the rounded one."""
    q = a / b
    p, e = multiply(b, b_low, q, 0.0)
    r, r_low = add(a, a_low, -p, -e)
    q2 = r / b
    p, e = multiply(b, b_low, q2, 0.0)
    r, r_low = add(r, r_low, -p, -e)
    q, e = two_sum(q, q2)
    return add(q, e, r / b, 0.0)


@kernel
def root(a: float, a_low: float) -> Pair:
    """Square root of a positive pair, by one Newton step with the exact square."""
    if a <= 0.0:
        return 0.0, 0.0
    s = sqrt(a)
    p, e = two_product(s, s)
    r, _ = add(a, a_low, -p, -e)
    t, f = two_sum(s, 0.5 * r / s)
    p, e = multiply(t, f, t, f)
    r, _ = add(a, a_low, -p, -e)
    return add(t, f, 0.5 * r / s, 0.0)


@kernel
def cosine_and_sine(a: float, a_low: float) -> tuple[float, float, float, float]:
    """Cosine and sine of a pair: quarter turns taken off (pi/2 in three words), then series."""
    quarters = round(a * 0.6366197723675814)
    p, e = two_product(quarters, 1.5707963267948966)
    x, y = add(a, a_low, -p, -e)
    p, e = two_product(quarters, 6.123233995736766e-17)
    x, y = add(x, y, -p, -e)
    x, y = add(x, y, quarters * 1.4973849048591833e-33, 0.0)
    q, ql = multiply(x, y, x, y)
    c, cl, s, sl = 1.0, 0.0, x, y
    term, low, other, other_low = 1.0, 0.0, x, y
    for m in range(1, 16):
        term, low = multiply(term, low, -q, -ql)
        term, low = divide(term, low, (2.0 * m - 1.0) * (2.0 * m), 0.0)
        c, cl = add(c, cl, term, low)
        other, other_low = multiply(other, other_low, -q, -ql)
        other, other_low = divide(other, other_low, (2.0 * m) * (2.0 * m + 1.0), 0.0)
        s, sl = add(s, sl, other, other_low)
    turn = int(quarters) % 4
    if turn == 1:
        return -s, -sl, c, cl
    if turn == 2:
        return -c, -cl, -s, -sl
    if turn == 3:
        return s, sl, -c, -cl
    return c, cl, s, sl


@kernel
def angle(s: float, s_low: float, c: float, c_low: float) -> Pair:
    """The angle of (c, s) from -pi to pi: the rounded one and one Newton step."""
    rough = atan2(s, c)
    cosine, cosine_low, sine, sine_low = cosine_and_sine(rough, 0.0)
    p, e = multiply(s, s_low, cosine, cosine_low)
    q, f = multiply(c, c_low, sine, sine_low)
    p, e = add(p, e, -q, -f)
    length = sqrt(s * s + c * c)
    return add(rough, 0.0, p / length, 0.0)


@kernel
def compensated_add(y: Floats, carry: Floats, change: Floats) -> None:
    """``y += change``; what rounding drops stays in ``carry`` and joins the next change."""
    for i in range(y.size):
        d = change[i] + carry[i]
        s = y[i] + d
        t = s - y[i]
        carry[i] = (y[i] - (s - t)) + (d - t)
        y[i] = s
