"""Every fault of the battery: what is written, and the causes that may be named for it.

``FAULTS`` maps a name to a function ``make(case, size) -> (rows, causes) or None`` where ``size``
runs from 0 (barely above the floor) to 1 (gross); None where the fault makes no sense for a case.
Rows hold time, position, velocity, second clock, in the case's units.
"""

from __future__ import annotations

from math import cos, sin, sqrt

import numpy as np

from battery import numerics  # noqa: F401 - which registers its faults
from battery.base import FAULTS, between, fault, p, unit

__all__ = ["FAULTS", "p"]

# constants --------------------------------------------------------------------------------


@fault("gm-scaled")
def gm(case, size):
    return p.fly(case, gm=1 + between(size, 1e-10, 1e-3))


@fault("gm-scaled", "constants-in-single-precision")
def gm_tcb(case, size):
    return p.fly(case, gm=1 + 1.550519768e-8) if size == 1 else None


@fault("light-speed-scaled")
def c_rounded(case, size):
    """c = 3e8: the same orbit in units of another c."""
    if case.light or size < 1:
        return None
    q = 3e8 / 299792458
    length, speed, time = case.units
    other = p.Case(
        case.name,
        case.chart,
        tuple(np.array(case.position) / length * q**2),
        tuple(np.array(case.velocity) / speed / q),
        case.last / time * q**3,
        case.count,
    )
    rows = p.fly(other)
    return np.column_stack([case.times, rows[:, 1:4] * length / q**2, rows[:, 4:7] * speed * q,
                            rows[:, 7] * time / q**3])  # fmt: skip


@fault("schwarzschild-radius", "gm-scaled")
def radius_halved(case, size):
    return p.fly(case, gm=0.5) if size == 1 else None


# model --------------------------------------------------------------------------------


@fault("newtonian")
def newton(case, size):
    return p.fly(case, law=lambda x, _: p.newton(x)) if size == 1 else None


@fault("first-post-newtonian")
def first_order(case, size):
    if case.light or size < 1:
        return None
    return p.fly(case, law=lambda x, v: p.first_order(case.chart, x, v))


def weighted(case, weight):
    def law(x, v):
        return [
            a + weight * (b - a)
            for a, b in zip(p.newton(x), p.first_order(case.chart, x, v), strict=True)
        ]

    return p.fly(case, law=law)


@fault("schwarzschild-term-scaled")
def term_reversed(case, size):
    return None if case.light or size < 1 else weighted(case, -1.0)


@fault("schwarzschild-term-scaled")
def term_halved(case, size):
    return None if case.light or size < 1 else weighted(case, 0.5)


@fault("schwarzschild-term-scaled")
def term_doubled(case, size):
    return None if case.light or size < 1 else weighted(case, 2.0)


@fault("clock-without-field")
def clock_without_field(case, size):
    if case.light or size < 1:
        return None
    rows = p.fly(case)
    t = case.times
    fine = p.fly(case, np.linspace(0, case.last, 12 * (case.count - 1) + 1))
    speed = np.linalg.norm(fine[:, 4:7], axis=1) / case.units[1]
    from scipy.interpolate import CubicSpline

    rows[:, 7] = CubicSpline(fine[:, 0], np.sqrt(1 - speed**2)).antiderivative()(t)
    return rows


# charts --------------------------------------------------------------------------------


def other(case):
    return {"areal": "harmonic", "harmonic": "areal", "isotropic": "harmonic"}[case.chart]


@fault("chart-misdeclared")
def chart(case, size):
    return p.fly(case, chart=other(case)) if size == 1 else None


@fault("chart-misdeclared")
def chart_isotropic(case, size):
    if size < 1 or case.chart == "isotropic":
        return None
    return p.fly(case, chart="isotropic")


@fault("velocity-in-another-chart")
def velocity_chart(case, size):
    """Positions harmonic or areal, velocities of the other: r and r - 1 as radius."""
    if size < 1 or case.chart == "isotropic":
        return None
    rows = p.fly(case)
    x, v = rows[:, 1:4] / case.units[0], rows[:, 4:7]
    r = np.linalg.norm(x, axis=1)[:, None]
    n = x / r
    radial = np.sum(n * v, axis=1)[:, None] * n
    shift = -1.0 if case.chart == "areal" else 1.0
    rows[:, 4:7] = radial + (v - radial) * (r + shift) / r
    return rows


# clocks --------------------------------------------------------------------------------


