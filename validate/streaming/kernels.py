"""The compiled loops over rows: errors, drifts and margins of a block, reduced to a few numbers.

Every block of rows is reduced by itself, in the order of its rows, so that the result depends
neither on how many blocks are read at a time nor on the thread that reduces them.
"""

from __future__ import annotations

from math import isfinite, sqrt

import numpy as np
import numpy.typing as npt
from numba import njit

from truefall.reference.invariants_kernel import invariants_of

__all__ = ["COUNTS", "LAWS", "QUANTITIES", "reduce_block", "usable_rows"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

#: Errors of which largest, mean square and row of the largest are kept, in this order.
QUANTITIES = (
    "position", "radial", "along", "cross", "velocity", "clock", "energy", "angular_momentum",
    "direction", "norm",
)  # fmt: skip
#: Drifts whose slope is kept.
LAWS = ("energy", "angular_momentum", "norm")
#: Outcomes of a row against a tolerance.
COUNTS = ("pass", "undecided", "fail")
#: Roundings of a computed difference and its norm, as in the comparison of short files.
_ROUNDING = 5 * 2.0**-52
_ROUNDINGS = 16 * 2.0**-52
_EPS = 2.0**-52
_STEP = 2.0**-26


@njit(cache=True, error_model="numpy", nogil=True)
def usable_rows(time: Floats, values: Floats, before: float, sense: float) -> int:
    """Index of the first row that is not finite or not past the one before it, or -1.

    Parameters
    ----------
    time, values : (n,), (n, k)
    before : float
        The time of the row before; NaN for none.
    sense : float
        1 for increasing stamps, -1 for decreasing ones.
    """
    last = before
    for i in range(time.size):
        if not isfinite(time[i]) or sense * (time[i] - last) <= 0.0:
            return i
        last = time[i]
        for k in range(values.shape[1]):
            if not isfinite(values[i, k]):
                return i
    return -1


@njit(cache=True, error_model="numpy", nogil=True)
def _openness(
    chart: int, light: bool, s: Floats, digits_x: float, digits_v: float, out: Floats
) -> None:
    """What half a unit of a state's digits does to E - 1 and |L|: ``out`` (2,), GM = c = 1."""
    out[0] = out[1] = 0.0
    for k in range(6):
        base = 0 if k < 3 else 3
        size = sqrt(s[base] * s[base] + s[base + 1] * s[base + 1] + s[base + 2] * s[base + 2])
        half_unit = (digits_x if k < 3 else digits_v) + 2.0 * _EPS * size
        step = max(half_unit, _STEP * (size if size > 0.0 else 1.0))
        keep = s[k]
        s[k] = keep + step
        e, a, b, c, _, _ = invariants_of(chart, light, s[0], s[1], s[2], s[3], s[4], s[5])
        s[k] = keep - step
        e2, a2, b2, c2, _, _ = invariants_of(chart, light, s[0], s[1], s[2], s[3], s[4], s[5])
        s[k] = keep
        width = half_unit / (2.0 * step)
        out[0] += abs(e - e2) * width
        a, b, c = a - a2, b - b2, c - c2
        out[1] += sqrt(a * a + b * b + c * c) * width


@njit(cache=True, error_model="numpy", nogil=True)
def _reduce(values: Floats, first: int, k: int, largest: Floats, where: Ints) -> None:
    """Largest size and its row, sum of squares and number of the finite values of a quantity."""
    best, row, squares, number = -1.0, -1, 0.0, 0
    for i in range(values.size):
        size = abs(values[i])
        if size <= 1e300:
            squares += size * size
            number += 1
            if size > best:
                best, row = size, i
    if row >= 0:
        largest[k, 0], where[k] = best, first + row
    largest[k, 1], largest[k, 2] = squares, number


@njit(cache=True, error_model="numpy", nogil=True)
def _line(time: Floats, values: Floats, middle: float, share: float, k: int, laws: Floats) -> None:
    """Sums of a least-squares line: n, t, v, t^2, t v; t in units of the whole span."""
    n, st, sv, stt, stv = 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(values.size):
        v = values[i]
        if abs(v) <= 1e300:
            t = (time[i] - middle) * share
            n += 1.0
            st += t
            sv += v
            stt += t * t
            stv += t * v
    laws[k, 0], laws[k, 1], laws[k, 2], laws[k, 3], laws[k, 4] = n, st, sv, stt, stv


@njit(cache=True, error_model="numpy", nogil=True)
def _positions(
    x: Floats, expected: Floats, ax: float, ay: float, az: float, share: float, work: Floats,
    guard: Floats,
) -> None:  # fmt: skip
    """Position errors: rows 0 to 3 of ``work`` total, radial, along, cross; row 0 of ``guard``."""
    for i in range(x.shape[0]):
        ex, ey, ez = expected[i, 0], expected[i, 1], expected[i, 2]
        dx, dy, dz = x[i, 0] - ex, x[i, 1] - ey, x[i, 2] - ez
        size = sqrt(ex * ex + ey * ey + ez * ez)
        inverse = 1.0 / size if size > 0.0 else 0.0
        distance = sqrt(dx * dx + dy * dy + dz * dz)
        work[0, i] = distance
        work[1, i] = (dx * ex + dy * ey + dz * ez) * inverse
        tx, ty, tz = ay * ez - az * ey, az * ex - ax * ez, ax * ey - ay * ex
        work[2, i] = (dx * tx + dy * ty + dz * tz) * inverse
        work[3, i] = dx * ax + dy * ay + dz * az
        guard[0, i] = share * size + _ROUNDING * distance


@njit(cache=True, error_model="numpy", nogil=True)
def _velocities(
    v: Floats, expected: Floats, share: float, slowest: float, work: Floats, guard: Floats
) -> None:
    """Velocity errors: row 4 of ``work``, row 1 of ``guard``."""
    for i in range(v.shape[0]):
        ex, ey, ez = expected[i, 0], expected[i, 1], expected[i, 2]
        dx, dy, dz = v[i, 0] - ex, v[i, 1] - ey, v[i, 2] - ez
        error = sqrt(dx * dx + dy * dy + dz * dz)
        fast = sqrt(ex * ex + ey * ey + ez * ez)
        work[4, i] = error
        guard[1, i] = share * max(fast, slowest) + _ROUNDING * error


@njit(cache=True, error_model="numpy", nogil=True)
def _drifts(
    x: Floats, v: Floats, orbit: Floats, chart: int, light: bool, work: Floats
) -> None:  # fmt: skip
    """Drifts: rows 6 energy, 7 momentum, 8 tilt, 9 norm, 10 size of the momentum."""
    length, speed, true = 1.0 / orbit[0], 1.0 / orbit[1], orbit[3]
    nx, ny, nz = orbit[4], orbit[5], orbit[6]
    for i in range(x.shape[0]):
        e, lx, ly, lz, null, scale = invariants_of(
            chart, light, x[i, 0] * length, x[i, 1] * length, x[i, 2] * length,
            v[i, 0] * speed, v[i, 1] * speed, v[i, 2] * speed,
        )  # fmt: skip
        moment = sqrt(lx * lx + ly * ly + lz * lz)
        unit = true
        if true == 0.0:  # radial orbits have none: sqrt(GM r), light: r
            far = sqrt(x[i, 0] * x[i, 0] + x[i, 1] * x[i, 1] + x[i, 2] * x[i, 2]) * length
            unit = far if light else sqrt(far)
        kx, ky, kz = ly * nz - lz * ny, lz * nx - lx * nz, lx * ny - ly * nx
        work[8, i] = sqrt(kx * kx + ky * ky + kz * kz) / moment
        lx, ly, lz = lx - nx * true, ly - ny * true, lz - nz * true
        work[7, i] = sqrt(lx * lx + ly * ly + lz * lz) / unit
        work[10, i] = (moment - true) / unit
        work[9, i] = null
        work[6, i] = (e - orbit[2]) / scale


@njit(cache=True, error_model="numpy", nogil=True)
def _drift_guards(
    x: Floats, v: Floats, digits: Floats, orbit: Floats, chart: int, light: bool, guard: Floats
) -> None:
    """What the digits of the states do to their drifts: rows 3 and 4 of ``guard``."""
    length, speed, true = orbit[0], orbit[1], orbit[3]
    state, loose = np.zeros(6), np.zeros(2)
    many = digits.shape[1] > 1
    for i in range(x.shape[0]):
        for k in range(3):
            state[k] = x[i, k] / length
            state[3 + k] = v[i, k] / speed
        b = i if many else 0
        _openness(chart, light, state, digits[0, b] / length, digits[1, b] / speed, loose)
        _, _, _, _, _, scale = invariants_of(
            chart, light, state[0], state[1], state[2], state[3], state[4], state[5]
        )
        unit = true
        if true == 0.0:
            far = sqrt(state[0] * state[0] + state[1] * state[1] + state[2] * state[2])
            unit = far if light else sqrt(far)
        guard[3, i] = (loose[0] + orbit[10]) / scale + _ROUNDINGS
        guard[4, i] = (loose[1] + orbit[11]) / unit + _ROUNDINGS


@njit(cache=True, error_model="numpy", nogil=True)
def _keep(row: int, distance: float, number: int, rows: Ints, margins: Floats) -> None:
    """Keep an open row if there is room, or in place of one farther from the tolerance."""
    room = rows.size
    if number < room:
        rows[number], margins[number] = row, distance
        return
    worst = 0
    for i in range(1, room):
        if margins[i] > margins[worst]:
            worst = i
    if distance < margins[worst]:
        rows[worst], margins[worst] = row, distance


@njit(cache=True, error_model="numpy", nogil=True)
def _hold(
    values: Floats, guard: Floats, tolerance: float, growing: bool, revolutions: Floats,
    judged: npt.NDArray[np.bool_], first: int, counts: Ints, rows: Ints, open_rows: Ints,
    open_margins: Floats,
) -> None:  # fmt: skip
    """Hold the rows of a quantity against a tolerance.

    ``rows`` (5,): the row with the smallest margin that passes, is open, fails; the rows that
    pass and that fail nearest to the tolerance.
    """
    best = np.full(5, np.inf)
    passes, open_, fails = 0, 0, 0
    told = judged.size > 1
    for i in range(values.size):
        if told and not judged[i]:
            continue
        limit = tolerance * max(revolutions[i], 1.0) if growing else tolerance
        d, w = abs(values[i]), guard[i]
        margin = limit - (d + w)
        distance = abs(limit - d)
        if d + w <= limit:
            passes += 1
            if margin < best[0]:
                best[0], rows[0] = margin, first + i
            if distance < best[3]:
                best[3], rows[3] = distance, first + i
        elif d - w > limit:
            fails += 1
            if margin < best[2]:
                best[2], rows[2] = margin, first + i
            if distance < best[4]:
                best[4], rows[4] = distance, first + i
        else:  # also a row without a value
            if not isfinite(margin):
                margin, distance = -1e300, 0.0
            _keep(first + i, distance, open_, open_rows, open_margins)
            open_ += 1
            if margin < best[1]:
                best[1], rows[1] = margin, first + i
    counts[0], counts[1], counts[2] = passes, open_, fails


@njit(cache=True, error_model="numpy", nogil=True)
def reduce_block(
    first: int, time: Floats, position: Floats, velocity: Floats, clock: Floats,
    expected_x: Floats, expected_v: Floats, expected_c: Floats,
    shares: Floats, extra: Floats, digits: Floats, judged: npt.NDArray[np.bool_],
    revolutions: Floats, tolerances: Floats, kinds: Ints, growing: Ints,
    orbit: Floats, chart: int, light: bool, work: Floats, guard: Floats,
    largest: Floats, where: Ints, laws: Floats, counts: Ints, rows: Ints,
    open_rows: Ints, open_margins: Floats,
) -> None:  # fmt: skip
    """Reduce a block of ``n`` rows; every output belongs to the block alone.

    Parameters
    ----------
    first : int
        The first row's number in the file.
    velocity, clock : (n, 3), (n,) or empty
    shares : (6,)
        Table bound of position and velocity relative to the vector, smallest speed that counts,
        clock bound relative to its reading, reading added to it; 1 by the span of the times.
    extra : (3, n) or (3, 1)
        What stamps and carried digits leave open of position, velocity, clock.
    digits : (3, n) or (3, 1)
        Half units of the file's digits, length of the vector.
    judged, revolutions : (n,) or (1,)
    tolerances, kinds, growing : (m,)
        Quantity 0 position, 1 velocity, 2 clock, 3 energy, 4 angular momentum; growing: per
        revolution.
    orbit : (13,)
        GM/c^2, c, E - 1, L (GM/c), normal (3), normal for the axes (3), what the start leaves
        open of E and L, middle of the times.
    work, guard : (11, n), (5, n)
        Scratch.
    largest, where, laws : (10, 3), (10,), (3, 5)
        See :data:`QUANTITIES` and :data:`LAWS`.
    counts, rows : (m, 3), (m, 5)
        See ``_hold``.
    open_rows, open_margins : (m, k)
    """
    n = time.size
    _positions(position, expected_x, orbit[7], orbit[8], orbit[9], shares[0], work, guard)
    for k in range(4):
        _reduce(work[k, :n], first, k, largest, where)
    if velocity.shape[0] > 0:
        _velocities(velocity, expected_v, shares[1], shares[2], work, guard)
        _drifts(position, velocity, orbit, chart, light, work)
        _reduce(work[4, :n], first, 4, largest, where)
        _reduce(work[7, :n], first, 7, largest, where)
        _line(time, work[10, :n], orbit[12], shares[5], 1, laws)
        if orbit[3] != 0.0:
            _reduce(work[8, :n], first, 8, largest, where)
        k, law = (9, 2) if light else (6, 0)
        _reduce(work[k, :n], first, k, largest, where)
        _line(time, work[k, :n], orbit[12], shares[5], law, laws)
        if np.any(kinds >= 3):
            _drift_guards(position, velocity, digits, orbit, chart, light, guard)
    if clock.size > 0:
        for i in range(n):
            work[5, i] = clock[i] - expected_c[i]
            table = shares[3] * (abs(expected_c[i]) + shares[4])
            guard[2, i] = table + _ROUNDING * abs(work[5, i])
        _reduce(work[5, :n], first, 5, largest, where)
    for k in range(3):
        for i in range(n if extra.shape[1] > 1 else 0):
            guard[k, i] += extra[k, i]
        for i in range(n if digits.shape[1] > 1 or digits[k, 0] > 0.0 else 0):
            guard[k, i] += digits[k, i if digits.shape[1] > 1 else 0]
    for j in range(kinds.size):
        series = (0, 4, 5, 6, 7)[kinds[j]]
        _hold(
            work[series, :n], guard[kinds[j], :n], tolerances[j], growing[j] != 0, revolutions,
            judged, first, counts[j], rows[j], open_rows[j], open_margins[j],
        )  # fmt: skip
