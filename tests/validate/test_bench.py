"""The bench: honest figures, files that others read, and orders that are the nominal ones."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import h5py
import numpy as np
import pytest

from truefall.integrators import EQUATIONS, METHODS
from truefall.reference import Orbit
from truefall.validate.bench import measure as measuring
from truefall.validate.bench import ratios
from truefall.validate.bench.drifts import LONG_RUNS, long_run
from truefall.validate.bench.measure import Job, controls_of, measure
from truefall.validate.bench.plan import jobs_of
from truefall.validate.bench.problems import PROBLEMS, Problem, truth_of
from truefall.validate.bench.results import document, orders_of
from truefall.validate.bench.summary import text
from truefall.validate.errors import UsageError

SHORT = Problem("bound-strong", 200.0, "half a radial period")


def job(method, equations="areal", variable="proper", problem=SHORT, controls=None):
    if controls is None:
        truth = truth_of(problem, EQUATIONS[equations])
        controls = controls_of(METHODS[method], truth, quick=True)
    return Job(problem, equations, variable, method, controls)


def test_a_combination_that_makes_sense_exists_for_every_method_and_equation():
    """Nothing is left out by construction: what the index holds is run."""
    jobs = jobs_of()

    assert {j.method for j in jobs} == set(METHODS)
    assert {j.equations for j in jobs} == {e.name for e in EQUATIONS.values() if e.chart != "none"}
    assert {j.problem.name for j in jobs} == {p.name for p in PROBLEMS}


@pytest.mark.parametrize("chart", ["areal", "isotropic", "harmonic", "kerr-schild"])
def test_the_truth_is_the_orbit_of_the_catalogue_told_in_another_chart(chart):
    """Areal radii at the same static times agree; the ingoing charts have times of their own."""
    from truefall.validate.cases import case

    equations = next(e for e in EQUATIONS.values() if e.chart == chart)
    truth = truth_of(PROBLEMS[0], equations)
    own = case("bound-strong").spec.orbit()

    assert truth.orbit.energy_minus_one.value == pytest.approx(
        own.energy_minus_one.value, rel=1e-13
    )
    assert truth.orbit.angular_momentum.value == pytest.approx(
        own.angular_momentum.value, rel=1e-13
    )
    if chart != "kerr-schild":
        np.testing.assert_allclose(truth.radius, own.at(truth.times).radius, rtol=1e-8)


def test_errors_are_those_of_a_second_look():
    """Runge-Kutta by hand-made comparison; a static chart has no plunge through the horizon."""
    (row,) = measure(job("runge-kutta-4", controls=(400.0,)), repeats=1)
    from truefall.integrators import propagate

    orbit = Orbit.from_elements(semilatus_rectum=10.0, eccentricity=0.3)
    times = np.linspace(0.0, 200.0, 33)
    states = orbit.at(times)
    step = float(states.proper_time[-1]) / 400
    run = propagate(
        "areal", orbit.position, orbit.velocity, times, method="runge-kutta-4", step=step
    )
    error = np.linalg.norm(run.position - states.position, axis=1)

    assert row.status == "finished"
    assert row.position == pytest.approx(
        np.max(error / np.linalg.norm(states.position, axis=1)), rel=0.05
    )
    assert row.evaluations == run.evaluations
    plunge = next(p for p in PROBLEMS if p.name == "plunge-painleve")
    assert truth_of(plunge, EQUATIONS["harmonic"]) is None
    assert truth_of(plunge, EQUATIONS["kerr-schild"]) is not None


@pytest.mark.parametrize(
    ("method", "coarse"),
    [("runge-kutta-4", 200.0), ("gauss-legendre-6", 10.0), ("four-part-yoshida-4", 200.0)],
)
def test_measured_orders_are_the_nominal_ones(method, coarse):
    """From the bench's own runs, where truncation rules."""
    rows = measure(job(method, controls=(coarse, 2 * coarse, 4 * coarse)), repeats=1)
    (order,) = orders_of(rows).values()

    assert order == pytest.approx(METHODS[method].order, abs=0.3)


def test_errors_on_the_unstable_circles_grow_at_the_exact_rate():
    """Massive at r = 4, light at r = 3, after something has set them off."""
    for problem in PROBLEMS:
        if problem.rate is None:
            continue
        rows = measure(
            job("runge-kutta-4", "harmonic", problem=problem, controls=(2000.0,)), repeats=1
        )
        assert rows[0].growth == pytest.approx(problem.rate, rel=0.05)


def test_a_run_that_stops_early_is_told_as_such(monkeypatch):
    """The step limit here; its error is infinite, its JSON null, and the page names it."""
    monkeypatch.setattr(measuring, "_MOST_STEPS", 1000)
    rows = measure(
        job("runge-kutta-4", controls=(5000.0,), problem=Problem("bound-strong", 200.0, "")), 1
    )

    assert rows[0].status == "step limit"
    assert rows[0].position == np.inf
    assert document(rows, [], {})["runs"][0]["position"] is None
    assert "did not reach the end: runge-kutta-4 (areal): step limit" in text(rows, [], {})


