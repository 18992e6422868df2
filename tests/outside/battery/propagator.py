"""The battery's propagator: geodesics, and what people do wrong to them.

Static metrics in Cartesian coordinates, ``-A dt^2 + B dx^2 + C (n.dx)^2``, from the textbook forms
of the areal, isotropic and harmonic charts; the acceleration per coordinate time follows from the
metric by Christoffel's symbols (own derivation, as in ``test_dop853.py``).  SciPy's DOP853 or a
fixed-step Runge-Kutta integrates.  Nothing of the reference is used.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from math import sqrt

import numpy as np
from scipy.integrate import solve_ivp


def metric(chart, r):
    """A, A', B, B', C, C' at chart radius r; GM = c = 1."""
    if chart == "areal":
        a = 1 - 2 / r
        return a, 2 / r**2, 1.0, 0.0, 1 / a - 1, -2 / (r * a) ** 2
    if chart == "harmonic":
        a = (r - 1) / (r + 1)
        c = (r + 1) / ((r - 1) * r**2)
        return (
            a, 2 / (r + 1) ** 2, (1 + 1 / r) ** 2, -2 * (1 + 1 / r) / r**2,
            c, c * (1 / (r + 1) - 1 / (r - 1) - 2 / r),
        )  # fmt: skip
    u = 1 / (2 * r)
    a = ((1 - u) / (1 + u)) ** 2
    return a, 4 * u / r * (1 - u) / (1 + u) ** 3, (1 + u) ** 4, -4 * u / r * (1 + u) ** 3, 0.0, 0.0


def geodesic(chart, x, v):
    """Coordinate acceleration, plain numbers."""
    r = sqrt(x[0] ** 2 + x[1] ** 2 + x[2] ** 2)
    n = (x[0] / r, x[1] / r, x[2] / r)
    s = n[0] * v[0] + n[1] * v[1] + n[2] * v[2]
    w = v[0] ** 2 + v[1] ** 2 + v[2] ** 2
    a, da, b, db, c, dc = metric(chart, r)
    push = 0.5 * da + 0.5 * s * s * dc + c * (w - s * s) / r - 0.5 * db * w
    # the force push n + s db v, its radial part lowered by b + c, the rest by b
    radial = push + s * db * s
    lift = radial / (b + c)
    gain = da / a * s
    return [
        -((push * n[k] + s * db * v[k] - n[k] * radial) / b + n[k] * lift) + gain * v[k]
        for k in range(3)
    ]


def newton(x):
    r = sqrt(x[0] ** 2 + x[1] ** 2 + x[2] ** 2)
    return [-c / r**3 for c in x]


def first_order(chart, x, v):
    """Newton's acceleration and the 1/c^2 terms (harmonic: IERS Conventions 2010, eq. 10.12,
    from memory; areal: own expansion)."""
    r = sqrt(x[0] ** 2 + x[1] ** 2 + x[2] ** 2)
    n = [c / r for c in x]
    s = sum(p * q for p, q in zip(n, v, strict=True))
    w = sum(q * q for q in v)
    if chart == "areal":
        # r'' = 2/r^3 - 2 phi'^2 + 3 r'^2/r^2, phi''/phi' = 2 r'/r^2
        out = (2 / r - 2 * (w - s * s) + 3 * s * s) / r**2
        turn = 2 * s / r**2
        return [-n[k] / r**2 + n[k] * out + (v[k] - n[k] * s) * turn for k in range(3)]
    radial, along = 4 / r - w, 4 * s
    return [(-n[k] + radial * n[k] + along * v[k]) / r**2 for k in range(3)]


def rate(chart, x, v, light):
    """d tau/dt, or for light d lambda/dt with E = 1."""
    r = sqrt(x[0] ** 2 + x[1] ** 2 + x[2] ** 2)
    a, _, b, _, c, _ = metric(chart, r)
    if light:
        return a
    s = (x[0] * v[0] + x[1] * v[1] + x[2] * v[2]) / r
    return sqrt(max(a - b * (v[0] ** 2 + v[1] ** 2 + v[2] ** 2) - c * s * s, 0.0))


@dataclass(frozen=True)
class Case:
    """An orbit of the battery: ``length`` metres in GM/c^2 (0: geometric units)."""

    name: str
    chart: str
    position: tuple
    velocity: tuple
    last: float
    count: int
    gm: float = 1.0
    light: bool = False

    @property
    def units(self):
        """GM/c^2, c, GM/c^3 in the file's units."""
        c = 1.0 if self.gm == 1.0 else 299792458.0
        return self.gm / c**2, c, self.gm / c**3

    @property
    def times(self):
        return np.linspace(0.0, self.last, self.count)


