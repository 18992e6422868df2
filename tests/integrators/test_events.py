"""Events, statuses, time stamps, progress: what a run tells besides its rows."""

from __future__ import annotations

import numpy as np
import pytest

from truefall.integrators import METHODS, Event, propagate
from truefall.reference import Orbit

#: p = 10, e = 0.3 from periapsis: r = 10/(1 + 0.3 cos chi); areal period 348.27 by the reference.
START = Orbit.from_elements(semilatus_rectum=10.0, eccentricity=0.3)
X, V = np.array(START.position), np.array(START.velocity)
PERIAPSIS, APOAPSIS = 10.0 / 1.3, 10.0 / 0.7
WAYS = [
    ("taylor", {"tolerance": 1e-16}), ("dormand-prince-8", {"tolerance": 1e-16}),
    ("gauss-radau-15", {"tolerance": 1e-17}), ("gauss-legendre-12", {"step": 0.02}),
]  # fmt: skip


def radii(run, name):
    return [float(np.linalg.norm(hit.position)) for hit in run.events if hit.name == name]


@pytest.mark.parametrize(("method", "keys"), WAYS)
def test_events_are_where_the_exact_orbit_has_them(method, keys):
    """Turning points, radii, revolutions: the exact state at the event's time is the event's."""
    events = [
        Event("periapsis"), Event("apoapsis"), Event("radius", 10.0),
        Event("radius", 9.0, "in", name="nine"), Event("revolutions", 2),
    ]  # fmt: skip
    run = propagate("mino", X, V, [0.0, 2000.0], method=method, events=events, **keys)
    times = np.array([hit.time for hit in run.events])
    exact = Orbit(position=X, velocity=V).at(times)

    assert np.all(np.diff(times) > 0)
    for row, hit in enumerate(run.events):
        assert hit.position == pytest.approx(exact.position[row], abs=1e-11)
        assert hit.velocity == pytest.approx(exact.velocity[row], abs=1e-12)
        assert hit.clock == pytest.approx(exact.proper_time[row], abs=1e-10)
    assert radii(run, "periapsis") == pytest.approx([PERIAPSIS] * 5, abs=1e-11)
    assert radii(run, "apoapsis") == pytest.approx([APOAPSIS] * 6, abs=1e-11)
    assert radii(run, "radius") == pytest.approx([10.0] * 11, abs=1e-11)
    assert radii(run, "nine") == pytest.approx([9.0] * 5, abs=1e-11)
    turned = [exact.winding[i] for i, hit in enumerate(run.events) if hit.name == "revolutions"]
    assert turned == pytest.approx([2.0, 4.0, 6.0, 8.0], abs=1e-12)


def test_both_crossings_inside_one_long_step_are_seen():
    """A Taylor step spans the periapsis; a radius just above it is crossed twice in it."""
    run = propagate(
        "mino", X, V, [0.0, 500.0], method="taylor", tolerance=1e-10, order=40,
        events=[Event("radius", PERIAPSIS + 1e-4, name="low"), Event("periapsis")],
    )  # fmt: skip

    assert [hit.name for hit in run.events] == ["low", "low", "periapsis", "low"]


@pytest.mark.parametrize("count", [1, 3])
def test_a_run_stops_at_the_event_asked_for(count):
    run = propagate(
        "harmonic", [11.0, 0, 0], [0, 0.25, 0], [0.0, 100.0, 20000.0], method="taylor",
        tolerance=1e-15, events=[Event("apoapsis", stop=count), Event("periapsis")],
    )  # fmt: skip

    assert run.status == "event"
    assert [hit.name for hit in run.events].count("apoapsis") == count
    assert run.events[-1].name == "apoapsis"
    assert np.isnan(run.position[2]).all()
    assert np.isfinite(run.position[1]).all()


def test_backwards_the_events_come_backwards_and_time_undoes_itself():
    """In and out are meant along the way of the run."""
    events = [Event("radius", 10.0, "out")]
    there = propagate("mino", X, V, [0.0, 100.0], method="taylor", tolerance=1e-16, events=events)
    back = propagate("mino", X, V, [0.0, -100.0], method="taylor", tolerance=1e-16, events=events)
    again = propagate(
        "mino", there.position[1], there.velocity[1], [100.0, 0.0], method="gauss-legendre-12",
        step=0.01,
    )  # fmt: skip

    assert there.events[0].time == pytest.approx(-back.events[0].time, abs=1e-12)
    assert np.abs(again.position[1] - X).max() < 1e-12


