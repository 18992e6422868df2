"""The start that fits a file best, found again from positions alone."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.check import check_file, check_trajectory
from truefall.validate.errors import InputError
from truefall.validate.fit import fit_start
from truefall.validate.orbit_file import parse_orbit
from truefall.validate.trajectory import Trajectory

GM_EARTH = 3.986004418e14  # IERS Conventions 2010 (TN 36), Table 1.1
GM_SUN = 1.32712440041e11  # km^3/s^2, IAU 2009 (TDB)

Make = Callable[..., Trajectory]
Write = Callable[..., Path]

ORBITS = {
    "satellite": (
        Orbit(
            system="SI", gm=GM_EARTH, position=[7.0e6, 1.0e5, 2.0e6], velocity=[10.0, 7.3e3, 500.0]
        ),
        np.linspace(0.0, 20000.0, 60),
    ),
    "planet": (
        Orbit(
            system="astronomical", gm=GM_SUN, position=[1.47e8, 0.0, 0.0],
            velocity=[0.0, 30.3, 1.0],
        ),
        np.linspace(0.0, 5.0e7, 45),
    ),
    "whirl": (
        Orbit(position=[8.0, 0.0, 0.0], velocity=[0.0, 0.4, 0.05]),
        np.linspace(0.0, 700.0, 70),
    ),
    "infall": (
        Orbit(
            position=[20.0, 0.0, 0.0], velocity=[-0.05, 0.05, 0.02], chart="painleve-gullstrand"
        ),
        np.linspace(0.0, 60.0, 30),
    ),
    "proper": (
        Orbit(position=[10.0, 0.0, 0.0], velocity=[0.0, 0.3, 0.0], clock="proper"),
        np.linspace(5.0, 300.0, 40),
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", list(ORBITS))
def test_a_known_start_is_recovered_from_positions(trajectory_of: Make, name: str) -> None:
    """To 1e-9 of its size, from float64 positions, in every system and on both clocks."""
    orbit, times = ORBITS[name]
    result = check_trajectory(
        trajectory_of(orbit, times, drop=("velocity",), start=False), fit=True
    )
    assert result.orbit is not None
    truth = orbit.at(times[:1])

    assert result.start_from == "fit"
    assert result.orbit.start_time == times[0]
    for found, expected in (
        (result.orbit.position, truth.position[0]),
        (result.orbit.velocity, truth.velocity[0]),
    ):
        assert np.linalg.norm(found - expected) <= 1e-9 * np.linalg.norm(expected)
    assert result.comparison is not None
    # a start in float64, carried along many revolutions, moves the end by as much
    size = np.linalg.norm(truth.position[0])
    assert result.comparison.distance.max() < 1e-13 * size


def test_light_is_fitted_by_direction(trajectory_of: Make) -> None:
    """The speed follows from the direction; five numbers fit the ray."""
    orbit = Orbit(particle="light", position=[20.0, 1.0, 2.0], velocity=[-1.0, 0.35, 0.1])
    times = np.linspace(0.0, 60.0, 24)
    ray = trajectory_of(orbit, times, drop=("velocity",), start=False)
    result = check_trajectory(ray, fit=True)
    assert result.orbit is not None

    np.testing.assert_allclose(result.orbit.position, orbit.position, rtol=1e-12)
    np.testing.assert_allclose(result.orbit.velocity_used, orbit.velocity_used, rtol=1e-11)


def test_rounded_positions_give_a_start_within_their_digits(csv_of: Write) -> None:
    """Eight digits, no velocities: the rest is what rounding left, and the verdict a pass."""
    orbit, times = ORBITS["satellite"]
    path = csv_of(orbit, times, digits=8, drop=("velocity", "proper_time"))
    (result,) = check_file(path, fit=True, budget={"position": "1 m"})
    assert result.comparison is not None
    assert result.floor is not None

    assert result.verdict == "pass"
    assert result.floor.predictable_until is None
    assert np.all(result.comparison.distance < result.comparison.position_guard.total)


@pytest.mark.parametrize(
    ("name", "digits", "times"),
    [
        ("satellite", 5, np.arange(0.0, 20.0, 0.1)),  # moves less between rows than its digits
        ("unstable", 12, np.arange(0.0, 300.0, 10.0)),
        ("ray", 10, np.arange(0.0, 2000.0, 100.0)),
    ],
)
def test_the_guard_holds_what_the_fit_leaves_open(
    csv_of: Write, name: str, digits: int, times: np.ndarray
) -> None:
    """Rounding moves the fitted start, and that moves all rows: never a certain failure."""
    orbits = {
        "satellite": ORBITS["satellite"][0],
        "unstable": Orbit(position=[5.0, 0.0, 0.0], velocity=[0.0, 5**-0.5, 0.0]),
        "ray": Orbit(particle="light", position=[1e3, 8.0, 2.0], velocity=[-1.0, 0.0, 0.0]),
    }
    drop = ("velocity", "proper_time", "affine")
    path = csv_of(orbits[name], times, digits=digits, drop=drop)
    (result,) = check_file(path, fit=True, budget={"position": 1e-30})
    assert result.comparison is not None

    assert np.all(result.comparison.distance <= result.comparison.position_guard.total)
    assert result.verdict == "undecided"


def test_a_few_rows_a_revolution_are_enough(trajectory_of: Make) -> None:
    """No polynomial follows three rows a revolution; a fan of Kepler orbits finds the start."""
    orbit, _ = ORBITS["satellite"]
    sparse = trajectory_of(orbit, np.arange(16) * 2000.0, drop=("velocity",), start=False)
    result = check_trajectory(sparse, fit=True)
    assert result.orbit is not None

    np.testing.assert_allclose(result.orbit.velocity, orbit.velocity, rtol=1e-9, atol=1e-12)


def test_a_file_that_no_orbit_follows_is_refused(trajectory_of: Make) -> None:
    """A failed fit is no verdict on the file."""
    orbit, _ = ORBITS["satellite"]
    exact = trajectory_of(orbit, np.linspace(0.0, 9e3, 20), drop=("velocity",), start=False)
    random = np.random.default_rng(3)
    scattered = random.normal(size=exact.position.shape)
    scattered *= 7e6 / np.linalg.norm(scattered, axis=1, keepdims=True)

    with pytest.raises(InputError, match=r"^run\.csv: --fit: .*give a start"):
        check_trajectory(replace(exact, position=scattered), fit=True)


def test_what_no_start_explains_remains(trajectory_of: Make) -> None:
    """A force that is none of gravity's leaves a residual of its own size."""
    orbit, times = ORBITS["whirl"]
    exact = trajectory_of(orbit, times, drop=("velocity",), start=False)
    kicked = exact.position.copy()
    kicked[35:, 2] += 1e-3
    result = check_trajectory(replace(exact, position=kicked), fit=True)
    assert result.comparison is not None

    assert 2e-4 < result.comparison.distance.max() < 2e-3


def test_too_few_rows_are_refused(trajectory_of: Make) -> None:
    """Three positions cannot tell six numbers and leave something to judge."""
    orbit, times = ORBITS["whirl"]
    short = trajectory_of(orbit, times[:3], drop=("velocity",), start=False)
    spec = parse_orbit(short.metadata, "run.csv", need_start=False)

    with pytest.raises(InputError, match=r"^run\.csv: --fit needs at least four rows"):
        fit_start(spec, short)


def test_positions_that_are_no_orbit_are_refused(trajectory_of: Make) -> None:
    """First rows faster than light: one sentence, not a traceback."""
    orbit, times = ORBITS["whirl"]
    exact = trajectory_of(orbit, times, drop=("velocity",), start=False)
    torn = replace(exact, time=exact.time / 100)

    with pytest.raises(InputError, match=r"^run\.csv: --fit: "):
        check_trajectory(torn, fit=True)
