"""Outside propagator 1: SciPy's DOP853 on geodesic equations written from the metric here.

Harmonic coordinates (Weinberg 1972, section 8.2, from memory), with R = |x|, n = x/R, s = n.v::

    g00 = -A,  A = (R - 1)/(R + 1),   g_ij = B delta_ij + C n_i n_j
    B = (1 + 1/R)^2,  C = (R + 1)/((R - 1) R^2)

    d2x/dt2 = -g^-1 (A'/2 n + S) + (A'/A) s v
    S = s B' v + n (s^2 C'/2 + C (v^2 - s^2)/R - B' v^2/2)
"""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from truefall.validate.check import check_file

C_LIGHT = 299792458.0


def harmonic_acceleration(x, v, m=1.0, c=1.0):
    """``d2x/dt2`` in harmonic coordinates; ``m = GM/c^2`` in the unit of ``x``."""
    big = np.sqrt(x @ x)
    n, w = x / big, v / c
    s, w2 = n @ w, w @ w
    a, da = (big - m) / (big + m), 2 * m / (big + m) ** 2
    b, db = (1 + m / big) ** 2, -2 * (1 + m / big) * m / big**2
    c_ = m**2 * (big + m) / ((big - m) * big**2)
    dc = c_ * (1 / (big + m) - 1 / (big - m) - 2 / big)
    force = (0.5 * da + 0.5 * s**2 * dc + c_ * (w2 - s**2) / big - 0.5 * db * w2) * n + s * db * w
    along = n @ force
    lifted = (force - n * along) / b + n * along / (b + c_)
    return c**2 * (-lifted + da / a * s * w)


def harmonic_run(position, velocity, times, rtol, m=1.0, c=1.0):
    """Rows time, x, v of a DOP853 run."""

    def rhs(_t, y):
        return np.concatenate([y[3:], harmonic_acceleration(y[:3], y[3:], m, c)])

    scale = np.linalg.norm(position)
    start = np.concatenate([position, velocity])
    done = solve_ivp(
        rhs, (times[0], times[-1]), start, method="DOP853", t_eval=times, rtol=rtol,
        atol=rtol * scale * 1e-3 * np.array([1, 1, 1, 1e-3, 1e-3, 1e-3]),
    )  # fmt: skip
    assert done.success
    return np.column_stack([done.t, done.y.T])


def painleve_run(position, velocity, times, rtol):
    """Rows of a run in Painleve-Gullstrand coordinates, through the horizon.

    ``ds^2 = -dT^2 + |dx + beta dT|^2``, ``beta = sqrt(2/r) n``; Hamilton's equations in T:
    ``dx/dT = p/u - beta``, ``dp/dT = grad (beta.p)``, ``u^2 = 1 + p^2`` (p is what a falling
    observer sees).
    """

    def beta(x):
        return np.sqrt(2.0) * x * (x @ x) ** -0.75

    def rhs(_t, y):
        x, p = y[:3], y[3:]
        r2, xp = x @ x, x @ p
        u = np.sqrt(1 + p @ p)
        slope = np.sqrt(2.0) * (p * r2**-0.75 - 1.5 * xp * x * r2**-1.75)
        return np.concatenate([p / u - beta(x), slope])

    seen = np.asarray(velocity) + beta(np.asarray(position))
    p0 = seen / np.sqrt(1 - seen @ seen)
    done = solve_ivp(
        rhs, (times[0], times[-1]), np.concatenate([position, p0]), method="DOP853",
        t_eval=times, rtol=rtol, atol=1e-14,
    )  # fmt: skip
    rows = []
    for t, y in zip(done.t, done.y.T, strict=True):
        x, p = y[:3], y[3:]
        rows.append([t, *x, *(p / np.sqrt(1 + p @ p) - beta(x))])
    return np.array(rows)


def write_csv(path: Path, rows, *, digits=0, **metadata) -> Path:
    """A file as a user would write it: shortest form or few digits, metadata in the header."""
    words = {
        "system": "geometric",
        "gm": 1.0,
        "particle": "massive",
        "clock": "coordinate",
    } | metadata
    lines = [f"# {k} = {json.dumps(v)}" for k, v in words.items()]
    lines.append("time,x,y,z,vx,vy,vz")
    text = (lambda v: f"{v:.{digits - 1}e}") if digits else (lambda v: repr(float(v)))
    lines += [",".join(map(text, row)) for row in rows]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


STRONG = ((12.0, 0.0, 0.0), (0.0, 0.25, 0.04))


def verdict_and_error(path, **budget):
    (result,) = check_file(path, budget=budget)
    return result.verdict, result.comparison.distance.max()


def test_the_verdict_follows_the_tolerance_of_the_integrator(tmp_path):
    """One budget, three tolerances: out, out by less, within; the errors fall with them."""
    times = np.linspace(0.0, 600.0, 121)
    errors, verdicts = [], []
    for k, rtol in enumerate((1e-5, 1e-8, 1e-12)):
        rows = harmonic_run(*STRONG, times, rtol)
        path = write_csv(tmp_path / f"run{k}.csv", rows, chart="harmonic")
        verdict, error = verdict_and_error(path, position=1e-7)
        verdicts.append(verdict)
        errors.append(error)

    assert verdicts == ["fail", "fail", "pass"]
    assert errors[0] > 30 * errors[1] > 900 * errors[2]


