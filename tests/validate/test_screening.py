"""Long files: the table screens, exact rows decide, and the verdict is the one all rows give."""

from __future__ import annotations

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.check import check_file
from truefall.validate.screening import MANY_ROWS, table_of, tabled_expected

HEAD = {"system": "geometric", "particle": "massive", "chart": "areal", "clock": "coordinate"}


def saved(path, times, position, velocity):
    lines = ["gm = 1.0", *(f'{k} = "{v}"' for k, v in HEAD.items())]
    np.savez(
        path, time=times, position=position, velocity=velocity, metadata=np.array("\n".join(lines))
    )
    return path


@pytest.fixture(scope="module")
def exact_file(tmp_path_factory):
    """A file of exact values, long enough for the table, and its states."""
    orbit = Orbit(position=(10.0, 0, 0), velocity=(0, 0.34, 0.02))
    times = np.linspace(0.0, 3000.0, MANY_ROWS + 500)
    states = orbit.at(times)
    folder = tmp_path_factory.mktemp("long")
    return saved(folder / "exact.npz", times, states.position, states.velocity), states


def test_correctly_rounded_values_pass_below_the_tables_own_bound(exact_file):
    """At 4e-15 the table alone could not say; the rows that matter are computed exactly."""
    path, states = exact_file
    (result,) = check_file(path, budget={"position": 4e-15})
    rounding = np.linalg.norm(states.position_bound, axis=1).max()

    assert rounding < 4e-15
    assert result.certified > 100
    assert result.verdict in ("pass", "undecided")
    (loose,) = check_file(path, budget={"position": 1e-12})
    assert loose.verdict == "pass"
    assert loose.as_json()["reference"]["certified_samples"] >= 16


def test_one_bad_row_in_a_long_file_is_found_and_proved(exact_file):
    """One component of one row moved by 1e-9: fail, at that row, with the exact guard."""
    path, states = exact_file
    position = states.position.copy()
    row = 3456
    position[row, 1] += 1e-9
    bad = saved(path.with_name("bad.npz"), states.time, position, states.velocity)
    (result,) = check_file(bad, budget={"position": 1e-10})
    (judgement,) = result.judgements

    assert result.verdict == "fail"
    assert judgement.row == row
    assert judgement.failing_rows == 1
    assert judgement.deviation == pytest.approx(1e-9, rel=1e-4)
    assert judgement.guard < 1e-23


def test_revolutions_counted_by_the_table_are_those_of_the_orbit(exact_file):
    """A budget per revolution needs the azimuth: to a hundredth of a turn at every row."""
    path, states = exact_file
    (result,) = check_file(path, budget={"per_revolution": {"position": 1e-12}})

    rows = result.totals.rows
    assert rows.size > 4000
    assert np.abs(result.comparison.revolutions - np.abs(states.winding[rows])).max() < 0.01


@pytest.mark.parametrize(
    "keys",
    [
        {"chart": "kerr-schild", "position": (8.0, 0, 0), "velocity": (0, 0, 0)},
        {"position": (12.0, 3, 1), "velocity": (0.01, 0.2, 0.02)},
        {"chart": "harmonic", "position": (150.0, 0, 0), "velocity": (-0.4, 0.034, 0)},
        {
            "system": "SI", "gm": 1.32712440018e20, "particle": "light",
            "position": (-1.5e11, 7e8, 0), "velocity": (1.0, 0, 0),
        },
    ],
    ids=["from rest", "bound", "flyby", "light, SI"],
)  # fmt: skip
def test_the_bounds_of_a_table_hold_for_position_velocity_and_clock(keys):
    """Also where the orbit is at rest, and in units in which lengths and times differ by c."""
    orbit = Orbit(**keys)
    last = 1000.0 if orbit.system == "SI" else 25.0
    times = np.sort(np.random.default_rng(8).uniform(0.0, last, 1500))
    true = orbit.at(times)
    table = table_of(orbit, 0.0, last)
    found = tabled_expected(orbit, table, times)
    reading = true.affine if true.proper_time is None else true.proper_time
    low = true.affine_low if true.proper_time is None else true.proper_time_low

    for got, high, rest, bound in (
        (found.position, true.position, true.position_low, found.position_bound),
        (found.velocity, true.velocity, true.velocity_low, found.velocity_bound),
    ):
        error = np.linalg.norm((got - high) - rest, axis=1)
        assert np.all(error <= np.linalg.norm(bound, axis=1))
    assert np.all(np.abs((found.clock - reading) - low) <= found.clock_bound)
