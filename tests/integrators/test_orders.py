"""The order of every method in the index, measured against the exact solution.

A method that joins the index joins this test: steps are shortened until the error lies where
truncation rules, and the order is fitted there.  Methods that also run in double-double are
measured in it, where truncation rules over many more decades.
"""

from __future__ import annotations

import numpy as np
import pytest

from truefall.integrators import EQUATIONS, METHODS, propagate
from truefall.reference import Orbit
from truefall.reference.charts import convert

#: Window of a measured order around the nominal one.
ORDER_WINDOW = 0.2
#: Errors (GM/c^2) between which truncation rules and higher terms do not: rounding is 1e-14 after
#: a quarter of a revolution, in two words 1e-29.
WINDOW = {
    "low": (1e-9, 1e-4), "middle": (6e-14, 1e-10), "high": (6e-14, 1e-8),
    "double-double": (3e-28, 1e-18),
}  # fmt: skip
#: The errors of the ninth-order method's own order are so small (its conditions of order 10 fail by
#: 2e-9 only, see test_coefficients.py) that terms of order 10 rule wherever float64 can see them.
SEEN = {"prince-9": 10}
#: Orders tried where the order is free.
FREE = {"taylor": (4, 9, 16, 20), "gragg-bulirsch-stoer": (4, 8, 12)}
TIMES = np.array([0.0, 24.0, 42.0, 60.0])
RATIO = 0.88

CASES = [
    (name, order)
    for name, method in METHODS.items()
    if method.fixed
    for order in (FREE[name] if method.order is None else (method.order,))
]


def errors_of(name, order, arithmetic, lowest, highest):
    """Steps and errors, from long steps to short, as far as truncation rules."""
    method = METHODS[name]
    equations = EQUATIONS[method.equations[0] if method.equations else "kerr-schild"]
    x, v = convert([12.0, 0.0, 1.0], [0.0, 0.33, 0.04], "areal", equations.chart)
    exact = Orbit(chart=equations.chart, position=x, velocity=v).at(TIMES)
    free = {"order": order} if method.order is None else {}
    variable = (method.variables or equations.variables)[0]
    scale = 12.0 ** -{"radius": 1.0, "radius-3/2": 1.5, "radius-squared": 2.0}.get(variable, 0.0)
    steps, errors = [], []
    step = 40.0 if order > 5 else 10.0
    for _ in range(70):
        step *= RATIO
        run = propagate(
            equations.name, x, v, TIMES, method=name, variable=variable, step=step * scale,
            arithmetic=arithmetic, **free,
        )  # fmt: skip
        off = run.position - exact.position
        if run.position_low is not None:
            off = off + (run.position_low - exact.position_low)
        error = float(np.sqrt((off[1:] ** 2).mean()))
        if run.status != "finished" or not error < highest:
            continue
        if error < lowest or len(steps) > 12:
            break
        steps.append(step)
        errors.append(error)
    return np.array(steps), np.array(errors)


@pytest.mark.parametrize(("name", "order"), CASES, ids=[f"{n}-{o}" for n, o in CASES])
def test_every_method_has_its_order(name, order):
    """Fitted over the steps whose errors lie in the window."""
    precise = "double-double" in METHODS[name].arithmetics and order > 8
    arithmetic = "double-double" if precise else "compensated"
    kind = "low" if order < 5 else "middle" if order == 5 else "high"
    steps, errors = errors_of(name, order, arithmetic, *WINDOW[arithmetic if precise else kind])
    assert steps.size >= 4
    slope = np.polyfit(np.log(steps), np.log(errors), 1)[0]
    assert slope == pytest.approx(SEEN.get(name, order), abs=ORDER_WINDOW)
