"""Tapes of every set of equations: its rates, its starts, its results.

The rates are not written a second time: the kernels of this folder run once on rows of a
recorder in place of numbers.  Starts and results follow from the metric of each chart,
ds^2 = -A dT^2 + 2 B dT dR + C (tangential)^2 + G dR^2.
"""

from __future__ import annotations

import math
import types
from collections.abc import Callable, Sequence
from functools import cache
from typing import Any

from truefall.integrators.equations import kerr_schild, painleve_gullstrand
from truefall.integrators.equations.areal import metric as areal_metric
from truefall.integrators.equations.cartesian import METRICS
from truefall.integrators.equations.rates import rate
from truefall.integrators.tape import Recorder, Row, Tape, angle, root

__all__ = ["rate_tape", "result_tape", "start_tape"]

_MINO_METRICS = {9: areal_metric, 10: kerr_schild.metric, 11: painleve_gullstrand.metric}


def _sine(row: Row) -> Row:
    return row.cosine_and_sine()[1]


def _cosine(row: Row) -> Row:
    return row.cosine_and_sine()[0]


_ON_ROWS: dict[Any, Callable[[Row], Row]] = {math.sqrt: root, math.sin: _sine, math.cos: _cosine}


def _on_rows(function: Any) -> Any:
    """The function, and what it calls, with roots, sines and cosines of rows."""
    source = getattr(function, "py_func", function)
    names = dict(source.__globals__)
    for name in source.__code__.co_names:
        found = names.get(name)
        if isinstance(found, types.BuiltinFunctionType) and found in _ON_ROWS:
            names[name] = _ON_ROWS[found]
        elif getattr(found, "__module__", "").startswith("truefall.integrators.equations"):
            names[name] = _on_rows(found)
    return types.FunctionType(source.__code__, names, source.__name__)


def _rates(kind: int, variable: int, par: Sequence[Row], y: Sequence[Row]) -> list[Any]:
    out: list[Any] = [0.0] * len(y)
    _on_rows(rate)(kind, variable, par, y, out)
    return out


@cache
def rate_tape(kind: int, variable: int, size: int) -> Tape:
    """From y (size,) to dy/d sigma (size,)."""
    record = Recorder(size)
    par = [record.parameter(i) for i in range(3)]
    return record.finish(_rates(kind, variable, par, record.given))


def _dot(a: Sequence[Any], b: Sequence[Any]) -> Any:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


def _motion(metric: Any, x: Any, v: Any, light: bool, outward: bool) -> tuple[Any, ...]:
    """R, n, v, n.v, dT/d lambda and E from position and velocity; light's speed is found.

    Light: A - 2 B s d_n - s^2 K = 0 for the speed s along the direction d; of the two forms of
    its larger root the one that does not cancel.
    """
    size = root(_dot(x, x))
    n = [component / size for component in x]
    a, b, c, g = metric(size)
    along = _dot(n, v)
    square = _dot(v, v)
    radial = along * along
    spread = c * (square - radial) + g * radial
    if light:
        half = root(b * b * radial + a * spread)
        speed = a / (half + b * along) if outward else (half - b * along) / spread
        v = [speed * component for component in v]
        along = speed * along
        pace = 1.0 / (a - b * along)
        energy: Any = pace * (a - b * along)
    else:
        pace = 1.0 / root(a - 2.0 * (b * along) - spread)
        energy = pace * (a - b * along)
    return size, n, v, along, pace, energy, (b, c, g)


def _momenta(kind: int, x: Any, motion: tuple[Any, ...]) -> list[Any]:
    """x and p, or the spherical coordinates and their momenta."""
    size, n, v, along, pace, energy, (b, c, g) = motion
    pull = (g - c) * along + b
    p = [pace * (c * v[i] + pull * n[i]) for i in range(3)]
    if kind == 7:
        p = [p[i] - energy * n[i] for i in range(3)]
    if kind != 8:
        return [*x, *p]
    flat = root(x[0] * x[0] + x[1] * x[1])
    turning = (x[2] * (x[0] * p[0] + x[1] * p[1])) / flat - flat * p[2]
    spin = x[0] * p[1] - x[1] * p[0]
    place = [size, angle(flat, x[2]), angle(x[1], x[0])]
    return [*place, _dot(n, p), turning, spin]


@cache
def start_tape(kind: int, light: bool, outward: bool) -> Tape:
    """From position and velocity (6,) to y and then E, mu and L^2.

    Parameters
    ----------
    kind : int
    light : bool
    outward : bool
        Whether the velocity points outward; matters for light only.
    """
    record = Recorder(6)
    x, v = record.given[:3], record.given[3:]
    if kind <= 1:
        return record.finish([x[0], x[1], v[0], v[1], 0.0, 1.0, 1.0, 0.0])
    mu = 0.0 if light else 1.0
    metric = _MINO_METRICS[kind] if kind >= 9 else areal_metric if kind == 8 else METRICS[kind]
    motion = _motion(metric, x, v, light, outward)
    size, n, v, along, pace, energy, (_, c, _) = motion
    if light:
        energy = 1.0
    across = [size * pace * (v[i] - along * n[i]) for i in range(3)]
    if kind >= 9:
        square = _dot(across, across)
        state = [1.0 / size, -(pace * along), *n, *across]
        return record.finish([*state, 0.0, 0.0, energy, mu, square])
    square = c * c * _dot(across, across)
    return record.finish([*_momenta(kind, x, motion), 0.0, 0.0, energy, mu, square])


@cache
def result_tape(kind: int, size: int) -> Tape:
    """From y (size,) to position (3,), velocity (3,) and the particle's clock."""
    record = Recorder(size)
    y = record.given
    par = [record.parameter(i) for i in range(3)]
    out = _rates(kind, 0, par, y)
    if kind <= 1:
        return record.finish([y[0], y[1], 0.0, y[2], y[3], 0.0, y[4]])
    if kind >= 9:
        # Rounding stretches n and m alike, steadily; only their direction is used.
        scale = 1.0 / (y[0] * root(_dot(y[2:5], y[2:5])))
        x = [scale * y[2 + i] for i in range(3)]
        moved = [(scale * y[5 + i] - (y[1] / y[0]) * x[i]) / out[8] for i in range(3)]
        return record.finish([*x, *moved, y[9]])
    pace = out[6]
    if kind != 8:
        return record.finish([*y[:3], *(out[i] / pace for i in range(3)), y[7]])
    (cos_t, sin_t), (cos_p, sin_p) = y[1].cosine_and_sine(), y[2].cosine_and_sine()
    r, radial = y[0], out[0] / pace
    tilt, spin = r * out[1] / pace, r * out[2] / pace
    flat, drift = r * sin_t, radial * sin_t + tilt * cos_t
    x = [flat * cos_p, flat * sin_p, r * cos_t]
    moved = [drift * cos_p - spin * sin_t * sin_p, drift * sin_p + spin * sin_t * cos_p,
             radial * cos_t - tilt * sin_t]  # fmt: skip
    return record.finish([*x, *moved, y[7]])