CASES = (
    Case("earth-satellite", "harmonic", (7.2e6, 0.0, 3e5), (40.0, 7300.0, 1200.0), 60000.0, 241,
         3.986004418e14),
    Case("planet", "isotropic", (5.0e10, 0.0, 1e9), (3.0e3, 5.5e4, 4.0e3), 1.6e7, 201,
         1.32712440041e20),
    Case("strong", "areal", (16.0, 0.0, 0.0), (0.0, 0.215, 0.03), 1500.0, 301),
    Case("whirl", "areal", (20.0, 0.0, 0.0), (0.0, 0.1845, 0.01), 800.0, 301),
    Case("flyby", "harmonic", (60.0, 0.0, 0.0), (-0.35, 0.13, 0.03), 330.0, 221),
    Case("light", "areal", (-60.0, 9.0, 0.0), (1.0, 0.0, 0.02), 140.0, 201, light=True),
)  # fmt: skip


def light_start(case):
    x, d = np.array(case.position), np.array(case.velocity)
    d = d / np.linalg.norm(d)
    r = np.linalg.norm(x)
    a, _, b, _, c, _ = metric(case.chart, r)
    return d * sqrt(a / (b + c * (d @ x / r) ** 2))


def fly(case, times=None, *, law=None, gm=1.0, start=None, extra=None, chart=None, rtol=2.5e-14,
        step=None):  # fmt: skip
    """Rows t, x, v, clock (n, 8) in the case's units.

    ``law(x, v)`` in units of the flown GM; ``gm`` a factor on GM; ``start`` a changed (x, v) in
    GM/c^2 and c; ``extra(x, v)`` an acceleration besides, in c^4/GM; ``step`` a fixed step, as a
    share of the rows' spacing, by the classical Runge-Kutta method.
    """
    length, speed, unit = case.units
    chart = chart or case.chart
    x, v = np.array(case.position) / length, np.array(case.velocity) / speed
    if case.light:
        v = light_start(case)
    if start is not None:
        x, v = start(x, v)
    law = law or (lambda p, q: geodesic(chart, p, q))
    stamps = (case.times if times is None else times) / unit

    def rhs(_t, y):
        p, q = [c / gm for c in y[:3]], y[3:6]
        a = [c / gm for c in law(p, q)]
        if extra is not None:
            a = [one + two for one, two in zip(a, extra(y[:3], q), strict=True)]
        return [*q, *a, rate(chart, p, q, case.light)]

    y0 = [*x, *v, 0.0]
    sizes = np.array([np.linalg.norm(x)] * 3 + [np.linalg.norm(v)] * 3 + [abs(stamps).max() + 1])
    if step is not None:
        rows = runge_kutta(rhs, np.array(y0), stamps, step)
    else:
        rows = both_ways(rhs, y0, stamps, rtol, rtol * sizes)
    return np.column_stack(
        [stamps * unit, rows[:, :3] * length, rows[:, 3:6] * speed,
         rows[:, 6] * (length if case.light else unit)]
    )  # fmt: skip


def both_ways(rhs, y0, stamps, rtol, atol):
    """DOP853 from 0 to stamps after and before it."""
    rows = np.empty((stamps.size, 7))
    for part in (stamps >= 0, stamps < 0):
        if not part.any():
            continue
        t = stamps[part] if stamps[part][0] >= 0 else stamps[part][::-1]
        done = solve_ivp(rhs, (0.0, t[-1]), y0, method="DOP853", t_eval=t, rtol=rtol, atol=atol)
        assert done.success, done.message
        rows[part] = done.y.T if stamps[part][0] >= 0 else done.y.T[::-1]
    return rows


def runge_kutta(rhs, y, stamps, share):
    """The classical method with whole steps between even rows."""
    count = max(round(1 / share), 1)
    rows = [y.copy()]
    f = lambda z: np.array(rhs(0.0, z))  # noqa: E731
    for a, b in pairwise(stamps):
        h = (b - a) / count
        for _ in range(count):
            k1 = f(y)
            k2 = f(y + h / 2 * k1)
            k3 = f(y + h / 2 * k2)
            k4 = f(y + h * k3)
            y = y + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        rows.append(y.copy())
    return np.array(rows)
