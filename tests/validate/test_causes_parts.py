"""Causes: flights against the exact engine, expansions, the list of faults, the command line."""

from __future__ import annotations

import json
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.causes import FAMILIES, explain, families
from truefall.validate.causes.fault import all_faults, number
from truefall.validate.causes.flight import CHART_CODES, Law, fly
from truefall.validate.causes.flight_kernel import _rate
from truefall.validate.check import check_file


@pytest.mark.parametrize("chart", CHART_CODES)
@pytest.mark.parametrize("clock", ["coordinate", "proper", "light"])
def test_a_flight_without_a_fault_is_the_exact_orbit(chart, clock):
    """To what double precision keeps over two revolutions, before and after the start."""
    light = clock == "light"
    orbit = Orbit(
        chart=chart, position=(14.0, 1.0, 0.0),
        velocity=(0.6, 0.2, 0.7) if light else (0.01, 0.26, 0.05),
        particle="light" if light else "massive", clock="coordinate" if light else clock,
    )  # fmt: skip
    times = np.linspace(-20.0, 60.0 if light else 600.0, 40)
    states = orbit.at(times)
    law = Law(chart, light=light, proper=clock == "proper")
    flown = fly(law, np.array(orbit.position), np.array(orbit.velocity_used), times)
    second = {"light": states.affine, "proper": states.coordinate_time}.get(clock)
    second = states.proper_time if second is None else second
    assert np.abs(flown.position - states.position).max() < 1e-10
    assert np.abs(flown.velocity - states.velocity).max() < 1e-11
    assert np.abs(flown.clock - second).max() < 1e-10


@pytest.mark.parametrize("chart", ["areal", "isotropic", "harmonic"])
@pytest.mark.parametrize(("order", "fall"), [(1, 2), (2, 3)])
def test_post_newtonian_terms_are_the_exact_law_cut_short(chart, order, fall):
    """What is left out falls with the next power of GM/(c^2 r) where v^2 falls as 1/r."""
    left = []
    for r in (1e3, 2e3):
        y = np.array([0.6 * r, 0.8 * r, 0.0, 0.3 * r**-0.5, 0.5 * r**-0.5, 0.4 * r**-0.5, 0.0])
        whole, cut = np.empty(7), np.empty(7)
        _rate(y, Law(chart).numbers(), whole)
        _rate(y, Law(chart, exact=0.0, first=1.0, second=float(order == 2)).numbers(), cut)
        left.append(np.linalg.norm(whole - cut) * r**2)
    assert left[0] / left[1] == pytest.approx(2.0**fall, rel=0.02)


def test_every_fault_says_what_it_is():
    known = all_faults()
    assert {f.family for f in known} == set(FAMILIES)
    assert len(known) > 150
    for fault in known:
        assert fault.look_at
        assert fault.cause == fault.cause.lower().replace(" ", "-").replace("_", "-")
        assert fault.choices or fault.parameters or fault.label or fault.say


_NEW = '''
"""A family of one."""

from truefall.validate.causes.fault import Fault, Parameter, register

register(
    Fault(
        cause="tangential-wind", family="forces", look_at="the weather",
        parameters=(Parameter("wind", "acceleration"),),
        apply=lambda plan, _, p: plan.fly_by(forces=(0.0, 0.0, p[0]) + (0.0,) * 7),
        say=lambda f: f"a wind of {f.say(0)} blows across",
    )
)
'''