def test_the_reported_error_is_the_one_that_a_finer_run_shows(tmp_path):
    """Between loose and tight: the same number without truefall, and a verdict that turns there."""
    times = np.linspace(0.0, 600.0, 121)
    finest = harmonic_run(*STRONG, times, 1e-13)
    for rtol in (1e-5, 1e-7, 1e-9):
        rows = harmonic_run(*STRONG, times, rtol)
        seen = np.linalg.norm(rows[:, 1:4] - finest[:, 1:4], axis=1).max()
        path = write_csv(tmp_path / f"run{rtol}.csv", rows, chart="harmonic")
        (result,) = check_file(path, budget={"position": 1.0})

        assert result.comparison.distance.max() == pytest.approx(seen, rel=5e-3)
        assert verdict_and_error(path, position=1.01 * seen)[0] == "pass"
        assert verdict_and_error(path, position=0.99 * seen)[0] == "fail"


def test_few_digits_leave_a_tight_budget_undecided(tmp_path):
    """A good run in seven digits: neither passed nor failed below what the digits can show."""
    rows = harmonic_run(*STRONG, np.linspace(0.0, 200.0, 41), 1e-12)
    path = write_csv(tmp_path / "run.csv", rows, chart="harmonic", digits=7)

    assert verdict_and_error(path, position=1e-7)[0] == "undecided"
    assert verdict_and_error(path, position=1e-3)[0] == "pass"


def test_an_earth_satellite_in_metres_follows_it_too(tmp_path):
    """GM/(c^2 r) = 6e-10: a day within a millimetre at 1e-13, not at 1e-9."""
    gm = 3.986004418e14
    times = np.linspace(0.0, 86400.0, 97)
    verdicts = []
    for k, rtol in enumerate((1e-9, 1e-13)):
        rows = harmonic_run(
            (7.2e6, 0.0, 3e5), (10.0, 7300.0, 1200.0), times, rtol, m=gm / C_LIGHT**2, c=C_LIGHT
        )
        path = write_csv(tmp_path / f"sat{k}.csv", rows, chart="harmonic", system="SI", gm=gm)
        verdicts.append(verdict_and_error(path, position="1 mm")[0])

    assert verdicts == ["fail", "pass"]


def test_newton_for_the_same_satellite_is_caught(tmp_path):
    """The relativistic terms dropped: metres after a day, far from a millimetre."""
    gm = 3.986004418e14
    times = np.linspace(0.0, 86400.0, 25)

    def rhs(_t, y):
        return np.concatenate([y[3:], -gm * y[:3] / (y[:3] @ y[:3]) ** 1.5])

    start = [7.2e6, 0.0, 3e5, 10.0, 7300.0, 1200.0]
    done = solve_ivp(
        rhs, (0.0, 86400.0), start, method="DOP853", t_eval=times, rtol=1e-13, atol=1e-6
    )
    rows = np.column_stack([done.t, done.y.T])
    path = write_csv(tmp_path / "newton.csv", rows, chart="harmonic", system="SI", gm=gm)
    verdict, error = verdict_and_error(path, position="1 mm")

    assert verdict == "fail"
    assert error > 1.0


def test_light_in_harmonic_coordinates(tmp_path):
    """The same equation serves light; its direction comes from the first row."""
    x = np.array([-60.0, 8.0, 1.0])
    n = x / np.linalg.norm(x)
    big = np.linalg.norm(x)
    a, b = (big - 1) / (big + 1), (1 + 1 / big) ** 2
    c_ = (big + 1) / ((big - 1) * big**2)
    d = np.array([1.0, 0.0, 0.0])
    speed = np.sqrt(a / (b + c_ * (n @ d) ** 2))
    rows = harmonic_run(x, speed * d, np.linspace(0.0, 150.0, 61), 1e-12)
    path = write_csv(tmp_path / "ray.csv", rows, chart="harmonic", particle="light")

    assert verdict_and_error(path, position=1e-7)[0] == "pass"


def test_a_fall_through_the_horizon(tmp_path):
    """Painleve-Gullstrand, from r = 6 to r = 0.4, and past the end the file is failed."""
    position, velocity = (6.0, 0.0, 0.0), (-0.25, 0.2, 0.0)
    rows = painleve_run(position, velocity, np.linspace(0.0, 11.5, 116), 1e-12)
    assert np.linalg.norm(rows[-1, 1:4]) < 0.5
    path = write_csv(tmp_path / "fall.csv", rows, chart="painleve-gullstrand")
    assert verdict_and_error(path, position=1e-7)[0] == "pass"

    more = np.vstack([rows, [13.0, *rows[-1, 1:]]])
    path = write_csv(tmp_path / "beyond.csv", more, chart="painleve-gullstrand")
    (result,) = check_file(path, budget={"position": 1e-7})
    assert result.verdict == "fail"
    assert "r = 0" in result.reason


@pytest.mark.parametrize(("rtol", "status"), [(1e-12, 0), (1e-6, 1)])
def test_the_command_line_says_the_same(tmp_path, rtol, status):
    """Exit status and JSON of the installed command on such a file."""
    rows = harmonic_run(*STRONG, np.linspace(0.0, 200.0, 41), rtol)
    path = write_csv(tmp_path / "run.csv", rows, chart="harmonic")
    done = subprocess.run(
        [sys.executable, "-c", "from truefall.validate.cli import main; main()", "check", str(path),
         "--budget", "position=1e-8", "--json"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip

    assert done.returncode == status, done.stderr
    assert json.loads(done.stdout)["verdict"] == ("fail" if status else "pass")
