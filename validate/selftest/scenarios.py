"""What registers inputs for the compiled functions: small uses of every part of the package.

Each scenario runs interpreted, so everything in it is short.  A new kernel that none of them
reaches makes the self-test fail: lengthen one, or add one to :data:`SCENARIOS`.
"""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

__all__ = ["SCENARIOS", "prepare"]

_STARTS = {
    "none": ((1.0, 0.0, 0.0), (0.1, 0.9, 0.0)),
    "": ((12.0, 1.0, 2.0), (0.01, 0.27, 0.04)),
}
#: A step that suits each set of equations in its first variable.
_STEPS = {"mino": 0.02, "mino-kerr-schild": 0.02, "mino-painleve-gullstrand": 0.02}


def _propagate(name: str, equations: str, **more: object) -> None:
    """Few steps of a method, with two time stamps in them."""
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


def _first_of_each_loop() -> list[tuple[str, str]]:
    """A method and equations for every copy of the loop."""
    from truefall.integrators import EQUATIONS, METHODS
    from truefall.integrators.methods import Problem

    found: dict[str, tuple[str, str]] = {}
    for name, method in METHODS.items():
        for equations in method.equations or ("harmonic", "mino"):
            e = EQUATIONS[equations]
            order = method.order or method.default_order
            parts = method.parts(Problem(e.kind, 0, e.size, order, method.adaptive))
            found.setdefault(parts.name, (name, equations))
    return list(found.values())


def events() -> None:
    """Every kind of event, in every copy of the loop."""
    from truefall.integrators.run import Event

    for name, equations in _first_of_each_loop():
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
    for name, equations in _first_of_each_loop():
        method = METHODS[name]
        how: dict[str, Any] = {"step": _STEPS.get(equations, 0.5)}
        if method.adaptive:
            how = {"tolerance": 1e-8, "order": 12 if method.order is None else None}
        times = np.array([0.0, 0.6])
        ensemble(equations, [x, x], [v, v], times, method=name, threads=1, **how)


def falls() -> None:
    """Runs that end at the horizon: steps rejected, the edge of the chart."""
    from truefall.integrators import propagate

    for name in ("dormand-prince-5", "taylor"):
        propagate(
            "areal-cartesian", (2.3, 0.0, 0.0), (-0.1, 0.0, 0.0), (0.0, 200.0), method=name,
            tolerance=1e-4, max_steps=400, order=4 if name == "taylor" else None,
        )  # fmt: skip


def hamiltonians() -> None:
    """The Hamiltonians, which tests and benchmarks watch."""
    import numpy as np

    from truefall.integrators.equations.cartesian import hamiltonian
    from truefall.integrators.equations.spherical import spherical_hamiltonian

    y = np.array([9.0, 1.1, 0.3, 0.12, 0.27, 0.31, 0.0, 0.0])
    for kind in range(2, 8):
        hamiltonian(kind, 0.96, y)
    y[4:6] = 1.7, 3.1
    spherical_hamiltonian(0.96, y)


def tables() -> None:
    """The table of a bound orbit and of a fall."""
    import numpy as np

    from truefall.reference import Orbit
    from truefall.reference.table import build_table

    for chart, velocity, last in (("areal", (0.0, 0.3, 0.05), 900.0),
                                  ("kerr-schild", (-0.1, 0.05, 0.0), 20.0)):  # fmt: skip
        orbit = Orbit(chart=chart, position=(12.0, 0.0, 0.0), velocity=velocity)
        build_table(orbit, 0.0, last).at(np.linspace(0.0, last, 40))


def flights() -> None:
    """Orbits under laws that are wrong on purpose, in every chart, for particles and light."""
    import numpy as np

    from truefall.reference.charts import CHARTS
    from truefall.validate.causes.flight import Law, fly

    x, v, times = np.array(_STARTS[""][0]), np.array(_STARTS[""][1]), np.array([0.0, 1.5, 3.0])
    forced = (1e-5, 1e-6, 1e-6, 1e-6, 1e-7, 1e-7, 1e-5, 1e-6, 1e-3, 1e-3)
    for chart in CHARTS:
        fly(Law(chart), x, v, times)
        fly(Law(chart, light=True), x, v, times)
        fly(Law(chart, proper=True, exact=0.0, first=1.0, second=1.0, forces=forced), x, v, times)
    for clock in range(4):
        fly(Law("harmonic", exact=0.0, first=1.0, clock=clock), x, v, times)


def _rows(light: bool) -> tuple[str, Any]:
    """Metadata and columns (n, 8) of a trajectory that is a little wrong."""
    import numpy as np

    from truefall.reference import Orbit

    particle, velocity = ("light", (0.3, 0.9, 0.1)) if light else ("massive", (0.0, 0.3, 0.05))
    times = np.linspace(0.0, 60.0, 121)
    orbit = Orbit(chart="areal", position=(12.0, 0.0, 0.0), velocity=velocity, particle=particle)
    states = orbit.at(times)
    wrong = 1e-9 * times[:, None] * np.array([1.0, -2.0, 0.5])
    clock = states.affine if light else states.proper_time
    assert clock is not None
    columns = np.column_stack([times, states.position + wrong, states.velocity, clock])
    lines = {"system": "geometric", "particle": particle, "chart": "areal", "clock": "coordinate"}
    text = "".join(f'# {key} = "{value}"\n' for key, value in lines.items())
    return (
        f"{text}# gm = 1.0\ntime,x,y,z,vx,vy,vz,{'affine' if light else 'proper_time'}\n",
        columns,
    )


def long_files() -> None:
    """Files judged block by block, as those of many thousand rows are."""
    from truefall.validate import formats, screening
    from truefall.validate.budget import parse_budget_options
    from truefall.validate.check import check_file

    before = formats._LONG_BYTES, screening.MANY_ROWS
    formats._LONG_BYTES = 1
    screening.MANY_ROWS = 50
    try:
        with tempfile.TemporaryDirectory(prefix="truefall-selftest-") as folder:
            for light in (False, True):
                head, columns = _rows(light)
                for k, form in enumerate(("{:.17g}", "{:.9e}", "{:.6f}")):
                    path = Path(folder) / f"rows-{light}-{k}.csv"
                    rows = (",".join(form.format(value) for value in row) for row in columns)
                    path.write_text(head + "\n".join(rows) + "\n")
                    budget = parse_budget_options(("position=5e-8", "energy=1e-6"))
                    check_file(str(path), budget=budget)
    finally:
        formats._LONG_BYTES, screening.MANY_ROWS = before


def chunks() -> None:
    """The filters of HDF5 chunks, on bytes of every value."""
    import numpy as np

    from truefall.validate.streaming.decode import fletcher32, unshuffle8

    data = (np.arange(1600) * 37 % 256).astype(np.uint8)
    fletcher32(data)
    fletcher32(data[:1001])
    unshuffle8(data, np.zeros(200, dtype=np.uint64))


SCENARIOS = (
    "every_method", "every_equation", "two_words", "events", "ensembles", "falls",
    "hamiltonians", "tables", "flights", "long_files", "chunks",
)  # fmt: skip


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