def test_what_was_not_measured_is_not_told_as_perfect():
    """Light has no energy to drift, particles no norm: null in the document."""
    light = next(p for p in PROBLEMS if p.name == "light-deflected")
    rows = measure(job("runge-kutta-4", problem=light, controls=(200.0,)), 1)
    rows += measure(job("runge-kutta-4", controls=(200.0,)), 1)
    first, second = document(rows, [], {})["runs"]

    assert first["energy"] is None
    assert first["norm"] > 0
    assert second["norm"] is None
    assert second["energy"] > 0


def test_patterns_that_match_nothing_are_refused_with_a_hint():
    """One sentence, with what is near."""
    with pytest.raises(UsageError, match="did you mean 'taylor'"):
        jobs_of(["tailor"])
    with pytest.raises(UsageError, match="no case matches"):
        jobs_of(problems=["nowhere"])
    with pytest.raises(UsageError, match="no such method can run"):
        jobs_of(["mino-leapfrog-strang-2"], ["harmonic"])


@pytest.fixture(scope="module")
def small_bench(tmp_path_factory):
    """The command itself, small, in this process."""
    import contextlib
    import io

    from truefall.validate.cli import main

    folder = tmp_path_factory.mktemp("bench") / "out"
    out = io.StringIO()
    with contextlib.redirect_stdout(out), pytest.raises(SystemExit) as ended:
        main(
            ["bench", "--quick", "--jobs", "1", "--methods", "runge-kutta-4", "--methods",
             "gauss-legendre-8", "--cases", "flyby-fast", "--out", str(folder), "--json"]
        )  # fmt: skip
    return folder, ended.value.code, out.getvalue()


def test_the_command_writes_one_document_and_files_that_others_read(small_bench):
    """JSON alone on stdout; HDF5 with scales, CSV, pictures and a page without network."""
    folder, status, out = small_bench
    found = json.loads(out)
    runs = [r for r in found["runs"] if r["method"] == "runge-kutta-4"]

    assert status == 0
    assert len(runs) == 3
    assert runs[0]["position"] > 100 * runs[-1]["position"] > 0
    with h5py.File(folder / "bench.h5") as file:
        group = file["bench/flyby-fast/areal/proper/runge-kutta-4"]
        assert group["position"].dims[0][0] == group["control"]
        assert group["position"][()].tolist() == [r["position"] for r in runs]
        assert file.attrs["format"].startswith(b"truefall-bench")
    with (folder / "bench.csv").open() as file:
        rows = list(csv.DictReader(file))
    assert [float(r["position"]) for r in rows][:3] == [r["position"] for r in runs]
    page = (folder / "index.html").read_text()
    assert "default-src 'none'" in page
    assert "<script" not in page
    assert Path(folder / "work-flyby-fast.png").stat().st_size > 10_000


def test_the_command_refuses_a_file_in_the_place_of_its_folder(run, tmp_path):
    """Before anything is computed."""
    (tmp_path / "file").write_text("")
    assert run("bench", "--out", tmp_path / "file").status == 4
    assert run("bench", "--out", tmp_path / "no" / "folder").status == 4
    assert run("bench", "--methods", "nothing", "--out", tmp_path / "x").status == 2
    assert not (tmp_path / "x").exists()


def test_long_runs_show_what_symplectic_methods_are_for():
    """Energy of the splitting stays in its band, that of Runge-Kutta drifts away."""
    found = {
        name: long_run(name, equations, variable, dict(how), 40.0, 80)
        for name, equations, variable, how in LONG_RUNS
        if name in ("runge-kutta-4", "four-part-yoshida-4")
    }
    split, classical = found["four-part-yoshida-4"].energy, found["runge-kutta-4"].energy

    assert split[40:].max() < 1.5 * split[:40].max()
    assert classical[-20:].max() > 3 * classical[:20].max()


def test_ratios_are_taken_in_one_run_at_the_accuracy_that_is_said():
    """Small here: our run meets 1e-10, the horizon makes no difference, the ensemble is right."""
    figures = ratios.measure(turns=3, orbits=40, short=2)

    assert all(value > 0 for value in figures.values())
    for equations in ("mino", "areal"):
        assert figures[f"3 periods, {equations}: ours, position error"] <= 1e-10
        assert figures[f"3 periods, {equations}: DOP853 (SciPy), position error"] < 1e-8
    assert figures["40 orbits of 2 periods: largest position error of twenty"] < 1e-10
    inside = figures["plunge in Kerr-Schild: largest error inside r = 2"]
    assert inside < 10 * figures["plunge in Kerr-Schild: largest error outside r = 2"] + 1e-14
