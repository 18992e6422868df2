"""The compiled loop behind :mod:`.flight`: motion under a faulty law, by extrapolation.

States are ``y = (x, v, s)``: Cartesian position, velocity per chart time, second clock; GM = c = 1.
The law is a sum of the exact coordinate acceleration, Newton's, post-Newtonian terms and forces,
each with a weight of its own.  No fast-math, bounded loops; nothing is checked here.
"""

from __future__ import annotations

from math import sqrt

import numpy as np
import numpy.typing as npt
from numba import njit

__all__ = ["LAW_SIZE", "fill_flight"]

Floats = npt.NDArray[np.float64]

#: law[0] chart; [1] weight of exact minus Newton; [2], [3] of the first and second post-Newtonian
#: terms; [4] clock rate; [5] 1 for light; [6] 1 if the independent variable is proper time;
#: [7:10] radial, along-track, cross-track acceleration; [10:13] fixed acceleration; [13] drag on
#: v |v|; [14] on v; [15], [16] inverse-cube and inverse-fourth radial terms;
#: [17:27] errors of a method: see :func:`_rate`; [27] the power of 1/r that they grow with.
LAW_SIZE = 28
_COLUMNS = 8
_DIM = 7


@njit(cache=True, error_model="numpy", nogil=True)
def _metric(chart: int, rho: float) -> tuple[float, ...]:
    """``a dT^2 + 2 b dT drho + c drho^2 + q dphi^2`` and derivatives by the chart's radius."""
    if chart == 1:  # isotropic, m = 1/(2 rho)
        m = 0.5 / rho
        up, down = 1.0 + m, 1.0 - m
        f = (down / up) * (down / up)
        cube = up * up * up
        p = cube * up
        slope = -4.0 * m * cube / rho
        return (
            -f, -4.0 * m * down / (rho * cube), 0.0, 0.0, p, slope, rho * rho * p,
            2.0 * rho * p + rho * rho * slope,
        )  # fmt: skip
    r = rho + 1.0 if chart == 2 else rho
    a, da = -(1.0 - 2.0 / r), -2.0 / (r * r)
    if chart == 3:
        b, db, c, dc = 2.0 / r, -2.0 / (r * r), 1.0 + 2.0 / r, -2.0 / (r * r)
    elif chart == 4:
        b = sqrt(2.0 / r)
        db, c, dc = -0.5 * b / r, 1.0, 0.0
    elif chart == 5:
        b, db, c, dc = 1.0, 0.0, 0.0, 0.0
    else:
        b, db, c = 0.0, 0.0, -1.0 / a
        dc = da / (a * a)
    return a, da, b, db, c, dc, r * r, 2.0 * r


@njit(cache=True, error_model="numpy", nogil=True)
def _post_newtonian(
    chart: int, rho: float, vr: float, vt2: float
) -> tuple[float, float, float, float]:
    """First and second order beyond Newton: radial, and per tangential velocity (own expansion).

    Harmonic: the test-body terms of the equations of motion in Kidder 1995, Phys. Rev. D 52, 821
    (from memory).
    """
    w = 1.0 / rho
    if chart == 1:
        return (
            4.0 * w**3 - vt2 * w * w + 3.0 * vr * vr * w * w,
            -8.75 * w**4 + 0.5 * vt2 * w**3 - 0.5 * vr * vr * w**3,
            4.0 * vr * w * w, -vr * w**3,
        )  # fmt: skip
    if chart == 2:
        return (
            4.0 * w**3 - (vt2 - 3.0 * vr * vr) * w * w, -9.0 * w**4,
            4.0 * vr * w * w, -2.0 * vr * w**3,
        )  # fmt: skip
    return (
        2.0 * w**3 - 2.0 * vt2 * w * w + 3.0 * vr * vr * w * w, 6.0 * vr * vr * w**3,
        2.0 * vr * w * w, 4.0 * vr * w**3,
    )  # fmt: skip


