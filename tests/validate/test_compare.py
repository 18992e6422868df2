"""Obtained against expected: components, second words, guards."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.check import check_trajectory
from truefall.validate.compare import Comparison
from truefall.validate.trajectory import Quantisation, Trajectory

Make = Callable[..., Trajectory]
TIMES = np.linspace(0.0, 700.0, 40)


def _orbit() -> Orbit:
    return Orbit(position=[12.0, 1.0, 2.0], velocity=[-0.02, 0.25, 0.1])


def _compared(trajectory: Trajectory) -> Comparison:
    comparison = check_trajectory(trajectory).comparison
    assert comparison is not None
    return comparison


def test_a_correctly_rounded_file_errs_by_its_rounding_exactly(trajectory_of: Make) -> None:
    """The second words are used: the error is what rounding to float64 left over."""
    orbit = _orbit()
    comparison = _compared(trajectory_of(orbit, TIMES))
    states = orbit.at(TIMES)

    np.testing.assert_array_equal(comparison.position_error, -states.position_low)
    half_ulp = np.linalg.norm(np.spacing(np.abs(states.position)), axis=1) / 2
    assert np.all(comparison.distance <= half_ulp)
    assert comparison.distance.max() > 1e-17


def test_the_guard_of_an_exact_reference_is_tiny(trajectory_of: Make) -> None:
    """Float64 files from declared starts: 32 digits, and the rounding of the comparison."""
    guard = _compared(trajectory_of(_orbit(), TIMES)).position_guard

    assert np.all(guard.bound <= 40 * 2.0**-104)
    assert np.all(guard.total < 1e-28)
    assert not guard.quantisation.any()


@pytest.mark.parametrize("which", ["radial", "along", "cross"])
def test_components_are_told_apart(trajectory_of: Make, which: str) -> None:
    """Radial along the position, cross along the angular momentum, along completes them."""
    orbit = _orbit()
    exact = trajectory_of(orbit, TIMES)
    radial = exact.position / np.linalg.norm(exact.position, axis=1, keepdims=True)
    cross = np.broadcast_to(orbit.angular_momentum_direction, radial.shape)
    axes = {"radial": radial, "cross": cross, "along": np.cross(cross, radial)}
    size = 1e-6 * (1 + TIMES / 100)
    comparison = _compared(replace(exact, position=exact.position + size[:, None] * axes[which]))

    for name in axes:
        expected = size if name == which else 0.0
        np.testing.assert_allclose(getattr(comparison, name), expected, atol=1e-14)
    np.testing.assert_allclose(comparison.distance, size, rtol=1e-8)


def test_along_is_positive_ahead(trajectory_of: Make) -> None:
    """A satellite that is early by dt lies |v| dt ahead."""
    orbit = Orbit(position=[10.0, 0.0, 0.0], velocity=[0.0, 0.33, 0.0])
    exact = trajectory_of(orbit, TIMES)
    early = orbit.at(TIMES + 1e-3).position
    comparison = _compared(replace(exact, position=early))

    assert np.all(comparison.along > 0)
    assert comparison.along[0] == pytest.approx(0.33e-3, rel=1e-4)


@pytest.mark.parametrize("direction", [[1.0, 0.0, 0.0], [0.0, 0.0, 1.0], [1.0, 1.0, 1.0]])
def test_radial_motion_has_components_too(trajectory_of: Make, direction: list[float]) -> None:
    """Without an orbital plane any orthogonal pair completes the radius."""
    unit = np.array(direction) / np.linalg.norm(direction)
    orbit = Orbit(position=(10 * unit).tolist(), velocity=(0.1 * unit).tolist())
    exact = trajectory_of(orbit, np.linspace(0.0, 20.0, 10))
    shift = np.array([3e-6, -2e-6, 5e-6])
    comparison = _compared(replace(exact, position=exact.position + shift))

    parts = np.column_stack([comparison.radial, comparison.along, comparison.cross])
    np.testing.assert_allclose(np.linalg.norm(parts, axis=1), np.linalg.norm(shift), rtol=1e-9)
    np.testing.assert_allclose(comparison.radial, shift @ unit, rtol=1e-6)


def test_velocity_and_proper_time_are_compared(trajectory_of: Make) -> None:
    """Errors put in come out, signed for the clock."""
    exact = trajectory_of(_orbit(), TIMES)
    assert exact.velocity is not None
    assert exact.proper_time is not None
    comparison = _compared(
        replace(
            exact,
            velocity=exact.velocity + np.array([3e-7, 0.0, 4e-7]),
            proper_time=exact.proper_time - 2e-6,
        )
    )

    assert comparison.velocity_error is not None
    assert comparison.clock_error is not None
    np.testing.assert_allclose(comparison.velocity_error, 5e-7, rtol=1e-8)
    np.testing.assert_allclose(comparison.clock_error, -2e-6, rtol=1e-6)


@pytest.mark.parametrize(
    ("orbit", "column"),
    [
        (Orbit(particle="light", position=[20.0, 1, 2], velocity=[-1.0, 0.35, 0.1]), "affine"),
        (
            Orbit(position=[10.0, 0, 0], velocity=[0, 0.3, 0], clock="proper"),
            "coordinate_time",
        ),
        (Orbit(position=[10.0, 0, 0], velocity=[0, 0.3, 0]), "proper_time"),
    ],
)
def test_the_second_clock_depends_on_particle_and_clock(
    trajectory_of: Make, orbit: Orbit, column: str
) -> None:
    """Affine parameter of light, chart time on the proper clock, proper time else."""
    exact = trajectory_of(orbit, np.linspace(0.0, 40.0, 12))
    values = getattr(exact, column)
    comparison = _compared(replace(exact, **{column: values + 1e-6}))

    assert comparison.clock_error is not None
    np.testing.assert_allclose(comparison.clock_error, 1e-6, rtol=1e-8)


def test_the_guard_holds_every_source(trajectory_of: Make) -> None:
    """w = b + q + |v| q_t + c, and c grows with the deviation."""
    exact = trajectory_of(_orbit(), TIMES)
    assert exact.velocity is not None
    quantum = Quantisation(time=1e-7, position=np.array([3e-8, 0.0, 4e-8]), velocity=np.zeros(3))
    comparison = _compared(replace(exact, position=exact.position + 1.0, quantisation=quantum))
    guard = comparison.position_guard
    speed = np.linalg.norm(exact.velocity, axis=1)

    np.testing.assert_allclose(guard.digits, 5e-8)
    np.testing.assert_allclose(guard.stamps, speed * 1e-7, rtol=1e-5)
    np.testing.assert_allclose(guard.rounding, comparison.distance * 2.0**-52, rtol=10)
    np.testing.assert_allclose(
        guard.total, guard.bound + guard.digits + guard.stamps + guard.carried + guard.rounding
    )


def test_digits_of_every_row_may_differ(trajectory_of: Make) -> None:
    """Significant digits give each entry its own half unit."""
    exact = trajectory_of(_orbit(), TIMES)
    quanta = 1e-9 * np.abs(exact.position)
    guard = _compared(replace(exact, quantisation=Quantisation(position=quanta))).position_guard

    np.testing.assert_allclose(guard.digits, 1e-9 * np.linalg.norm(exact.position, axis=1))


def test_revolutions_count_from_the_start(trajectory_of: Make) -> None:
    """|azimuth|/(2 pi), whichever way the orbit runs."""
    orbit = Orbit(position=[100.0, 0.0, 0.0], velocity=[0.0, -0.1, 0.0])
    period = 2 * np.pi * 100.0**1.5
    revolutions = _compared(trajectory_of(orbit, [0.0, period, 5 * period])).revolutions

    np.testing.assert_allclose(revolutions, [0.0, 1.0, 5.0], rtol=1e-2)
