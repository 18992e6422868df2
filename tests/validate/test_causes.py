"""Causes: each family found on runs of an outside propagator, and nothing said that is not so.

The faulty runs come from ``tests/outside/battery`` (own right-hand sides, SciPy's DOP853), which
shares nothing with the engine; ``python tests/outside/battery/run.py`` runs all of it.
"""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from battery import faults

from truefall.validate.causes import explain
from truefall.validate.check import check_trajectory
from truefall.validate.trajectory import Trajectory

CASES = {case.name: case for case in faults.p.CASES}
# shorter arcs than the battery's: these tests are run often
CASES["strong"] = replace(CASES["strong"], last=700.0, count=141)
CASES["earth-satellite"] = replace(CASES["earth-satellite"], last=18000.0, count=121)


def checked(case, rows, **budget):
    metadata = {
        "system": "geometric" if case.gm == 1 else "SI", "gm": case.gm, "chart": case.chart,
        "particle": "light" if case.light else "massive", "clock": "coordinate", "budget": budget,
        "start": {"time": 0.0, "position": list(case.position), "velocity": list(case.velocity)},
    }  # fmt: skip
    clock = rows[:, 7]
    return check_trajectory(
        Trajectory(
            "run.csv", "run", rows[:, 0], rows[:, 1:4], rows[:, 4:7],
            None if case.light else clock, None, clock if case.light else None, metadata,
        )
    )  # fmt: skip


def explained(name, fault, size):
    case = CASES[name]
    rows, causes = faults.FAULTS[fault](case, size)
    return explain(checked(case, rows)), causes


@pytest.mark.parametrize(
    ("name", "fault", "size"),
    [
        ("light", "gm", 0.3),
        ("flyby", "radius_halved", 1.0),
        ("light", "newton", 1.0),
        ("strong", "newton", 1.0),
        ("flyby", "first_order", 1.0),
        ("flyby", "term_doubled", 1.0),
        ("flyby", "chart", 1.0),
        ("light", "chart_isotropic", 1.0),
        ("flyby", "proper_stamps", 1.0),
        ("light", "time_scaled", 0.5),
        ("flyby", "repeated", 1.0),
        ("light", "dropped", 1.0),
        ("light", "one_early", 1.0),
        ("light", "kilometres", 1.0),
        ("light", "mirrored", 1.0),
        ("flyby", "degrees", 1.0),
        ("flyby", "velocity_proper", 1.0),
        ("light", "velocity_static", 1.0),
        ("flyby", "half_step", 0.7),
        ("strong", "coarse_step", 0.0),
        ("light", "single", 1.0),
        ("light", "single_stamps", 1.0),
        ("light", "rounded", 0.5),
        ("light", "interpolated_linear", 0.5),
        ("flyby", "thrust", 0.5),
        ("light", "wind", 0.5),
    ],
)
def test_the_cause_is_named_first(name, fault, size):
    found, causes = explained(name, fault, size)
    assert found.findings, found.description
    first = found.findings[0]
    assert first.cause in causes, [f.cause for f in found.findings]
    assert first.explains > 0.9
    told = fault.startswith("velocity")  # of velocities alone: positions stay as they were
    assert told or first.after.max() < first.before.max()


@pytest.mark.parametrize(
    ("name", "fault", "size", "parameter", "value"),
    [
        ("flyby", "gm", 0.4, "relative change of gm", faults.between(0.4, 1e-10, 1e-3)),
        ("light", "gm_tcb", 1.0, "relative change of gm", 1.550519768e-8),
        ("flyby", "time_scaled", 0.5, "relative change of time", faults.between(0.5, 1e-10, 2e-5)),
        ("light", "origin", 0.5, "shift along x", 1e-6 * 60.67),
        ("flyby", "radial_push", 0.5, "radial acceleration", 1e-7 / 3600),
        ("flyby", "drag", 0.5, "drag coefficient", 1e-7 / 60),
    ],
)  # fmt: skip
def test_the_parameter_is_recovered(name, fault, size, parameter, value):
    found, causes = explained(name, fault, size)
    first = found.findings[0]
    assert first.cause in causes
    fitted = first.parameters[parameter]
    if fault == "origin":
        value = faults.between(size, 1e-10, 1e-3) * np.linalg.norm(CASES[name].position)
        value *= faults.unit([1.0, -2.0, 0.5])[0]
    assert abs(fitted.value - value) < max(4 * fitted.uncertainty, 1e-6 * abs(value))
    assert fitted.uncertainty < 0.01 * abs(value)


def test_known_values_of_gm_are_named():
    found, _ = explained("light", "gm_tcb", 1.0)
    assert "TCB value where the TDB value was meant" in found.findings[0].text
    assert "1.5505" in found.findings[0].text


def test_numbers_are_in_the_units_of_the_file():
    """A shift of the origin in metres, of an orbit in metres."""
    case = CASES["earth-satellite"]
    rows, _ = faults.FAULTS["origin"](case, 0.3)
    first = explain(checked(case, rows)).findings[0]
    size = faults.between(0.3, 1e-10, 1e-3) * np.linalg.norm(case.position)
    fitted = np.array([first.parameters[f"shift along {a}"].value for a in "xyz"])
    assert fitted == pytest.approx(size * faults.unit([1.0, -2.0, 0.5]), rel=1e-3)
    assert first.parameters["shift along x"].unit == "m"
    assert " m" in first.text


