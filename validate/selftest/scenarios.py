"""What registers inputs for the compiled functions: small uses of every part of the package.

Each scenario runs interpreted, so everything in it is short.  A new kernel that none of them
reaches makes the self-test fail: lengthen one, or add one to :data:`SCENARIOS`.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

__all__ = ["SCENARIOS", "prepare"]

_STARTS = {
    "none": ((1.0, 0.0, 0.0), (0.1, 0.9, 0.0)),
    "": ((12.0, 1.0, 2.0), (0.01, 0.27, 0.04)),
}
#: A step that suits each set of equations in its first variable.
_STEPS = {"mino": 0.02, "mino-kerr-schild": 0.02, "mino-painleve-gullstrand": 0.02}


def _propagate(name: str, equations: str, **more: object) -> None:
    """Few steps of a method, with two time stamps in them."""
    from typing import Any

    from truefall.integrators import EQUATIONS, METHODS, propagate

    method, chart = METHODS[name], EQUATIONS[equations].chart
    x, v = _STARTS.get(chart, _STARTS[""])
    how: dict[str, Any] = {"method": name, "times": [0.0, 0.7, 1.5]}
    if method.adaptive:
        how["tolerance"] = 1e-10
        how["order"] = 12 if method.order is None else None
    else:
        how["step"] = _STEPS.get(equations, 0.5)
    how["max_steps"] = 12
    propagate(equations, x, v, how.pop("times"), **{**how, **more})


def every_method() -> None:
    """Each method on one set of equations it applies to."""
    from truefall.integrators import METHODS

    for name, method in METHODS.items():
        _propagate(name, method.equations[0] if method.equations else "harmonic")


def every_equation() -> None:
    """Each set of equations, each independent variable, massive and light, in two methods."""
    from truefall.integrators import EQUATIONS

    for name, found in EQUATIONS.items():
        for variable in found.variables:
            _propagate("runge-kutta-4", name, variable=variable)
        _propagate("taylor", name)
        if found.kind >= 2:
            _propagate("runge-kutta-4", name, particle="light")
    _propagate("taylor", "mino", particle="light")
    _propagate("mino-leapfrog-strang-2", "mino")
    _propagate("extended-phase-space-strang-2", "harmonic")
    _propagate("time-transformed-strang-2", "areal-cartesian", particle="light")


def two_words() -> None:
    """Runs in double-double."""
    more = {"arithmetic": "double-double", "max_steps": 2, "order": None}
    _propagate("gauss-legendre-4", "areal-cartesian", **more)
    _propagate("taylor", "harmonic", **{**more, "tolerance": 1e-25})
    _propagate("taylor", "areal", **{**more, "tolerance": 1e-25})


def events() -> None:
    """Every kind of event, in every copy of the loop."""
    from truefall.integrators import METHODS
    from truefall.integrators.run import Event

    seen = set()
    for name, method in METHODS.items():
        family = name.rpartition("-")[0]
        if (family in seen) or not method.arithmetics:
            continue
        seen.add(family)
        equations = method.equations[0] if method.equations else "harmonic"
        watched = (
            Event("periapsis"), Event("apoapsis"), Event("radius", 12.2), Event("horizon"),
            Event("revolutions", 0.002),
        )  # fmt: skip
        _propagate(name, equations, events=watched, max_steps=4)


def ensembles() -> None:
    """Two orbits at once."""
    import numpy as np

    from truefall.integrators import METHODS, ensemble

    x, v = _STARTS[""]
    for name, method in METHODS.items():
        equations = method.equations[0] if method.equations else "harmonic"
        how = (
            {"tolerance": 1e-8, "order": 12 if method.order is None else None}
            if method.adaptive
            else {"step": _STEPS.get(equations, 0.5)}
        )
        times = np.array([0.0, 0.6])
        ensemble(equations, [x, x], [v, v], times, method=name, threads=1, **how)  # type: ignore[arg-type]


def tables() -> None:
    """The table of a bound orbit and of a fall."""
    import numpy as np

    from truefall.reference import Orbit
    from truefall.reference.table import build_table

    for chart, velocity, last in (("areal", (0.0, 0.3, 0.05), 900.0),
                                  ("kerr-schild", (-0.1, 0.05, 0.0), 20.0)):  # fmt: skip
        orbit = Orbit(chart=chart, position=(12.0, 0.0, 0.0), velocity=velocity)
        build_table(orbit, 0.0, last).at(np.linspace(0.0, last, 40))


SCENARIOS = ("every_method", "every_equation", "two_words", "events", "ensembles", "tables")


def prepare() -> None:
    """Make the functions that come into being when a method is first used."""
    from truefall.integrators import EQUATIONS, METHODS
    from truefall.integrators.loop import loop_of
    from truefall.integrators.methods import Problem

    for method in METHODS.values():
        for name in method.equations or EQUATIONS:
            found = EQUATIONS[name]
            order = method.order or method.default_order
            for adaptive in {method.adaptive, False}:
                problem = Problem(found.kind, 0, found.size, order, adaptive)
                parts = method.parts(problem)
                loop_of(parts.name, parts.step, parts.dense, parts.keeps)


_ = (tempfile, Path)