def test_a_new_family_is_one_small_file(tmp_path, monkeypatch, trajectory_of):
    """Found without an edit elsewhere, and named where it is true."""
    from dataclasses import replace

    from truefall.validate.causes import fault as registry
    from truefall.validate.check import check_trajectory

    (tmp_path / "weather.py").write_text(_NEW)
    known = list(all_faults())
    monkeypatch.setattr(families, "__path__", [*families.__path__, str(tmp_path)])
    monkeypatch.setattr(registry, "_KNOWN", known)
    all_faults.cache_clear()
    try:
        orbit = Orbit(position=(30.0, 0.0, 0.0), velocity=(0.0, 0.17, 0.0))
        trajectory = trajectory_of(orbit, np.linspace(0, 600, 60).tolist(), drop=["proper_time"])
        law = Law("areal", forces=(0.0, 0.0, 1e-9) + (0.0,) * 7)
        flown = fly(law, np.array(orbit.position), np.array(orbit.velocity), trajectory.time)
        blown = replace(trajectory, position=flown.position, velocity=flown.velocity)
        (first, *_) = explain(check_trajectory(blown)).findings
        assert first.cause == "tangential-wind"
        assert first.parameters["wind"].value == pytest.approx(1e-9, rel=1e-4)
    finally:
        all_faults.cache_clear()


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (1.55052e-8, 3e-12, "1.5505(3)e-08"),
        (2.0, 0.0, "2"),
        (1e-9, 3e-9, "1e-09 +- 3e-09"),
        (0.25, 0.01, "2.50(10)e-01"),
    ],
)
def test_numbers_carry_their_uncertainty(value, uncertainty, text):
    assert number(value, uncertainty) == text


def test_a_pass_is_explained_only_if_asked(run, exact):
    plain = run("check", exact, "--json")
    asked = run("check", exact, "--json", "--explain")
    assert plain.status == asked.status == 0
    assert json.loads(plain.out)["files"][0]["explanation"] is None
    assert json.loads(asked.out)["files"][0]["explanation"] is not None
    assert "trying causes" not in asked.text  # progress is for terminals


def test_a_failing_check_names_the_cause_and_draws_it(run, exact, tmp_path):
    """Rows out of step by one: said on the page, in the document and in a picture."""
    lines = exact.read_text().splitlines()
    head = next(k for k, line in enumerate(lines) if line.startswith("time,")) + 1
    rows = [line.split(",") for line in lines[head:]]
    moved = [[a[0], *b[1:]] for a, b in pairwise(rows)]
    exact.write_text("\n".join(lines[:head] + [",".join(r) for r in moved]) + "\n")
    done = run("check", exact, "--report", tmp_path / "report")
    assert done.status == 1
    assert "each row holds the state of the next time stamp" in " ".join(done.out.split())
    pictures = list(Path(tmp_path / "report").glob("*-cause-1-samples-shifted.png"))
    assert len(pictures) == 1
    (result,) = check_file(exact)
    assert result.explanation is None  # the library explains when it is asked to


def test_on_an_unstable_orbit_nothing_alone_is_blamed():
    """A push of 1e-10 on the circle r = 4 may as well be truncation: said so, and listed."""
    import numpy as np

    from truefall.reference import Orbit
    from truefall.validate.causes import explain
    from truefall.validate.check import check_trajectory
    from truefall.validate.trajectory import Trajectory

    start, speed = (4.0, 0.0, 0.0), (0.0, 0.5, 0.0)
    times = np.linspace(0.0, 150.0, 151)
    moved = Orbit(position=(4.0, 0.0, 0.0), velocity=(0.0, 0.5 * (1 + 1e-9), 0.0)).at(times)
    metadata = {
        "system": "geometric", "gm": 1.0, "particle": "massive", "chart": "areal",
        "clock": "coordinate", "start": {"position": list(start), "velocity": list(speed)},
    }  # fmt: skip
    result = check_trajectory(
        Trajectory("run", "run", times, moved.position, moved.velocity, moved.proper_time, None,
                   None, metadata)
    )  # fmt: skip
    found = explain(result)

    assert result.orbit.orbit_class == "circular-unstable"
    assert found.findings
    assert found.findings[0].family in ("start", "constants", "forces", "clock")
    assert "cannot tell them apart" in found.findings[0].text
    assert {"round-off", "step-too-large"} < found.ambiguous[-1]