@njit(cache=True, error_model="numpy", nogil=True)
def _clock_rate(law: Floats, coefficients: tuple[float, ...], vr: float, vt2: float,
                rho: float) -> float:  # fmt: skip
    a, _, b, _, c, _, q, _ = coefficients
    if law[5] != 0.0:
        return -a - b * vr
    kind = int(law[4])
    if kind == 1:  # the static field's factor left out
        return sqrt(max(1.0 - vr * vr - vt2, 0.0))
    if kind == 2:  # motion left out
        return sqrt(max(-a, 0.0))
    if kind == 3:  # first order
        return 1.0 - 1.0 / rho - 0.5 * (vr * vr + vt2)
    return sqrt(max(-(a + 2.0 * b * vr + c * vr * vr + q / (rho * rho) * vt2), 0.0))


@njit(cache=True, error_model="numpy", nogil=True)
def _rate(y: Floats, law: Floats, out: Floats) -> None:
    """``dy`` per chart time, or per proper time if ``law[6]`` says so."""
    x0, x1, x2, v0, v1, v2 = y[0], y[1], y[2], y[3], y[4], y[5]
    rho = sqrt(x0 * x0 + x1 * x1 + x2 * x2)
    n0, n1, n2 = x0 / rho, x1 / rho, x2 / rho
    vr = n0 * v0 + n1 * v1 + n2 * v2
    t0, t1, t2 = v0 - n0 * vr, v1 - n1 * vr, v2 - n2 * vr
    vt2 = t0 * t0 + t1 * t1 + t2 * t2
    chart = int(law[0])
    metric = _metric(chart, rho)
    a, da, b, db, c, dc, q, dq = metric
    radial, across = -1.0 / (rho * rho), 0.0
    if law[1] != 0.0:
        det = a * c - b * b
        s_time = da * vr + db * vr * vr
        s_radial = -0.5 * da + 0.5 * dc * vr * vr - 0.5 * dq * vt2 / (rho * rho)
        g_time = (c * s_time - b * s_radial) / det
        g_radial = (-b * s_time + a * s_radial) / det
        exact = -g_radial + vr * g_time - vt2 / rho
        radial += law[1] * (exact - radial)
        across += law[1] * (g_time - dq / q * vr + 2.0 * vr / rho)
    if law[2] != 0.0 or law[3] != 0.0:
        r1, r2, s1, s2 = _post_newtonian(chart, rho, vr, vt2)
        radial += law[2] * r1 + law[3] * r2
        across += law[2] * s1 + law[3] * s2
    speed = sqrt(vr * vr + vt2)
    radial += law[7] + law[15] / rho**3 + law[16] / rho**4
    pull = (law[8] / speed if speed > 0.0 else 0.0) - law[13] * speed - law[14]
    turn = sqrt(vt2)
    side = law[9] / turn if turn > 0.0 else 0.0
    # what a method's truncation adds to both rates: terms that keep the sense of time, then terms
    # that do not, times (step / local time)^p
    gx = gv = 0.0
    if law[27] != 0.0:
        size = rho ** (-law[27])
        root = sqrt(rho)
        bend = vr * vr * rho
        gx = size * (law[17] * rho * vr + law[23] / root)
        gv = size * (law[18] + law[19] * bend + law[24] * root * vr)
        radial += size * (law[20] + law[21] * bend + law[25] * root * vr) / (rho * rho)
        pull += size * (law[22] * vr / rho + law[26] / (rho * root))
    rate = _clock_rate(law, metric, vr, vt2, rho)
    per = 1.0 / rate if law[6] != 0.0 else 1.0
    out[0] = (v0 * (1.0 + gv) + gx * n0) * per
    out[1] = (v1 * (1.0 + gv) + gx * n1) * per
    out[2] = (v2 * (1.0 + gv) + gx * n2) * per
    out[3] = (n0 * radial + t0 * across + v0 * pull + side * (n1 * t2 - n2 * t1) + law[10]) * per
    out[4] = (n1 * radial + t1 * across + v1 * pull + side * (n2 * t0 - n0 * t2) + law[11]) * per
    out[5] = (n2 * radial + t2 * across + v2 * pull + side * (n0 * t1 - n1 * t0) + law[12]) * per
    out[6] = per if law[6] != 0.0 else rate


