"""What digits leave open: of a start, carried along the orbit, and of time stamps."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.carry import (
    carried_spread,
    end_spread,
    sensitivities,
    stamp_spread,
)
from truefall.validate.orbit_file import OrbitSpec, parse_orbit

GM_EARTH = 3.986004418e14  # IERS Conventions 2010 (TN 36), Table 1.1


def _spec(orbit: Orbit) -> OrbitSpec:
    return parse_orbit(
        {
            "system": orbit.system, "gm": orbit.gm, "particle": orbit.particle,
            "chart": orbit.chart, "clock": orbit.clock,
            "start": {
                "time": orbit.start_time,
                "position": list(orbit.position),
                "velocity": list(orbit.velocity),
            },
        },
        "orbit.toml",
    )  # fmt: skip


def _circle() -> Orbit:
    """A nearly circular Earth satellite with a period of 5829 s."""
    return Orbit(
        system="SI", gm=GM_EARTH, position=[7.0e6, 0.0, 0.0], velocity=[0.0, 7546.049, 0.0]
    )


def test_the_spread_is_that_of_moved_starts() -> None:
    """Two orbits whose starts differ by one half unit lie as far apart as the spread says."""
    orbit = _circle()
    times = np.linspace(0.0, 30000.0, 200)
    quantum = np.array([0.0, 0.0, 0.0, 0.0, 0.05, 0.0])
    spread = carried_spread(_spec(orbit), orbit, times, quantum)
    moved = Orbit(
        system="SI", gm=GM_EARTH, position=orbit.position, velocity=[0.0, 7546.049 + 0.05, 0.0]
    )
    here, there = orbit.at(times), moved.at(times)
    position = np.linalg.norm(there.position - here.position, axis=1)
    velocity = np.linalg.norm(there.velocity - here.velocity, axis=1)

    # the spread never forgets, so it is the running maximum, sampled at 64 of the times
    np.testing.assert_allclose(spread.position, np.maximum.accumulate(position), rtol=0.12)
    assert spread.velocity[-1] == pytest.approx(velocity.max(), rel=0.05)
    assert 0 < spread.clock[-1] < 1e-9


def test_along_track_error_grows_as_three_dv_t() -> None:
    """Clohessy and Wiltshire (1960), from memory: a tangential dv drifts by 3 dv t secularly."""
    orbit = _circle()
    dv, revolutions = 1e-3, 10
    time = revolutions * 2 * np.pi * np.sqrt(7.0e6**3 / GM_EARTH)
    spread = carried_spread(
        _spec(orbit), orbit, np.array([0.0, time]), np.array([0.0, 0.0, 0.0, 0.0, dv, 0.0])
    )

    assert spread.position[-1] == pytest.approx(3 * dv * time, rel=1e-3)


def test_all_components_add_up() -> None:
    """The half units count as if all were wrong in the worst way."""
    orbit = _circle()
    times = np.array([0.0, 2000.0])
    singles = [
        carried_spread(_spec(orbit), orbit, times, np.eye(6)[k] * 1e-3).position[-1]
        for k in (3, 4, 5)
    ]

    together = carried_spread(_spec(orbit), orbit, times, np.array([0, 0, 0, 1, 1, 1]) * 1e-3)
    assert together.position[-1] == pytest.approx(sum(singles), rel=1e-12)


@pytest.mark.parametrize("quantum", [1e-12, 1e-17])
def test_an_unstable_circle_doubles_its_error_at_the_known_rate(quantum: float) -> None:
    """lambda = Omega sqrt(6/r - 1) per coordinate time.

    Radial epicyclic frequency of circular orbits, imaginary below r = 6 (Cardoso et al. 2009,
    Phys. Rev. D 79, 064016, eq. 40 and below, from memory).  Also for half units far below
    float64's own, as files with 17 digits have.
    """
    r = 4.0
    orbit = Orbit(position=[r, 0.0, 0.0], velocity=[0.0, 0.5, 0.0])  # Omega = 4^-1.5, exact
    assert orbit.orbit_class == "circular-unstable"
    times = np.linspace(0.0, 200.0, 64)
    spread = carried_spread(_spec(orbit), orbit, times, np.array([quantum, 0, 0, 0, 0, 0.0]))
    late = (times > 60) & (times < 160)
    rate = np.polyfit(times[late], np.log(spread.position[late]), 1)[0]

    assert rate == pytest.approx(r**-1.5 * np.sqrt(6 / r - 1), rel=0.03)


def test_the_spread_saturates_at_the_size_of_the_orbit() -> None:
    """However long one waits, the position is still somewhere: no overflow."""
    orbit = Orbit(position=[4.0, 0.0, 0.0], velocity=[0.0, 0.5, 0.0])
    times = np.linspace(0.0, 3000.0, 64)
    spread = carried_spread(_spec(orbit), orbit, times, np.array([1e-12, 0, 0, 0, 1e-12, 0.0]))

    assert np.all(np.isfinite(spread.position))
    assert np.all(np.diff(spread.position) >= 0)
    assert spread.position[-1] > 1.0


def test_exact_starts_leave_nothing_open() -> None:
    """No quantum, no spread."""
    orbit = _circle()
    spread = carried_spread(_spec(orbit), orbit, np.linspace(0, 100.0, 5), np.zeros(6))

    assert not spread.position.any()
    assert not spread.velocity.any()
    assert not spread.clock.any()


def test_time_stamps_open_the_position_by_speed_times_quantum() -> None:
    """|v| q_t, |a| q_t and the pace of the second clock, on the coordinate clock."""
    orbit = Orbit(position=[10.0, 0.0, 0.0], velocity=[0.0, 0.3, 0.0])
    times = np.linspace(0.0, 300.0, 7)
    q = 1e-6
    spread = stamp_spread(orbit, times, q)
    states = orbit.at(times)
    before, after = orbit.at(times - 0.01), orbit.at(times + 0.01)
    acceleration = np.linalg.norm(after.velocity - before.velocity, axis=1) / 0.02
    assert after.proper_time is not None
    assert before.proper_time is not None
    pace = (after.proper_time - before.proper_time) / 0.02

    np.testing.assert_allclose(
        spread.position, q * np.linalg.norm(states.velocity, axis=1), rtol=1e-5
    )
    np.testing.assert_allclose(spread.velocity, q * acceleration, rtol=1e-4)
    np.testing.assert_allclose(spread.clock, q * pace, rtol=1e-5)


def test_stamps_of_the_proper_clock_run_faster_than_the_chart() -> None:
    """There |v| counts per chart time, so dT/dtau comes in."""
    orbit = Orbit(position=[10.0, 0.0, 0.0], velocity=[0.0, 0.3, 0.0], clock="proper")
    times = np.array([0.0, 5.0])
    spread = stamp_spread(orbit, times, 1e-6)
    # dT/dtau = 1/sqrt(1 - 2/r - v^2) at the start, where the motion is tangential
    pace = 1 / np.sqrt(1 - 0.2 - 0.09)

    assert spread.position[0] == pytest.approx(1e-6 * 0.3 * pace, rel=1e-5)
    assert spread.clock[0] == pytest.approx(1e-6 * pace, rel=1e-5)


def test_a_stamp_finer_than_float64_still_counts() -> None:
    """Half a unit of the 17th digit cannot be added to the stamp, but scales."""
    orbit = Orbit(position=[10.0, 0.0, 0.0], velocity=[0.0, 0.3, 0.0])
    spread = stamp_spread(orbit, np.array([100.0]), 1e-17)

    speed = np.linalg.norm(orbit.at([100.0]).velocity)
    assert spread.position[0] == pytest.approx(1e-17 * speed, rel=1e-6)


def test_a_stamp_next_to_the_end_is_moved_back() -> None:
    """The orbit has no state past its end."""
    orbit = Orbit(position=[6.0, 0.0, 0.0], velocity=[0.0, 0.1, 0.0], clock="proper")
    assert orbit.ends_after is not None
    last = orbit.ends_after.time - 1e-9
    spread = stamp_spread(orbit, np.array([last]), 1e-6)

    assert np.isfinite(spread.position[0])
    assert 0 < spread.position[0] < 1e-5


def test_the_end_is_open_by_what_the_digits_leave_open() -> None:
    """The difference of the ends of moved starts."""
    orbit = Orbit(position=[6.0, 0.0, 0.0], velocity=[0.0, 0.1, 0.0], clock="proper")
    moved = Orbit(position=[6.0 + 1e-3, 0.0, 0.0], velocity=[0.0, 0.1, 0.0], clock="proper")
    assert orbit.ends_after is not None
    assert moved.ends_after is not None
    quantum = np.array([1e-3, 0, 0, 0, 0, 0.0])

    found = end_spread(_spec(orbit), orbit, quantum, after=True)
    assert found == pytest.approx(moved.ends_after.time - orbit.ends_after.time, rel=1e-9)
    assert end_spread(_spec(orbit), orbit, np.zeros(6), after=True) == 0.0


def test_sensitivities_are_the_transition_matrix() -> None:
    """At the start the identity; later those of Kepler's circle, radius to along-track -6 pi."""
    orbit = _circle()
    period = 2 * np.pi * np.sqrt(7.0e6**3 / GM_EARTH)
    columns = sensitivities(_spec(orbit), orbit, np.array([0.0, period]))[:, :3]

    np.testing.assert_allclose(columns[0, :, :3], np.eye(3), atol=1e-9)
    np.testing.assert_allclose(columns[0, :, 3:], 0.0, atol=1e-6)
    # dr0 at fixed velocity changes the semi-major axis by 2 dr0: -3 pi 2 dr0 along after a turn
    assert columns[1, 1, 0] == pytest.approx(-6 * np.pi, rel=1e-3)


def test_elements_can_be_moved_too() -> None:
    """An orbit from elements is moved in its state."""
    orbit = Orbit.from_elements(semilatus_rectum=12.0, eccentricity=0.3)
    spec = replace(
        _spec(orbit), position=None, velocity=None,
        elements={"semilatus_rectum": 12.0, "eccentricity": 0.3},
    )  # fmt: skip
    columns = sensitivities(spec, orbit, np.array([0.0, 10.0]))[:, :3]

    np.testing.assert_allclose(columns[0, :, :3], np.eye(3), atol=1e-9)
