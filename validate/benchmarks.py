"""How fast the instrument is, in one run: ``python -m truefall.validate.benchmarks``.

Prints a table, and with ``--json`` one JSON document.  Machines are noisy: only ratios taken in
one run mean much.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import numpy.typing as npt

__all__ = ["main", "measure"]


def _best(work: Callable[[], object], repeats: int = 3) -> float:
    """Shortest of a few runs, in seconds."""
    times = []
    for _ in range(repeats):
        begin = time.perf_counter()
        work()
        times.append(time.perf_counter() - begin)
    return min(times)


def _dop853(rows: int, span: float) -> tuple[float, float]:
    """Seconds for SciPy's DOP853 (compiled right-hand side) and its position error at the end."""
    from scipy.integrate import solve_ivp

    from truefall.integrators.equations.rates import rate
    from truefall.integrators.index import EQUATIONS
    from truefall.integrators.starts import begin as state_of
    from truefall.reference import Orbit

    equations = EQUATIONS["harmonic"]
    x, v = np.array([11.0, 0.0, 0.0]), np.array([0.0, 0.27, 0.0])
    times = np.linspace(0.0, span, rows)
    start, _, par, _ = state_of(equations, x[None], v[None], False)
    out = np.empty(equations.size)

    def rates(_t: float, y: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        rate(equations.kind, equations.variable("chart"), par[0], y, out)
        return out.copy()

    rates(0.0, start[0])  # compiled before the clock starts
    begin = time.perf_counter()
    done = solve_ivp(
        rates, (0.0, span), start[0], method="DOP853",
        t_eval=times, rtol=1e-12, atol=1e-13,
    )  # fmt: skip
    seconds = time.perf_counter() - begin
    exact = Orbit(chart="harmonic", position=x, velocity=v).at([span])
    return seconds, float(np.linalg.norm(done.y[:3, -1] - exact.position[0]))


def _process(*words: str) -> float:
    code = "from truefall.validate.cli import main; main()"
    return _best(
        lambda: subprocess.run(
            [sys.executable, "-c", code, *words], capture_output=True, check=False
        )
    )


def measure() -> dict[str, float]:
    """All figures by name: rates per second, times in seconds, ratios."""
    from truefall.reference import Orbit
    from truefall.reference.table import build_table
    from truefall.validate.formats import write_states
    from truefall.validate.orbit_file import parse_orbit

    keys = {"semilatus_rectum": 10.0, "eccentricity": 0.3}

    def fresh() -> Orbit:
        return Orbit.from_elements(semilatus_rectum=10.0, eccentricity=0.3)

    orbit = fresh()
    times = np.linspace(0.0, 3480.0, 2000)
    figures: dict[str, float] = {}
    figures["build orbit, s"] = _best(lambda: fresh().at([0.0, 100.0]))
    figures["certified states per second"] = times.size / _best(lambda: orbit.at(times))
    figures["build table, s"] = _best(lambda: build_table(orbit, 0.0, 1.0))
    table = build_table(orbit, 0.0, 1.0)
    many = np.linspace(0.0, 3.48e5, 2_000_000)
    table.at(many[:10])
    figures["table states per second"] = many.size / _best(lambda: table.at(many))
    seconds, error = _dop853(2000, 3480.0)
    figures["DOP853 (compiled right-hand side), states per second"] = 2000 / seconds
    figures["its position error at the end, GM/c^2"] = error
    figures["table against it, times faster"] = (
        figures["table states per second"]
        / figures["DOP853 (compiled right-hand side), states per second"]
    )
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
    """Measure and print."""
    figures = measure()
    if "--json" in sys.argv[1:]:
        print(json.dumps(figures, indent=1))
        return
    wide = max(len(name) for name in figures)
    for name, value in figures.items():
        print(f"{name:<{wide}}  {value:>12.4g}")


if __name__ == "__main__":
    main()
