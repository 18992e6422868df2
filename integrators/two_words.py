"""Runs in double-double: about 32 digits, with Taylor series or collocation.

A step takes a thousand times as long as the call that starts it, so this loop is plain Python
around compiled steps.  As in loop.py, time stamps are met by Newton's method on the step's own
solution: the Taylor polynomial, or a shorter collocation step.
"""

from __future__ import annotations

from collections.abc import Callable
from decimal import Decimal, localcontext
from typing import Protocol

import numpy as np
import numpy.typing as npt

from truefall.integrators.adaptive.gauss_radau import radau_tableau
from truefall.integrators.adaptive.taylor import decay, natural_unit, power_of_two
from truefall.integrators.arithmetic import add
from truefall.integrators.equations.rates import areal_radius, rate, scales
from truefall.integrators.equations.tapes import rate_tape
from truefall.integrators.implicit.collocation import DIGITS, two_words
from truefall.integrators.implicit.gauss_legendre import gauss_legendre_tableau
from truefall.integrators.request import Request
from truefall.integrators.run import STATUS, Run, assemble, first_numbers
from truefall.integrators.series import taylor_in_two_words
from truefall.integrators.starts import begin, finish_in_two_words
from truefall.integrators.two_word_steps import collocation_in_two_words, horner_in_two_words

__all__ = ["run_in_two_words"]

Floats = npt.NDArray[np.float64]
Pair = tuple[float, float]
#: Smallest tolerance that two words can honour.
_FINEST = 1e-33


class _Step(Protocol):
    """A method in two words: ``choose`` makes ready a step and gives its length (0: it failed),
    ``change`` fills the change over a part of it."""

    work: int

    def choose(self, y: Floats, low: Floats, h: float) -> float: ...

    def change(self, theta: Pair, out: Floats, out_low: Floats) -> bool: ...


class _Taylor:
    """Series of one step."""

    def __init__(self, request: Request, par: Floats, par_low: Floats) -> None:
        found = request.equations
        self._tape = rate_tape(found.kind, request.variable, found.size)
        self._lines = self._tape.integrating()
        self._par, self._par_low = par, par_low
        self._request, self._order = request, request.order
        self._s = np.zeros((self._tape.rows, self._order + 1))
        self._t = np.zeros_like(self._s)
        self._size, self._rates = np.zeros(found.size), np.zeros(found.size)
        self._unit, self._next = 1.0, 0.0
        self.work = 0

    def choose(self, y: Floats, low: Floats, h: float) -> float:
        n = y.size
        self._s[:n, 0], self._t[:n, 0] = y, low
        self._unit = self._next or power_of_two(
            natural_unit(
                self._request.equations.kind, self._request.variable, self._par, y, self._rates,
                self._size,
            )
        )  # fmt: skip
        taylor_in_two_words(
            self._lines, self._tape.literals, self._par, self._par_low, self._s, self._t,
            self._order, self._unit,
        )  # fmt: skip
        self.work += 1
        if self._request.step is not None:
            self._next = power_of_two(abs(h))
            return h
        scales(self._request.equations.kind, self._par, y, self._size)
        tolerance = max(self._request.tolerance, _FINEST)
        own = self._unit * decay(self._s, self._size, n, self._order, tolerance)
        self._next = power_of_two(own)
        return float(np.copysign(min(own, abs(h)), h))

    def change(self, theta: Pair, out: Floats, out_low: Floats) -> bool:
        part = theta[0] / self._unit, theta[1] / self._unit
        horner_in_two_words(self._s, self._t, self._order, *part, out, out_low)
        return True


