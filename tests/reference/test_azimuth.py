"""The azimuth with its winding: the angle of the position, and the right number of turns."""

from __future__ import annotations

import mpmath as mp
import numpy as np
import pytest

from truefall.reference import Orbit

ORBITS = {
    "bound": (
        {"position": (10.0, 0, 0), "velocity": (0, 0.34, 0.02)}, [3.0, 700.0, 123456.7, -9e5]
    ),
    "satellite": (
        {"system": "SI", "gm": 398600441800000.0, "chart": "harmonic",
         "position": (7.2e6, 0, 3e5), "velocity": (10.0, 7300.0, 1200.0)},
        [60.0, 86400.0, 3.2e9],
    ),
    "flyby": ({"chart": "harmonic", "position": (150.0, 0, 0), "velocity": (-0.4, 0.034, 0)},
              [10.0, 400.0, 1e6]),
    "light": ({"particle": "light", "position": (-60.0, 5.3, 0), "velocity": (1, 0, 0)},
              [50.0, 62.0, 300.0]),
    "circle": ({"position": (8.0, 0, 0), "velocity": (0, 8.0**-0.5, 0)}, [1.0, 1000.0]),
}  # fmt: skip


def exact(value: float, low: float) -> mp.mpf:
    """A number of two words."""
    return mp.mpf(float(value)) + mp.mpf(float(low))


@pytest.mark.parametrize("name", ORBITS)
def test_azimuth_is_the_angle_of_the_position_and_its_turns_are_counted(name):
    """By atan2 at 60 digits; turns from a fine walk along the orbit (plain float64)."""
    keys, times = ORBITS[name]
    orbit = Orbit(**keys)
    states = orbit.at(times)
    with mp.workdps(60):
        start = [mp.mpf(c) for c in orbit.position]
        normal = orbit.at([orbit.start_time + 1e-3 * abs(times[0])])
        side = [
            exact(*words) for words in zip(normal.position[0], normal.position_low[0], strict=True)
        ]
        size = mp.sqrt(sum(c * c for c in start))
        first = [c / size for c in start]
        along = sum(a * b for a, b in zip(first, side, strict=True))
        second = [b - along * a for a, b in zip(first, side, strict=True)]
        size = mp.sqrt(sum(c * c for c in second))
        second = [c / size for c in second]
        for k in range(len(times)):
            place = [
                exact(a, b) for a, b in zip(states.position[k], states.position_low[k], strict=True)
            ]
            x = sum(a * b for a, b in zip(first, place, strict=True))
            y = sum(a * b for a, b in zip(second, place, strict=True))
            total = exact(states.azimuth[k], states.azimuth_low[k])
            turns = mp.nint((total - mp.atan2(y, x)) / (2 * mp.pi))
            rest = total - mp.atan2(y, x) - 2 * mp.pi * turns
            # the plane itself is known to 2e-29 from the two positions
            assert abs(rest) < mp.mpf(10) ** -26
            assert abs(total - mp.mpf(float(states.azimuth[k]))) <= states.azimuth_bound[k]
            assert states.azimuth_bound[k] <= 0.5001 * np.spacing(abs(states.azimuth[k]))
            if abs(turns) < 50:
                assert int(turns) == walked(orbit, times[k])


def walked(orbit: Orbit, time: float) -> int:
    """Turns counted along a fine walk: unwrapped angles of float64 positions."""
    stamps = np.linspace(0.0, time, 4000)
    if orbit.orbit_class == "flyby" and time > 2000.0:  # far out nothing turns any more
        stamps = np.concatenate([np.linspace(0.0, 2000.0, 3000), np.geomspace(2001.0, time, 500)])
    position = orbit.at(stamps).position
    first = position[0] / np.linalg.norm(position[0])
    normal = np.asarray(orbit.angular_momentum_direction)
    angle = np.arctan2(position @ np.cross(normal, first), position @ first)
    total = np.unwrap(angle)[-1]
    return int(np.rint((total - angle[-1]) / (2 * np.pi)))


def test_a_radial_orbit_sweeps_nothing():
    """Exactly."""
    states = Orbit(position=(20.0, 1, 0), velocity=(0, 0, 0)).at([0.0, 5.0, 20.0])

    assert not states.azimuth.any()
    assert not states.azimuth_bound.any()


def test_radial_periods_add_the_azimuth_that_the_orbit_states():
    """A thousand of them, with the constant's own 32 digits."""
    orbit = Orbit(position=(10.0, 0, 0), velocity=(0, 0.34, 0.02))
    period, swept = orbit.radial_period, orbit.azimuth_per_radial_period
    states = orbit.at([1000 * period.value, 1000 * period.value + 1e-9])
    with mp.workdps(50):
        rate = exact(
            states.azimuth[1] - states.azimuth[0], states.azimuth_low[1] - states.azimuth_low[0]
        )
        rate /= mp.mpf(1000 * period.value + 1e-9) - mp.mpf(1000 * period.value)
        late = mp.mpf(1000 * period.value) - 1000 * exact(period.value, period.low)
        expected = 1000 * exact(swept.value, swept.low) + late * rate
        assert abs(exact(states.azimuth[0], states.azimuth_low[0]) - expected) < mp.mpf(10) ** -18
