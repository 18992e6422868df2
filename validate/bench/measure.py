"""One run of one method, held against the truth."""

from __future__ import annotations

import time
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.bench.problems import Problem, Truth, truth_of

if TYPE_CHECKING:
    from truefall.integrators import Equations, Method, Run

__all__ = ["Job", "Measured", "controls_of", "measure"]

Floats = npt.NDArray[np.float64]

#: Share of the whole run that a step of the coarsest fixed-step run takes, by revolutions.
_STEPS_A_TURN = 20
_LEAST_STEPS = 100
#: A run slower than this is not repeated for its time.
_SLOW = 0.3
_MOST_STEPS = 5_000_000
#: Relative errors in radius between which their growth is that of the instability.
_SEEN, _SATURATED = 1e-11, 1e-4


@dataclass(frozen=True)
class Job:
    """A method on a problem in a set of equations, at several steps or tolerances.

    ``controls`` are tolerances of adaptive methods, numbers of steps of the others.
    """

    problem: Problem
    equations: str
    variable: str
    method: str
    controls: tuple[float, ...]


@dataclass(frozen=True)
class Measured:
    """Accuracy and cost of one run.

    Attributes
    ----------
    control : float
        Tolerance, or number of steps over the whole run.
    position, velocity, clock : float
        Largest error at the samples, relative to the size of the vector (clock: to the last
        reading); infinite where a row was not reached.
    energy, momentum, tilt, norm : float
        Largest drifts: E relative to max(|E - 1|, 1/r) (NaN for light, whose E is 1 by scaling),
        the vector L relative to its size, the sine of its change of direction, g(v, v) of light
        (NaN for particles).
    growth : float
        Measured rate at which the error grows on an unstable circle, per chart time; NaN on other
        orbits, and where the error is not seen to grow.
    steps, rejected, evaluations : int
    seconds : float
        Best of three runs, compilation left out.
    status : str
    """

    problem: str
    equations: str
    variable: str
    method: str
    control: float
    position: float
    velocity: float
    clock: float
    energy: float
    momentum: float
    tilt: float
    norm: float
    growth: float
    steps: int
    rejected: int
    evaluations: int
    seconds: float
    status: str

    def as_json(self) -> dict[str, Any]:
        """Plain numbers; null where there is none."""
        return {
            k: None if isinstance(v, float) and not np.isfinite(v) else v
            for k, v in asdict(self).items()
        }


def controls_of(method: Method, truth: Truth, quick: bool) -> tuple[float, ...]:
    """Tolerances, or numbers of steps doubling from a coarse run."""
    if method.adaptive:
        exponents = (5, 9, 13) if quick else (4, 6, 8, 10, 12, 14)
        return tuple(10.0**-k for k in exponents)
    coarse = max(_LEAST_STEPS, _STEPS_A_TURN * truth.turns)
    return tuple(float(round(coarse * 2**k)) for k in ((0, 2, 4) if quick else range(6)))


def _span(truth: Truth, variable: str, chart_radius: Floats) -> float:
    """How far the independent variable runs, from the exact clock (trapezoidal rule)."""
    if variable == "chart":
        return float(abs(truth.times[-1] - truth.times[0]))
    power = {"proper": 0.0, "radius": 1.0, "radius-3/2": 1.5, "radius-squared": 2.0}[variable]
    weight = chart_radius**-power
    return float(abs(np.sum(0.5 * (weight[1:] + weight[:-1]) * np.diff(truth.clock))))


def _how(job: Job, method: Method, truth: Truth, control: float) -> dict[str, Any]:
    if method.adaptive:
        return {"tolerance": control}
    size = np.linalg.norm(truth.position, axis=1)
    return {"step": _span(truth, job.variable, size) / control}