class _Collocation:
    """Gauss-Legendre or Gauss-Radau: one step, again for every part of it that is asked for."""

    def __init__(self, request: Request, par: Floats, par_low: Floats) -> None:
        found = request.equations
        stages = (request.order + 1) // 2
        self._tape = rate_tape(found.kind, request.variable, found.size)
        self._par, self._par_low = par, par_low
        with localcontext() as context:
            context.prec = DIGITS
            _, b, a = gauss_legendre_tableau(stages) if request.order % 2 == 0 else radau_tableau()
            rows: list[list[Decimal]] = [*a, b]
            words = [two_words(row) for row in rows]
        self._table = np.array([w[0] for w in words]), np.array([w[1] for w in words])
        self._stages = np.zeros((stages, found.size)), np.zeros((stages, found.size))
        self._y = np.zeros(found.size), np.zeros(found.size)
        self.work = 0

    def choose(self, y: Floats, low: Floats, h: float) -> float:
        self._y = y.copy(), low.copy()
        return h

    def change(self, theta: Pair, out: Floats, out_low: Floats) -> bool:
        count = collocation_in_two_words(
            self._tape.lines, self._tape.literals, self._tape.results, self._par, self._par_low,
            *self._table, *self._y, *theta, *self._stages, out, out_low,
        )  # fmt: skip
        self.work += abs(int(count))
        return bool(count > 0)


def _theta_of(
    step: _Step, request: Request, par: Floats, y: Floats, low: Floats, time: float, h: float,
    out: Floats, out_low: Floats,
) -> None:  # fmt: skip
    """Fill the change at the point of the step where the chart's time is ``time``."""
    found = request.equations
    at, rates = found.time_row, np.zeros(found.size)
    theta: Pair = (0.0, 0.0)
    for _ in range(60):
        step.change(theta, out, out_low)
        moved = y + out
        rate(found.kind, request.variable, par, moved, rates)
        passed = add(*add(y[at], low[at], out[at], out_low[at]), -time, 0.0)
        correction = -passed[0] / rates[at]
        theta = add(*theta, correction, 0.0)
        if abs(correction) <= 1e-24 * abs(h):
            step.change(theta, out, out_low)
            return


def run_in_two_words(
    request: Request,
    x: Floats,
    v: Floats,
    max_steps: int,
    progress: Callable[[int, float], None] | None,
) -> Run:
    """As ``propagate``; ``x`` and ``v`` (1, 3)."""
    found, stamps, ahead = request.equations, request.stamps, request.direction
    states, states_low, pars, pars_low = begin(found, x, v, request.light)
    y, low, par, par_low = states[0].copy(), states_low[0].copy(), pars[0], pars_low[0]
    y[found.time_row] = stamps[0]
    method = _Taylor if request.method.order is None else _Collocation
    step: _Step = method(request, par, par_low)
    rows, rows_low = np.full((2, stamps.size, found.size), np.nan)
    rows[0], rows_low[0] = y, low
    out, out_low = np.zeros((2, found.size))
    count, at, word = first_numbers(1)[0], found.time_row, 0
    h = ahead * (request.step if request.step is not None else np.inf)
    for _ in range(max_steps):
        if count[3] >= stamps.size:
            word = 1
            break
        taken = step.choose(y, low, h)
        settled = step.change((taken, 0.0), out, out_low)
        whole, whole_low = out.copy(), out_low.copy()
        word = _state_of(found.kind, found.static, y + whole, settled)
        if word:
            break
        while count[3] < stamps.size and ahead * (y[at] + whole[at] - stamps[count[3]]) >= 0.0:
            time = float(stamps[count[3]])
            _theta_of(step, request, par, y, low, time, taken, out, out_low)
            row = count[3]
            for i in range(found.size):
                rows[row, i], rows_low[row, i] = add(y[i], low[i], out[i], out_low[i])
            count[3] += 1
        for i in range(found.size):
            y[i], low[i] = add(y[i], low[i], whole[i], whole_low[i])
        count[0] += 1
        if progress is not None and count[0] % 1000 == 0:
            progress(int(count[0]), float(y[at]))
    word = 1 if count[3] >= stamps.size else word
    count[2] = step.work
    final, final_low = finish_in_two_words(found, par, par_low, rows, rows_low)
    return assemble(request, final, count, STATUS[word], [], final_low)


def _state_of(kind: int, static: bool, y: Floats, settled: bool) -> int:
    """0 if the run can go on, else the number of the status."""
    if not settled:
        return 5
    if not np.all(np.isfinite(y)):
        return 4
    radius = areal_radius(kind, y)
    return 0 if radius > (2.0 if static else 0.0) else 4