@fault("proper-for-coordinate-time")
def proper_stamps(case, size):
    if case.light or size < 1:
        return None
    rows = p.fly(case)
    return np.column_stack([rows[:, 7], rows[:, 1:]])


@fault("epoch-shifted", "samples-shifted")
def epoch(case, size):
    shift = between(size, 1e-9, 0.3) * case.last / case.count
    rows = p.fly(case, case.times + shift)
    return np.column_stack([case.times, rows[:, 1:]])


@fault("time-scaled")
def time_scaled(case, size):
    rows = p.fly(case, case.times * (1 + between(size, 1e-10, 2e-5)))
    return np.column_stack([case.times, rows[:, 1:]])


@fault("samples-shifted", "epoch-shifted")
def one_early(case, size):
    if size < 1:
        return None
    rows = p.fly(case)
    return np.column_stack([rows[:-1, 0], rows[1:, 1:]])


@fault("state-repeated")
def repeated(case, size):
    if size < 1:
        return None
    rows, k = p.fly(case), case.count // 3
    states = np.vstack([rows[:k, 1:], rows[k - 1 : -1, 1:]])
    return np.column_stack([rows[:, 0], states])


@fault("state-dropped")
def dropped(case, size):
    if size < 1:
        return None
    rows, k = p.fly(case), case.count // 2
    return np.column_stack([rows[:-1, 0], np.delete(rows, k, axis=0)[:, 1:]])


# units and axes --------------------------------------------------------------------------------


@fault("length-unit")
def kilometres(case, size):
    if size < 1:
        return None
    rows = p.fly(case)
    rows[:, 1:7] /= 1e3
    return rows


@fault("velocity-unit")
def velocity_kilometres(case, size):
    if size < 1:
        return None
    rows = p.fly(case)
    rows[:, 4:7] /= 1e3
    return rows


def moved(case, matrix):
    rows = p.fly(case)
    rows[:, 1:4], rows[:, 4:7] = rows[:, 1:4] @ matrix.T, rows[:, 4:7] @ matrix.T
    return rows


@fault("axes-permuted")
def permuted(case, size):
    return moved(case, np.eye(3)[[1, 0, 2]]) if size == 1 else None


@fault("axes-mirrored")
def mirrored(case, size):
    return moved(case, np.diag([1.0, -1.0, 1.0])) if size == 1 else None


@fault("axes-rotated")
def rotated(case, size):
    a = between(size, 1e-10, 1e-2)
    turn = np.array([[cos(a), -sin(a), 0], [sin(a), cos(a), 0], [0, 0, 1.0]])
    tip = np.array([[1.0, 0, 0], [0, cos(a), sin(a)], [0, -sin(a), cos(a)]])
    return moved(case, turn @ tip)


@fault("origin-shifted")
def origin(case, size):
    rows = p.fly(case)
    size = between(size, 1e-10, 1e-3) * np.linalg.norm(case.position)
    rows[:, 1:4] += size * unit([1.0, -2.0, 0.5])
    return rows


@fault("velocity-per-proper-time")
def velocity_proper(case, size):
    if case.light or size < 1:
        return None
    rows = p.fly(case)
    length, speed, _ = case.units
    for row in rows:
        row[4:7] /= p.rate(case.chart, row[1:4] / length, row[4:7] / speed, False)
    return rows


@fault("velocity-of-static-observers")
def velocity_static(case, size):
    if size < 1:
        return None
    rows = p.fly(case)
    for row in rows:
        x, v = row[1:4] / case.units[0], row[4:7]
        r = np.linalg.norm(x)
        a, _, b, _, c, _ = p.metric(case.chart, r)
        radial = (v @ x) / r**2 * x
        row[4:7] = radial * sqrt((b + c) / a) + (v - radial) * sqrt(b / a)
    return rows


# start --------------------------------------------------------------------------------


@fault("start-perturbed")
def start(case, size):
    a = between(size, 1e-10, 1e-4)
    if case.light:
        return p.fly(case, start=lambda x, v: (x + a * 60 * unit([0.3, 1, 0.5]), v))
    return p.fly(case, start=lambda x, v: (
        x + a * np.linalg.norm(x) * unit([1, 0.4, -0.7]),
        v + a * np.linalg.norm(v) * unit([-0.2, 1, 0.5])))  # fmt: skip


@fault("start-half-step-late", "start-perturbed")
def half_step(case, size):
    if case.light:
        return None
    late = between(size, 1e-7, 0.02) * case.last / case.count / case.units[2]
    return p.fly(case, start=lambda x, v: (x, v + late * np.array(p.geodesic(case.chart, x, v))))
