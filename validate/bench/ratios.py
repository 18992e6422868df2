"""How fast the integrators are against general-purpose solvers: ``python -m
truefall.validate.bench.ratios [--json]``.

All figures of one run, on one orbit (p = 10, e = 0.3) with the same equations and the same
compiled right-hand side for everybody.  Machines are noisy: only the ratios mean much.  SUNDIALS'
CVODE (scikit-sundae, the extra ``truefall[bench]``, which calls the compiled right-hand side
through Python) and ODEPACK's LSODA with a C pointer (numbalsoda) take part where they are
installed.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.bench.problems import Problem, Truth, truth_of
from truefall.validate.benchmarks import best_of, show

__all__ = ["main", "measure"]

Floats = npt.NDArray[np.float64]
Rates = Callable[[float, Floats, Floats], None]

_PERIOD = 348.2740951  # of p = 10, e = 0.3: the length of the runs, not an expected value
#: Equations in which everybody is tried: regularised, and plain.
_EQUATIONS = (("mino", "radius-squared"), ("areal", "proper"))


class _Subject:
    """The orbit in a set of equations: start, rates, and how a final state is held to the truth."""

    def __init__(self, equations: str, variable: str, turns: int) -> None:
        from truefall.integrators import EQUATIONS
        from truefall.integrators.starts import begin

        self.name, self.variable, self.turns = equations, variable, turns
        self.equations = EQUATIONS[equations]
        truth = truth_of(Problem("bound-strong", turns * _PERIOD, ""), self.equations)
        assert truth is not None
        self.truth: Truth = truth
        states, _, pars, _ = begin(
            self.equations, truth.position[:1], truth.velocity[:1], truth.light
        )
        self.start: Floats = states[0].copy()
        self.par: Floats = pars[0].copy()
        self.span = self._span()

    def _span(self) -> float:
        """How far the independent variable runs, by quadrature along the exact orbit."""
        last = float(self.truth.times[-1])
        per_turn = 0.0
        # the variable's weight is known at exact states only: quadrature over one period, times
        times = np.linspace(0.0, _PERIOD, 20_001)
        from truefall.reference.table import build_table

        position, _, clock = build_table(self.truth.orbit, 0.0, 1.0).at(times)
        weight = np.linalg.norm(position, axis=1) ** (-2.0 if self.name == "mino" else 0.0)
        per_turn = float(np.sum(0.5 * (weight[1:] + weight[:-1]) * np.diff(clock)))
        return per_turn * last / _PERIOD

    def rates(self) -> Rates:
        """``f(t, y, out)``, compiled."""
        import numba

        from truefall.integrators.equations.rates import rate

        kind, variable = self.equations.kind, self.equations.variable(self.variable)
        par = self.par

        @numba.njit(error_model="numpy")
        def fill(_t: float, y: Floats, out: Floats) -> None:
            rate(kind, variable, par, y, out)

        fill(0.0, self.start, np.empty_like(self.start))
        found: Rates = fill
        return found

    def error(self, state: Floats) -> float:
        """Position error of a final state against the exact orbit at its own chart time."""
        from truefall.integrators.equations.rates import place

        position = np.empty(3)
        place(self.equations.kind, state, position)
        elapsed = float(state[self.equations.time_row] - self.start[self.equations.time_row])
        exact = self.truth.orbit.at([elapsed])
        return float(np.linalg.norm((position - exact.position[0]) - exact.position_low[0]))


#: Our own methods that are tried, with orders where these are free.
_OURS: dict[str, tuple[int | None, ...]] = {
    "taylor": (28, 32, 36, 40, 44), "dormand-prince-8": (None,), "gauss-radau-15": (None,),
}  # fmt: skip


def _ours(subject: _Subject, goal: float) -> tuple[float, float, str]:
    """Seconds, error and name of our fastest run whose position error meets the goal."""
    from truefall.integrators import propagate

    truth = subject.truth
    times = np.array([0.0, float(truth.times[-1])])
    exact = truth.orbit.at(times[1:])
    best = (np.inf, np.inf, "none")
    for method, orders in _OURS.items():
        for order in orders:
            for exponent in np.arange(9.0, 18.0, 0.5).tolist():

                def run(
                    method: str = method, order: int | None = order, small: float = 10.0**-exponent
                ) -> Any:
                    return propagate(
                        subject.name, truth.position[0], truth.velocity[0], times, method=method,
                        variable=subject.variable, tolerance=small, order=order,
                    )  # fmt: skip

                error = float(np.linalg.norm(run().position[1] - exact.position[0]))
                tighter = run(small=10.0**-exponent / 3)
                second = float(np.linalg.norm(tighter.position[1] - exact.position[0]))
                if max(error, second) <= goal:  # no lucky crossing of zero
                    seconds = best_of(run, 10)
                    if seconds < best[0]:
                        best = seconds, error, f"{method}" + (f" of order {order}" if order else "")
                    break
    return best


def _scipy(subject: _Subject, rates: Rates) -> tuple[float, float]:
    """SciPy's DOP853 at the tightest tolerance that it accepts."""
    from scipy.integrate import solve_ivp

    room = np.empty_like(subject.start)

    def call(t: float, y: Floats) -> Floats:
        rates(t, y, room)
        return room.copy()

    def run() -> Any:
        return solve_ivp(
            call, (0.0, subject.span), subject.start, method="DOP853", rtol=3e-14, atol=1e-16
        )

    done = run()
    return best_of(run, 5), subject.error(done.y[:, -1])