def measure(job: Job, repeats: int = 3) -> list[Measured]:
    """All runs of a job; a run that stops early is told as such, the others go on."""
    from truefall.integrators import EQUATIONS, METHODS, propagate

    equations, method = EQUATIONS[job.equations], METHODS[job.method]
    truth = truth_of(job.problem, equations)
    assert truth is not None
    found = []
    for control in job.controls:
        options = _how(job, method, truth, control)

        def run(options: dict[str, Any] = options) -> Run:
            return propagate(
                job.equations, truth.position[0], truth.velocity[0], truth.times,
                method=job.method, particle=truth.orbit.particle, variable=job.variable,
                max_steps=_MOST_STEPS, **options,
            )  # fmt: skip

        try:
            done = run()  # the first may compile
        except (ArithmeticError, ValueError) as error:
            found.append(_refused(job, control, error))
            continue
        seconds = np.inf
        for _ in range(repeats):
            begin = time.perf_counter()
            run()
            seconds = min(seconds, time.perf_counter() - begin)
            if seconds > _SLOW:
                break
        found.append(_held(job, equations, truth, done, control, seconds))
    return found


def _refused(job: Job, control: float, error: Exception) -> Measured:
    """A run that could not be made: nothing measured, and why."""
    none = float("nan")
    return Measured(
        problem=job.problem.name, equations=job.equations, variable=job.variable,
        method=job.method, control=control, position=float("inf"), velocity=none, clock=none,
        energy=none, momentum=none, tilt=none, norm=none, growth=none, steps=0, rejected=0,
        evaluations=0, seconds=none, status=f"refused: {error}"[:200],
    )  # fmt: skip


def _held(
    job: Job, equations: Equations, truth: Truth, run: Run, control: float, seconds: float
) -> Measured:
    from truefall.reference.invariants import state_invariants

    def largest(values: Floats) -> float:
        return float(np.max(np.where(np.isfinite(values), np.abs(values), np.inf)))

    error = (run.position - truth.position) - truth.position_low
    sizes = [np.linalg.norm(a, axis=1) for a in (truth.position, truth.velocity)]
    inv = state_invariants(
        run.position, run.velocity, equations.chart, "geometric", 1.0, truth.orbit.particle
    )
    orbit, normal = truth.orbit, np.asarray(truth.orbit.angular_momentum_direction)
    true = orbit.angular_momentum.value
    moment = np.linalg.norm(inv.angular_momentum, axis=1)
    with np.errstate(invalid="ignore"):
        tilt = np.linalg.norm(np.cross(inv.angular_momentum / moment[:, None], normal), axis=1)
        turn = np.linalg.norm(inv.angular_momentum - true * normal, axis=1) / true
        drift = (inv.energy_minus_one - orbit.energy_minus_one.value) / inv.scale
    return Measured(
        problem=job.problem.name, equations=job.equations, variable=job.variable,
        method=job.method, control=control,
        position=largest(np.linalg.norm(error, axis=1) / sizes[0]),
        velocity=largest(np.linalg.norm(run.velocity - truth.velocity, axis=1) / sizes[1]),
        clock=largest(run.clock - truth.clock) / abs(float(truth.clock[-1])),
        energy=float("nan") if truth.light else largest(drift), momentum=largest(turn),
        tilt=largest(tilt), norm=largest(inv.null) if truth.light else float("nan"),
        growth=_growth(job.problem, truth, run.position),
        steps=run.steps, rejected=run.rejected, evaluations=run.evaluations, seconds=seconds,
        status=run.status,
    )  # fmt: skip


def _growth(problem: Problem, truth: Truth, position: Floats) -> float:
    """Slope of the logarithm of the error in radius, between rounding and saturation."""
    if problem.rate is None:
        return float("nan")
    # the true radius is constant: along the track errors may grow without any instability
    size = np.linalg.norm(position, axis=1)
    with np.errstate(invalid="ignore"):
        error = np.abs(size / np.linalg.norm(truth.position, axis=1) - 1)
        # at first the error is still that of the method, which keeps setting it off
        use = (error > max(_SEEN, 100 * error[1])) & (error < _SATURATED)
    if use.sum() < 4:
        return float("nan")
    elapsed = np.abs(truth.times - truth.times[0])
    return float(np.polyfit(elapsed[use], np.log(error[use]), 1)[0])
