"""Long runs: how position and energy of a few methods drift over many revolutions."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.bench.problems import Problem, truth_of

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

__all__ = ["LONG_RUNS", "Drifting", "long_run"]

Floats = npt.NDArray[np.float64]

_PERIOD = 348.274  # of p = 10, e = 0.3; only sets how long the runs are
#: Method, equations, variable and how it is run, about equally many evaluations a revolution.
LONG_RUNS: tuple[tuple[str, str, str, dict[str, float]], ...] = (
    ("runge-kutta-4", "areal", "proper", {"step": 1.0}),
    ("dormand-prince-8", "areal", "proper", {"tolerance": 1e-10}),
    ("gauss-legendre-8", "areal", "proper", {"step": 4.0}),
    ("four-part-yoshida-4", "areal", "proper", {"step": 1.0}),
    ("time-transformed-blanes-moan-6", "areal-cartesian", "radius", {"step": 0.5}),
    ("taylor", "mino", "radius-squared", {"tolerance": 1e-17}),
)


@dataclass(frozen=True)
class Drifting:
    """A long run.

    Attributes
    ----------
    time : (n,)
        Radial periods.
    position : (n,)
        Error relative to the size.
    energy : (n,)
        Drift of E relative to max(|E - 1|, 1/r), sizes.
    """

    method: str
    equations: str
    time: Floats
    position: Floats
    energy: Floats
    evaluations: int


def long_run(
    name: str, equations: str, variable: str, how: dict[str, Any], periods: float, samples: int
) -> Drifting:
    """A method on p = 10, e = 0.3 over many radial periods."""
    from truefall.integrators import EQUATIONS, propagate
    from truefall.reference.invariants import state_invariants
    from truefall.reference.table import build_table

    chosen = EQUATIONS[equations]
    truth = truth_of(Problem("bound-strong", 3482.7, ""), chosen)
    assert truth is not None
    times = np.unique(np.concatenate([[0.0], np.geomspace(0.2, periods, samples)])) * _PERIOD
    run = propagate(
        equations,
        truth.position[0],
        truth.velocity[0],
        times,
        method=name,
        variable=variable,
        **how,
    )
    exact, _, _ = build_table(truth.orbit, 0.0, 1.0).at(times)
    inv = state_invariants(run.position, run.velocity, chosen.chart, "geometric", 1.0, "massive")
    error = np.linalg.norm(run.position - exact, axis=1) / np.linalg.norm(exact, axis=1)
    drift = (inv.energy_minus_one - truth.orbit.energy_minus_one.value) / inv.scale
    return Drifting(
        name, equations, times[1:] / _PERIOD, error[1:], np.abs(drift[1:]), run.evaluations
    )


def long_runs(methods: Sequence[str], quick: bool, tell: Callable[[str], None]) -> list[Drifting]:
    """The long runs of the methods that are asked for (all without any)."""
    from truefall.integrators import METHODS

    periods, samples = (30.0, 60) if quick else (3000.0, 400)
    found = []
    for name, equations, variable, how in LONG_RUNS:
        if name in METHODS and (not methods or name in methods):
            tell(f"long run: {name}")
            found.append(long_run(name, equations, variable, dict(how), periods, samples))
    return found