def _cvode(subject: _Subject, rates: Rates) -> tuple[float, float] | None:
    """SUNDIALS' CVODE (Adams) at the tolerance at which it is most accurate."""
    try:
        from sksundae.cvode import CVODE
    except ImportError:
        return None
    best: tuple[float, float] | None = None
    # more than two stamps: with two, Python is entered after every step
    span = np.linspace(0.0, subject.span, 3)
    for rtol in (1e-12, 1e-13, 1e-14):
        solver = CVODE(rates, method="Adams", rtol=rtol, atol=rtol * 1e-3, max_num_steps=10_000_000)
        done = solver.solve(span, subject.start)
        if not done.success:
            continue
        error = subject.error(np.asarray(done.y)[-1])
        if best is None or error < best[1]:
            best = best_of(partial(solver.solve, span, subject.start), 5), error
    return best


def _lsoda(subject: _Subject) -> tuple[float, float] | None:
    """ODEPACK's LSODA with a right-hand side that is a C pointer."""
    try:
        import numbalsoda
    except ImportError:
        return None
    import numba
    from numba import carray  # type: ignore[attr-defined]

    from truefall.integrators.equations.rates import rate

    kind, variable = subject.equations.kind, subject.equations.variable(subject.variable)
    size, par = subject.start.size, subject.par.copy()

    @numba.cfunc(numbalsoda.lsoda_sig)
    def fill(_t, y, out, _p):  # type: ignore[no-untyped-def]
        rate(kind, variable, par, carray(y, (size,)), carray(out, (size,)))

    # it allows 10,000 steps from one output to the next
    stamps = np.linspace(0.0, subject.span, 1001)
    best: tuple[float, float] | None = None
    for rtol in (1e-11, 1e-12, 1e-13):

        def run(rtol: float = rtol) -> tuple[Floats, bool]:
            found: tuple[Floats, bool] = numbalsoda.lsoda(
                fill.address, subject.start, stamps, rtol=rtol, atol=rtol * 1e-3
            )
            return found

        states, success = run()
        if not success:
            continue
        error = subject.error(states[-1])
        if best is None or error < best[1]:
            best = best_of(run, 5), error
    return best


def _against_others(figures: dict[str, float], turns: int) -> None:
    for equations, variable in _EQUATIONS:
        subject = _Subject(equations, variable, turns)
        rates = subject.rates()
        ours, error, name = _ours(subject, 1e-10)
        label = f"{turns} periods, {equations}"
        figures[f"{label}: ours ({name}), s"] = ours
        figures[f"{label}: ours, position error"] = error
        others = {
            "DOP853 (SciPy)": _scipy(subject, rates),
            "CVODE (SUNDIALS, called through Python)": _cvode(subject, rates),
            "LSODA (ODEPACK)": _lsoda(subject),
        }
        for other, found in others.items():
            if found is not None:
                figures[f"{label}: {other}, s"] = found[0]
                figures[f"{label}: {other}, position error"] = found[1]
                figures[f"{label}: ours against {other}, times faster"] = found[0] / ours


def _ensemble(figures: dict[str, float], orbits: int, turns: int) -> None:
    """Many orbits on one core and on two, medians of five."""
    from truefall.integrators import ensemble
    from truefall.reference import Orbit

    subject = _Subject("mino", "radius-squared", turns)
    rng = np.random.default_rng(3)
    x = np.repeat(subject.truth.position[:1], orbits, axis=0)
    v = subject.truth.velocity[:1] * (1 + 0.05 * rng.uniform(-1, 1, (orbits, 1)))
    times = np.array([0.0, turns * _PERIOD])

    def run(threads: int) -> Any:
        return ensemble(
            "mino", x, v, times, method="taylor", variable="radius-squared", tolerance=1e-15,
            threads=threads,
        )  # fmt: skip

    done = run(1)
    errors = []
    for k in range(0, orbits, max(1, orbits // 20)):
        exact = Orbit(position=tuple(x[k]), velocity=tuple(v[k])).at(times[1:]).position[0]
        errors.append(float(np.linalg.norm(done.position[k, -1] - exact)))
    cores = min(2, len(os.sched_getaffinity(0)))
    seconds = {}
    for threads in (1, cores):
        measured = []
        for _ in range(5):
            begin = time.perf_counter()
            run(threads)
            measured.append(time.perf_counter() - begin)
        seconds[threads] = float(np.median(measured))
    label = f"{orbits:,} orbits of {turns} periods"
    figures[f"{label}: largest position error of twenty"] = max(errors)
    figures[f"{label}: {cores} cores against one, times faster"] = seconds[1] / seconds[cores]
    figures[f"{label}: periods a second on {cores} cores"] = orbits * turns / seconds[cores]


def _horizon(figures: dict[str, float]) -> None:
    """A plunge in Kerr-Schild coordinates: accuracy just before and well after r = 2."""
    from truefall.integrators import propagate
    from truefall.reference import Orbit

    orbit = Orbit(chart="kerr-schild", position=(6.0, 0, 0), velocity=(-0.25, 0.2, 0))
    end = orbit.ends_after
    assert end is not None
    times = np.linspace(0.0, end.time * 0.98, 400)
    exact = orbit.at(times)
    run = propagate(
        "kerr-schild", orbit.position, orbit.velocity, times, method="taylor", tolerance=1e-16
    )
    error = np.linalg.norm(run.position - exact.position, axis=1)
    outside = exact.radius > 2
    figures["plunge in Kerr-Schild: largest error outside r = 2"] = float(error[outside].max())
    figures["plunge in Kerr-Schild: largest error inside r = 2"] = float(error[~outside].max())


def measure(turns: int = 100, orbits: int = 10_000, short: int = 10) -> dict[str, float]:
    """All figures by name."""
    figures: dict[str, float] = {}
    _against_others(figures, turns)
    _ensemble(figures, orbits, short)
    _horizon(figures)
    return figures


def main() -> None:
    """Measure and print."""
    show(measure())


if __name__ == "__main__":
    main()