@pytest.mark.parametrize(
    ("name", "setting"),
    [
        ("light", {"rtol": 2.5e-14}), ("light", {"rtol": 1e-8}), ("light", {"step": 1.0}),
        ("flyby", {"rtol": 2.5e-14}), ("flyby", {"step": 1.0}),
        ("strong", {"rtol": 2.5e-14}), ("strong", {"rtol": 1e-10}),
        ("earth-satellite", {"rtol": 2.5e-14}), ("earth-satellite", {"rtol": 1e-9}),
    ],
)  # fmt: skip
def test_a_clean_run_is_never_accused(name, setting):
    """Truncation and rounding may be named for what they are, nothing else."""
    found = explain(checked(CASES[name], faults.p.fly(CASES[name], **setting)))
    assert {f.family for f in found.findings} <= {"numerics"}
    assert {f.cause for f in found.findings} <= {"step-too-large", "round-off"}


def test_two_causes_together_are_both_named():
    case = CASES["flyby"]
    rows, _ = faults.FAULTS["proper_stamps"](case, 1.0)
    rows[:, 1:7] /= 1e3
    causes = [f.cause for f in explain(checked(case, rows)).findings]
    assert set(causes[:2]) == {"length-unit", "proper-for-coordinate-time"}


def test_causes_that_this_arc_cannot_tell_apart_are_both_listed():
    """A whole orbit rotated is also an orbit from another start: no arc can tell."""
    found, _ = explained("earth-satellite", "rotated", 0.4)
    assert any({"axes-rotated", "start-perturbed"} <= group for group in found.ambiguous)
    assert {"axes-rotated", "start-perturbed"} <= {f.cause for f in found.findings}
    assert found.findings[0].cause == "axes-rotated"  # three numbers do for what needs six


def test_what_nothing_explains_is_described():
    case = CASES["flyby"]
    rows = faults.p.fly(case)
    late = np.clip(np.arange(len(rows)) - 120, 0, None) / 100
    rows[:, 3] += 1e-4 * late**2 * np.cos(np.arange(len(rows)) ** 1.3)
    found = explain(checked(case, rows))
    assert found.findings == ()
    assert found.unexplained
    assert "no known cause explains" in found.description
    assert "cross" in found.description or "starts at" in found.description


def test_a_single_bad_row_is_described_as_such():
    case = CASES["flyby"]
    rows = faults.p.fly(case)
    rows[77, 2] += 0.01
    found = explain(checked(case, rows))
    assert found.findings == ()
    assert "row 78" in found.description


def test_an_exact_file_has_nothing_to_explain(trajectory_of):
    from truefall.reference import Orbit

    orbit = Orbit(position=(12.0, 0.0, 0.0), velocity=(0.0, 0.3, 0.05))
    result = check_trajectory(trajectory_of(orbit, np.linspace(0, 500, 80).tolist()))
    found = explain(result)
    assert found.findings == ()
    assert not found.unexplained


def test_a_start_from_the_first_row_is_spoiled_with_the_rest(csv_of):
    """Positions told in kilometres spoil the start too, if it is the first row."""
    from truefall.reference import Orbit
    from truefall.validate.check import check_file

    orbit = Orbit(position=(12.0, 0.0, 0.0), velocity=(0.0, 0.3, 0.05))

    def harmonic(columns):
        r = np.sqrt(columns["x"] ** 2 + columns["y"] ** 2 + columns["z"] ** 2)
        out = (columns["x"] * columns["vx"] + columns["y"] * columns["vy"]
               + columns["z"] * columns["vz"]) / r  # fmt: skip
        for place, pace in zip("xyz", ("vx", "vy", "vz"), strict=True):
            unit = columns[place] / r
            columns[pace] = out * unit + (columns[pace] - out * unit) * (r - 1) / r
            columns[place] = unit * (r - 1)

    path = csv_of(orbit, np.linspace(0, 500, 80).tolist(), change=harmonic)
    (result,) = check_file(path)
    assert result.start_from == "first row"
    first = explain(result).findings[0]
    assert first.cause == "chart-misdeclared"
    assert "harmonic" in first.text


def test_two_runs_tell_the_order_of_a_method():
    case = CASES["strong"]
    coarse, fine = (checked(case, faults.p.fly(case, step=s)) for s in (1.0, 0.5))
    found = explain(coarse, second_file=fine)
    assert found.findings[0].cause == "step-too-large"
    assert found.findings[0].parameters["order"].value == pytest.approx(4.0, abs=0.3)


def test_findings_reach_the_document_and_the_page():
    from truefall.validate.report.document import document
    from truefall.validate.report.text import render

    case = CASES["light"]
    rows, _ = faults.FAULTS["newton"](case, 1.0)
    result = checked(case, rows, position=1e-6)
    result = replace(result, explanation=explain(result))
    entry = json.loads(json.dumps(document([result]), allow_nan=False))["files"][0]
    assert entry["findings"][0]["cause"] == "newtonian"
    assert set(entry["findings"][0]) == {
        "cause", "family", "explains", "parameters", "text", "look_at"
    }  # fmt: skip
    page = render(result)
    assert "Newton's half" in page
    assert all(len(line) <= 80 for line in page.splitlines())
