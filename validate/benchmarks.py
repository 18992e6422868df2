"""How fast the instrument is, in one run: ``python -m truefall.validate.benchmarks``.

Prints a table, and with ``--json`` one JSON document; ``--long`` measures long files too.
Machines are noisy: only ratios taken in
one run mean much.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.reference import Orbit

__all__ = ["best_of", "main", "measure", "show"]


def best_of(work: Callable[[], object], repeats: int = 3) -> float:
    """Shortest of a few runs, in seconds."""
    times = []
    for _ in range(repeats):
        begin = time.perf_counter()
        work()
        times.append(time.perf_counter() - begin)
    return min(times)


_REVOLUTIONS, _SAMPLES = 1000, 100


def _dop853(times: npt.NDArray[np.float64]) -> tuple[float, float]:
    """Seconds for SciPy's DOP853 with a compiled right-hand side, and its largest position error.

    Harmonic coordinates, rtol 1e-12, dense output at ``times``.
    """
    from scipy.integrate import solve_ivp

    from truefall.integrators.equations.rates import rate
    from truefall.integrators.index import EQUATIONS
    from truefall.integrators.starts import begin as state_of

    orbit = _subject()
    equations = EQUATIONS["harmonic"]
    x, v = np.array([orbit.position]), np.array([orbit.velocity])
    start, _, par, _ = state_of(equations, x, v, False)
    out = np.empty(equations.size)

    def rates(_t: float, y: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        rate(equations.kind, equations.variable("chart"), par[0], y, out)
        return out.copy()

    rates(0.0, start[0])  # compiled before the clock starts
    begin = time.perf_counter()
    done = solve_ivp(
        rates, (0.0, float(times[-1])), start[0], method="DOP853", t_eval=times,
        rtol=1e-12, atol=1e-14,
    )  # fmt: skip
    seconds = time.perf_counter() - begin
    picks = np.linspace(0, times.size - 1, 200).astype(int)
    error = done.y[:3, picks].T - orbit.at(times[picks]).position
    return seconds, float(np.linalg.norm(error, axis=1).max())


def _subject() -> Orbit:
    """The orbit that is measured: about p = 10, e = 0.3, in harmonic coordinates."""
    from truefall.reference import Orbit

    return Orbit(chart="harmonic", position=(6.6923, 0.0, 0.0), velocity=(0.0, 0.3317, 0.0))


def _table_figures(figures: dict[str, float]) -> None:
    """The table: speed, accuracy on the same build, and against DOP853."""
    from truefall.reference.table import build_table

    orbit = _subject()
    period = orbit.radial_period
    assert period is not None
    figures["build table, s"] = best_of(lambda: build_table(orbit, 0.0, 1.0))
    table = build_table(orbit, 0.0, 1.0)
    rng = np.random.default_rng(1)
    for name, turns in (("revolution 1", 0.0), ("revolution 1,000,000", 1e6)):
        times = np.sort((turns + rng.uniform(0, 1, 400)) * period.value)
        true, (position, velocity, clock) = orbit.at(times), table.at(times)
        assert true.proper_time is not None
        assert true.proper_time_low is not None
        pairs = (
            (position, true.position, true.position_low),
            (velocity, true.velocity, true.velocity_low),
            (clock[:, None], true.proper_time[:, None], true.proper_time_low[:, None]),
        )
        worst = max(
            float(np.max(np.linalg.norm((a - b) - c, axis=1) / np.spacing(_size(b))))
            for a, b, c in pairs
        )
        figures[f"table error at {name}, ulp of the vector's size"] = worst
    many = np.linspace(0.0, 1000 * period.value, 2_000_000)
    room = np.empty((many.size, 3)), np.empty((many.size, 3)), np.empty(many.size)
    table.fill(many, *room)
    rate = many.size / best_of(lambda: table.fill(many, *room), 5)
    figures["table states per second"] = rate
    times = np.linspace(0.0, _REVOLUTIONS * period.value, _REVOLUTIONS * _SAMPLES)
    seconds, error = _dop853(times)
    figures[f"DOP853, {_REVOLUTIONS:,} revolutions of {_SAMPLES} samples, s"] = seconds
    figures["its largest position error, GM/c^2"] = error
    at_hand = best_of(lambda: table.at(times), 5)
    figures["table at hand against it, times faster"] = seconds / at_hand
    built = best_of(lambda: build_table(_subject(), 0.0, 1.0).at(times))
    figures["table with orbit and building, times faster"] = seconds / built


def _size(vectors: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    return np.asarray(np.linalg.norm(vectors, axis=1))


def _process(*words: str) -> float:
    code = "from truefall.validate.cli import main; main()"
    return best_of(
        lambda: subprocess.run(
            [sys.executable, "-c", code, *words], capture_output=True, check=False
        )
    )


def measure() -> dict[str, float]:
    """All figures by name: rates per second, times in seconds, ratios."""
    from truefall.reference import Orbit
    from truefall.validate.formats import write_states
    from truefall.validate.orbit_file import parse_orbit

    keys = {"semilatus_rectum": 10.0, "eccentricity": 0.3}

    def fresh() -> Orbit:
        return Orbit.from_elements(semilatus_rectum=10.0, eccentricity=0.3)

    orbit = fresh()
    times = np.linspace(0.0, 3480.0, 2000)
    figures: dict[str, float] = {}
    figures["build orbit, s"] = best_of(lambda: fresh().at([0.0, 100.0]))
    figures["certified states per second"] = times.size / best_of(lambda: orbit.at(times))
    _table_figures(figures)
    with tempfile.TemporaryDirectory() as folder:
        spec = parse_orbit(
            {
                "system": "geometric", "gm": 1.0, "particle": "massive", "chart": "areal",
                "clock": "coordinate", "start": keys,
            },
            Path(folder) / "orbit.toml",
        )  # fmt: skip
        path = Path(folder) / "rows.csv"
        write_states(path, spec, orbit, orbit.at(np.linspace(0.0, 3480.0, 1000)))
        figures["check of 1,000 rows, whole process, s"] = _process(
            "check", str(path), "--budget", "position=1e-9"
        )
        figures["--help, whole process, s"] = _process("--help")
    return figures


def main() -> None:
    """Measure and print; ``--long`` adds files of ten million rows (some minutes, 1.5 GB)."""
    figures = measure()
    if "--long" in sys.argv[1:]:
        from truefall.validate.benchmarks_long import measure_long

        figures |= measure_long()
    show(figures)


def show(figures: Mapping[str, float]) -> None:
    """Print figures as a table, or with ``--json`` on the command line as one document."""
    if "--json" in sys.argv[1:]:
        print(json.dumps(figures, indent=1))
        return
    wide = max(len(name) for name in figures)
    for name, value in figures.items():
        print(f"{name:<{wide}}  {value:>12.4g}")


if __name__ == "__main__":
    main()