@pytest.mark.parametrize("variable", ["proper", "chart", "radius", "radius-3/2", "radius-squared"])
@pytest.mark.parametrize("method", ["runge-kutta-4", "gauss-legendre-8", "prince-9"])
def test_time_stamps_are_met_whatever_the_step_counts(method, variable):
    """Dense, irregular stamps against the same run's sparse ones: they do not disturb the steps."""
    rng = np.random.default_rng(2)
    dense = np.unique(np.concatenate([[0.0, 150.0, 300.0], rng.uniform(0.0, 300.0, 60)]))
    scale = {"radius": 12.0, "radius-3/2": 41.0, "radius-squared": 144.0}.get(variable, 1.0)
    keys = {"step": 1.0 / scale} if method != "prince-9" else {"tolerance": 1e-14}
    start = ("harmonic", [11.0, 0, 0], [0, 0.27, 0.03])
    many = propagate(*start, dense, method=method, variable=variable, **keys)
    few = propagate(*start, [0.0, 150.0, 300.0], method=method, variable=variable, **keys)
    exact = Orbit(chart="harmonic", position=start[1], velocity=start[2]).at(dense)
    error = np.abs(many.position - exact.position).max()

    assert many.steps == few.steps
    assert many.position[-1] == pytest.approx(few.position[-1], abs=1e-12)
    assert error < (2e-4 if method == "runge-kutta-4" else 1e-9)


def test_statuses_say_why_a_run_ended():
    """Step limit; the edge of a static chart; r = 0; stages that do not settle."""
    fall = ([6.0, 0, 0], [-0.25, 0.1, 0])
    slow = propagate(
        "harmonic", [11.0, 0, 0], [0, 0.25, 0], [0.0, 1e6], method="taylor", tolerance=1e-12,
        max_steps=50,
    )  # fmt: skip
    edge = propagate("harmonic", *fall, [0, 20.0, 200.0], method="taylor", tolerance=1e-14)
    end = propagate("mino-kerr-schild", *fall, [0, 10.0, 100.0], method="taylor", tolerance=1e-14)
    lost = propagate("harmonic", *fall, [0.0, 50.0], method="gauss-legendre-4", step=40.0)

    assert (slow.status, slow.steps) == ("step limit", 50)
    assert "raise it" in slow.message
    assert edge.status == "left the chart"
    assert np.isfinite(edge.position[1]).all()
    assert np.isnan(edge.position[2]).all()
    assert end.status in ("left the chart", "step too small")
    assert np.isnan(end.position[2]).all()
    assert lost.status in ("stages unsettled", "left the chart")
    assert "of 2 times reached" in lost.message


def test_long_runs_report_progress():
    seen = []
    run = propagate(
        "mino", X, V, [0.0, 40000.0], method="runge-kutta-4", step=0.005,
        progress=lambda steps, time: seen.append((steps, time)),
    )  # fmt: skip

    assert run.status == "finished"
    assert seen == sorted(seen)
    assert len(seen) == run.steps // 20_000
    assert 0 < seen[0][1] < 40000.0


@pytest.mark.parametrize("method", [n for n, m in METHODS.items() if m.adaptive])
def test_a_smaller_tolerance_is_obeyed(method):
    """A thousandth of the tolerance: the error falls to less than a thirtieth of it."""
    exact = Orbit(position=X, velocity=V).at([700.0]).position[0]
    errors = []
    for tolerance in (1e-8, 1e-11):
        run = propagate("mino", X, V, [0.0, 700.0], method=method, tolerance=tolerance)
        errors.append(np.linalg.norm(run.position[1] - exact))

    assert errors[1] < errors[0] / 30 + 1e-13
    assert errors[1] < 1e-7


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"events": [Event("periapse")]}, "did you mean 'periapsis'"),
        ({"events": [Event("radius")]}, "needs a positive value"),
        ({"events": [Event("radius", 3.0, "up")]}, "direction must be"),
        ({"events": [Event("apoapsis", stop=-1)]}, "stop must be"),
        ({"events": [Event("apoapsis")], "arithmetic": "double-double"}, "events are watched"),
        ({"variable": "mino"}, "unknown|does not go with"),
        ({"particle": "photon"}, "known are massive, light"),
        ({"arithmetic": "float32"}, "known are float64"),
        ({"step": 1.0}, "not both"),
        ({"tolerance": None}, "needs a tolerance"),
        ({"order": 500}, "from 2 to 100"),
        ({"max_steps": 0}, "max_steps"),
        ({"velocity": [0.0, float("nan"), 0.0]}, "three finite numbers"),
        ({"position": [1.0, 2.0]}, "three finite numbers"),
        ({"times": [0.0, float("inf")]}, "finite"),
        ({"method": "prince-9", "order": 8}, "has order 9"),
        ({"method": "gauss-legendre-8"}, "needs a step"),
        ({"method": "four-part-strang-2", "tolerance": None, "step": 1.0}, "does not go with"),
    ],
)
def test_what_cannot_be_done_is_refused_in_one_sentence(change, words):
    keys = {
        "equations": "harmonic", "position": [11.0, 0, 0], "velocity": [0, 0.25, 0],
        "times": [0.0, 1.0], "method": "taylor", "tolerance": 1e-12,
    } | change  # fmt: skip
    named = {
        k: v for k, v in keys.items() if k not in ("equations", "position", "velocity", "times")
    }
    with pytest.raises(ValueError, match=words) as caught:
        propagate(keys["equations"], keys["position"], keys["velocity"], keys["times"], **named)
    assert "\n" not in str(caught.value)