@njit(cache=True, error_model="numpy", nogil=True)
def _midpoint(y: Floats, slope: Floats, law: Floats, step: float, parts: int, change: Floats,
              work: Floats) -> None:  # fmt: skip
    """Gragg's modified midpoint rule: the change of ``y`` over a step of so many parts."""
    h = step / parts
    for i in range(_DIM):
        work[0, i] = 0.0
        work[1, i] = h * slope[i]
    for _ in range(1, parts):
        for i in range(_DIM):
            work[2, i] = y[i] + work[1, i]
        _rate(work[2], law, work[3])
        for i in range(_DIM):
            later = work[0, i] + 2.0 * h * work[3, i]
            work[0, i] = work[1, i]
            work[1, i] = later
    for i in range(_DIM):
        change[i] = work[1, i]


@njit(cache=True, error_model="numpy", nogil=True)
def _step(y: Floats, law: Floats, step: float, tolerance: float, table: Floats, work: Floats,
          slope: Floats) -> tuple[float, int]:  # fmt: skip
    """One extrapolated step; the change is left in ``table[0]``.  Error over tolerance, columns.

    Gragg 1965; Bulirsch and Stoer 1966 (from memory), step numbers 2, 4, 6, ...
    """
    _rate(y, law, slope)
    place = sqrt(y[0] ** 2 + y[1] ** 2 + y[2] ** 2)
    pace = sqrt(y[3] ** 2 + y[4] ** 2 + y[5] ** 2) + 1.0 / sqrt(place)
    error = np.inf
    for k in range(_COLUMNS):
        parts = 2 * (k + 1)
        _midpoint(y, slope, law, step, parts, table[k], work)
        for j in range(k - 1, -1, -1):
            ratio = (parts / (2.0 * (j + 1))) ** 2 - 1.0
            for i in range(_DIM):
                table[j, i] = table[j + 1, i] + (table[j + 1, i] - table[j, i]) / ratio
        if k >= 1:
            error = 0.0
            for i in range(_DIM):
                size = place if i < 3 else (pace if i < 6 else place**1.5)
                error = max(error, abs(table[0, i] - work[4, i]) / (tolerance * size))
            if not error > 1.0:
                return error, k + 1
        for i in range(_DIM):
            work[4, i] = table[0, i]
    return error, _COLUMNS


@njit(cache=True, error_model="numpy", nogil=True)
def fill_flight(start: Floats, law: Floats, times: Floats, inner: float, tolerance: float,
                limit: int, out: Floats) -> tuple[int, int]:  # fmt: skip
    """States at monotonic times counted from the start's, (m, 7); rows reached and steps used.

    ``inner`` is the chart radius at which the motion is given up, ``limit`` the most steps.
    """
    y = start.copy()
    lost = np.zeros(_DIM)  # compensated sums: what each addition has dropped (Kahan 1965)
    table, work, slope = np.empty((_COLUMNS, _DIM)), np.empty((5, _DIM)), np.empty(_DIM)
    now = 0.0
    away = 1.0 if times.size and times[-1] >= 0.0 else -1.0
    usual = 0.1 * sqrt(start[0] ** 2 + start[1] ** 2 + start[2] ** 2) ** 1.5
    used = 0
    for row in range(times.size):
        for _ in range(limit):
            left = (times[row] - now) * away
            if left <= 0.0:
                break
            step = min(left, usual)
            error, columns = _step(y, law, away * step, tolerance, table, work, slope)
            used += 1
            if used > limit or not usual > 1e-14 * (abs(now) + 1e-6):
                return row, used
            if not error <= 1.0:
                usual = step * (0.5 if error < 1e6 else 0.2)
                continue
            for i in range(_DIM):
                term = table[0, i] - lost[i]
                total = y[i] + term
                lost[i] = (total - y[i]) - term
                y[i] = total
            now = times[row] if step == left else now + away * step
            if step == usual or columns == _COLUMNS:
                usual = step * (1.5 if columns < 6 else 1.15 if columns == 6 else 0.85)
            if not sqrt(y[0] ** 2 + y[1] ** 2 + y[2] ** 2) > inner:
                return row, used
        for i in range(_DIM):
            out[row, i] = y[i]
    return int(times.size), used
