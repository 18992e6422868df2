"""Faults of the battery: weaknesses of methods, and forces."""

from __future__ import annotations

from math import cos, pi, sin, sqrt

import numpy as np

from battery.base import between, fault, natural, p, unit

# numerics --------------------------------------------------------------------------------


@fault("step-too-large")
def coarse_step(case, size):
    return p.fly(case, step=[0.2, 0.5, 1.0][round(2 * size)])


@fault("step-too-large")
def coarse_tolerance(case, size):
    return p.fly(case, rtol=between(size, 1e-10, 1e-6))


@fault("drag", "energy-dissipation")
def dissipation(case, size):
    k = between(size, 1e-9, 1e-5) * sqrt(natural(case)) / np.linalg.norm(case.position)
    k *= case.units[0]
    return p.fly(case, extra=lambda _, v: [-k * c for c in v])


@fault("single-precision-state")
def single(case, size):
    if size < 1:
        return None
    rows = p.fly(case)
    rows[:, 1:7] = np.float32(rows[:, 1:7])
    return rows


@fault("single-precision-time-stamps")
def single_stamps(case, size):
    if size < 1:
        return None
    stamps = np.linspace(0, case.last * 0.9371, case.count)
    rows = p.fly(case, np.float32(stamps).astype(float))
    return np.column_stack([stamps, rows[:, 1:]])


@fault("output-rounded")
def rounded(case, size):
    rows = p.fly(case)
    digits = [9, 7, 5][round(2 * size)]
    for k in range(1, 7):
        rows[:, k] = [float(f"{value:.{digits - 1}e}") for value in rows[:, k]]
    return rows


@fault("output-interpolated")
def interpolated_linear(case, size):
    m = [2, 4, 8][round(2 * size)]
    rows = p.fly(case)
    last = (case.count - 1) // m * m
    for k in range(1, 8):
        rows[: last + 1, k] = np.interp(rows[: last + 1, 0], rows[: last + 1 : m, 0],
                                        rows[: last + 1 : m, k])  # fmt: skip
    return rows[: last + 1]


@fault("output-interpolated")
def interpolated_cubic(case, size):
    from scipy.interpolate import CubicHermiteSpline

    step = [1.7, 2.6, 4.3][round(2 * size)] * case.last / (case.count - 1)
    nodes = p.fly(case, np.arange(0, case.last + step, step))
    curve = CubicHermiteSpline(nodes[:, 0], nodes[:, 1:4], nodes[:, 4:7])
    rows = p.fly(case)
    rows[:, 1:4], rows[:, 4:7] = curve(rows[:, 0]), curve(rows[:, 0], 1)
    return rows


@fault("periapsis-kinks")
def kinks(case, size):
    """Each closest approach costs a little of the velocity."""
    if case.light or case.name == "flyby":
        return None
    a = between(size, 1e-9, 1e-5)
    rows, times = [], case.times
    length, speed, unit_ = case.units
    t, y, sign = 0.0, None, None
    x, v = np.array(case.position) / length, np.array(case.velocity) / speed
    state = np.array([*x, *v, 0.0])
    sizes = np.array([np.linalg.norm(x)] * 3 + [np.linalg.norm(v)] * 3 + [times[-1] / unit_])

    def rhs(_t, y):
        return [*y[3:6], *p.geodesic(case.chart, y[:3], y[3:6]),
                p.rate(case.chart, y[:3], y[3:6], False)]  # fmt: skip

    def closest(_t, y):
        return y[0] * y[3] + y[1] * y[4] + y[2] * y[5]

    closest.terminal, closest.direction = True, 1
    from scipy.integrate import solve_ivp

    del t, y, sign
    now, last, stamps = 0.0, times[-1] / unit_, times / unit_
    for _ in range(200):
        ahead = stamps[(stamps >= now) & (stamps <= last)] if not rows else stamps[stamps > now]
        done = solve_ivp(rhs, (now, last), state, method="DOP853", rtol=2.5e-14, t_eval=ahead,
                         atol=2.5e-14 * sizes, events=closest)  # fmt: skip
        rows += [y for y in np.array(done.y).T if y.size] if len(ahead) else []
        if done.status != 1:
            break
        now, state = float(done.t_events[0][0]), done.y_events[0][0].copy()
        state[3:6] *= 1 - a
        state[:3] += 1e-9 * state[3:6]
    rows = np.array(rows)
    return np.column_stack([times[: len(rows)], rows[:, :3] * length, rows[:, 3:6] * speed,
                            rows[:, 6] * unit_])  # fmt: skip


# forces --------------------------------------------------------------------------------


@fault("radial-acceleration")
def radial_push(case, size):
    a = between(size, 1e-10, 1e-4) * natural(case)
    return p.fly(case, extra=lambda x, _: list(a * unit(x)))


@fault("along-acceleration")
def thrust(case, size):
    a = between(size, 1e-10, 1e-6) * natural(case)
    return p.fly(case, extra=lambda _, v: list(a * unit(v)))


@fault("fixed-acceleration")
def wind(case, size):
    a = between(size, 1e-10, 1e-5) * natural(case) * unit([0.5, 1.0, -0.3])
    return p.fly(case, extra=lambda _x, _v: list(a))


@fault("drag")
def drag(case, size):
    k = between(size, 1e-9, 1e-5) * case.units[0] / np.linalg.norm(case.position)
    return p.fly(case, extra=lambda _, v: [-k * sqrt(v @ v) * c for c in np.array(v)])


@fault("inverse-cube-term")
def oblate(case, size):
    r0 = np.linalg.norm(case.position) / case.units[0]
    k = between(size, 1e-10, 1e-4) * r0**2
    return p.fly(case, extra=lambda x, _: list(-k * unit(x) / (np.array(x) @ x) ** 2))


@fault("degrees-for-radians")
def degrees(case, size):
    if size < 1:
        return None
    rows = p.fly(case)
    for row in rows:
        angle = np.arctan2(row[2], row[1]) * (pi / 180 - 1)
        turn = np.array([[cos(angle), -sin(angle), 0], [sin(angle), cos(angle), 0], [0, 0, 1]])
        row[1:4], row[4:7] = turn @ row[1:4], turn @ row[4:7]
    return rows
