"""What the integrators are tried on: orbits of the catalogue, told in the equations' charts."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.integrators import Equations
    from truefall.reference import Orbit

__all__ = ["PROBLEMS", "Problem", "Truth", "truth_of"]

Floats = npt.NDArray[np.float64]
_SAMPLES = 33


@dataclass(frozen=True)
class Problem:
    """An orbit to be propagated.

    Attributes
    ----------
    name : str
        A case of the catalogue (geometric units, on its chart's time).
    last : float
        Chart time at which the run ends.
    why : str
        What it asks of a method, in a few words.
    rate : float or None
        Exact rate at which small errors grow on an unstable circle, per chart time: Cardoso et
        al. 2009, Phys. Rev. D 79, 064016: sqrt((6 - r)/r^4), light 1/(3 sqrt 3) (from memory).
    """

    name: str
    last: float
    why: str
    rate: float | None = None


PROBLEMS: tuple[Problem, ...] = (
    Problem("bound-strong", 3482.7, "ten radial periods in a strong field"),
    Problem("zoom-whirl", 3000.0, "whirls near the separatrix, where errors grow"),
    Problem("near-innermost", 5000.0, "close to the stability limit r = 6"),
    Problem(
        "circular-unstable",
        250.0,
        "the unstable circle r = 4: errors grow as exp(t/11.3)",
        2**0.5 / 16,
    ),
    Problem("flyby-fast", 760.0, "one quick pass at 0.4 c"),
    Problem("plunge-painleve", 186.0, "through the horizon, nearly to r = 0"),
    Problem("light-deflected", 220.0, "light, turned by sixty degrees"),
    Problem(
        "light-circular",
        110.0,
        "light on the photon sphere r = 3: errors grow as exp(t/5.2)",
        3**-1.5,
    ),
)


@dataclass(frozen=True)
class Truth:
    """A problem in one chart: the start, and the exact states at the samples.

    Attributes
    ----------
    times : (n,)
    position, velocity : (n, 3)
        The nearest float64 numbers, with second words ``position_low``.
    clock : (n,)
        Proper time or affine parameter.
    radius : (n,)
        Areal.
    turns : float
        Revolutions over the run.
    """

    orbit: Orbit
    times: Floats
    position: Floats
    position_low: Floats
    velocity: Floats
    clock: Floats
    radius: Floats
    turns: float

    @property
    def light(self) -> bool:
        """Whether it is a ray."""
        return self.orbit.particle == "light"


@lru_cache(maxsize=64)
def _truth(name: str, last: float, chart: str) -> Truth | None:
    from truefall.reference import Orbit
    from truefall.reference.charts import convert
    from truefall.validate.cases import case

    spec = case(name).spec
    orbit = spec.orbit()
    if chart != spec.chart:
        x, v = np.array([orbit.position]), np.array([orbit.velocity_used])
        position, velocity = convert(x, v, spec.chart, chart)
        assert velocity is not None
        orbit = Orbit(
            chart=chart, particle=spec.particle, position=tuple(position[0].tolist()),
            velocity=tuple(velocity[0].tolist()), start_time=spec.start_time,
        )  # fmt: skip
    times = np.linspace(spec.start_time, last, _SAMPLES)
    if not orbit.reachable(times).all():
        return None  # a static chart never sees the fall through the horizon
    states = orbit.at(times)
    clock = states.proper_time if states.affine is None else states.affine
    assert clock is not None
    return Truth(
        orbit, times, states.position, states.position_low, states.velocity, clock, states.radius,
        abs(float(states.winding[-1])),
    )  # fmt: skip


def truth_of(problem: Problem, equations: Equations) -> Truth | None:
    """The truth in the chart of a set of equations; None where that chart does not reach."""
    if equations.chart == "none" or (equations.static and problem.name.startswith("plunge")):
        return None
    return _truth(problem.name, problem.last, equations.chart)
