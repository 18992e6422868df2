"""Constants of the motion computed from states: exact states keep them, changed ones lose them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.check import check_trajectory
from truefall.validate.drift import Drifts
from truefall.validate.trajectory import Quantisation, Trajectory

CHARTS = (
    "areal", "isotropic", "harmonic", "kerr-schild", "painleve-gullstrand",
    "eddington-finkelstein",
)  # fmt: skip
GM_EARTH = 3.986004418e14  # IERS Conventions 2010 (TN 36), Table 1.1
C = 299_792_458.0
#: Roundings of about twenty float64 operations.
FLOAT64 = 20 * 2.0**-52

Make = Callable[..., Trajectory]


def _strong(chart: str = "areal") -> Orbit:
    return Orbit(position=[12.0, 1.0, 2.0], velocity=[-0.02, 0.25, 0.1], chart=chart)


def _earth(chart: str = "areal") -> Orbit:
    return Orbit(
        system="SI", gm=GM_EARTH, chart=chart,
        position=[7.0e6, 1.0e5, 2.0e6], velocity=[10.0, 7.3e3, 500.0],
    )  # fmt: skip


def _ray(chart: str = "areal") -> Orbit:
    return Orbit(
        particle="light", chart=chart, position=[20.0, 1.0, 2.0], velocity=[-1.0, 0.35, 0.1]
    )


def _drifts(trajectory: Trajectory) -> Drifts:
    comparison = check_trajectory(trajectory).comparison
    assert comparison is not None
    return comparison.drifts


@pytest.mark.parametrize("chart", CHARTS)
@pytest.mark.parametrize(("orbit_of", "span"), [(_strong, 2000.0), (_earth, 86400.0), (_ray, 60.0)])
def test_exact_states_drift_by_rounding_alone(
    trajectory_of: Make, orbit_of: Callable[[str], Orbit], span: float, chart: str
) -> None:
    """In every chart, strong and weak field, massive and light: below the guard, and tiny."""
    drifts = _drifts(trajectory_of(orbit_of(chart), np.linspace(0.0, span, 40)))

    for drift in (drifts.energy, drifts.angular_momentum, drifts.norm):
        if drift is not None:
            assert np.all(np.abs(drift.values) <= drift.guard)
            assert np.abs(drift.values).max() < 4 * FLOAT64
    assert (drifts.energy is None) == (drifts.norm is not None)


def test_the_guard_knows_the_digits_near_the_horizon(trajectory_of: Make) -> None:
    """At r = 2 + 1e-3 a state's last digit moves its energy by far more than 2^-52."""
    orbit = Orbit(position=[2.05, 0.0, 0.0], velocity=[-0.001, 0.001, 0.0])
    energy = _drifts(trajectory_of(orbit, np.linspace(0.0, 8.0, 50))).energy

    assert energy is not None
    assert energy.guard.max() > 10 * energy.guard.min()
    assert np.all(np.abs(energy.values) <= energy.guard)


def test_a_faster_state_has_more_energy(trajectory_of: Make) -> None:
    """dE = v dv/c^2 in a weak field, relative to max(|E - 1|, GM/(c^2 r))."""
    exact = trajectory_of(_earth(), np.linspace(0.0, 6000.0, 30))
    assert exact.velocity is not None
    share = 1e-6
    drifts = _drifts(replace(exact, velocity=exact.velocity * (1 + share)))

    r = np.linalg.norm(exact.position, axis=1)
    expected = share * np.sum(exact.velocity**2, axis=1) / (GM_EARTH / r)
    assert drifts.energy is not None
    assert drifts.angular_momentum is not None
    np.testing.assert_allclose(drifts.energy.values, expected, rtol=1e-5)
    np.testing.assert_allclose(drifts.angular_momentum.values, share, rtol=1e-5)


def test_the_slope_is_that_of_the_drift(trajectory_of: Make) -> None:
    """Least squares per unit of time; here the change is linear by construction."""
    exact = trajectory_of(_earth(), np.linspace(0.0, 6000.0, 30))
    assert exact.velocity is not None
    ramp = 1.0 + 1e-9 * exact.time[:, None]
    drifts = _drifts(replace(exact, velocity=exact.velocity * ramp))

    assert drifts.angular_momentum is not None
    assert drifts.angular_momentum.slope == pytest.approx(1e-9, rel=1e-4)


def test_a_turned_plane_is_seen_in_the_direction(trajectory_of: Make) -> None:
    """Turning all states about a line in the plane tilts the normal and keeps the size."""
    orbit = Orbit(position=[10.0, 0.0, 0.0], velocity=[0.0, 0.33, 0.0])
    exact = trajectory_of(orbit, np.linspace(0.0, 500.0, 20))
    assert exact.velocity is not None
    angle = 1e-5
    turn = np.array(
        [[1, 0, 0], [0, np.cos(angle), -np.sin(angle)], [0, np.sin(angle), np.cos(angle)]]
    )
    drifts = _drifts(
        replace(exact, position=exact.position @ turn.T, velocity=exact.velocity @ turn.T)
    )

    assert drifts.direction is not None
    assert drifts.angular_momentum is not None
    assert drifts.energy is not None
    np.testing.assert_allclose(drifts.direction, angle, rtol=1e-9)
    np.testing.assert_allclose(drifts.angular_momentum.values, angle, rtol=1e-9)
    assert abs(drifts.angular_momentum.slope) < 1e-15
    assert np.abs(drifts.energy.values).max() < FLOAT64


def test_light_that_is_too_fast_has_a_norm(trajectory_of: Make) -> None:
    """g(v, v)/c^2 of a ray stretched by 1e-6 far from the mass: twice that."""
    ray = Orbit(particle="light", position=[2000.0, 0.0, 0.0], velocity=[-0.2, 1.0, 0.0])
    exact = trajectory_of(ray, np.linspace(0.0, 10.0, 12))
    assert exact.velocity is not None
    norm = _drifts(replace(exact, velocity=exact.velocity * (1 + 1e-6))).norm

    assert norm is not None
    np.testing.assert_allclose(norm.values, 2e-6, rtol=2e-3)


def test_radial_motion_has_a_measure_of_angular_momentum(trajectory_of: Make) -> None:
    """Without a true size the drift is relative to sqrt(GM r), that of a circular orbit."""
    orbit = Orbit(position=[1000.0, 0.0, 0.0], velocity=[0.01, 0.0, 0.0])
    exact = trajectory_of(orbit, np.linspace(0.0, 10.0, 12))
    assert exact.velocity is not None
    drifts = _drifts(replace(exact, velocity=exact.velocity + np.array([0.0, 1e-6, 0.0])))

    assert drifts.direction is None
    assert drifts.angular_momentum is not None
    expected = 1e-6 * exact.position[:, 0] / np.sqrt(exact.position[:, 0])
    np.testing.assert_allclose(drifts.angular_momentum.values, expected, rtol=3e-3)


def test_digits_widen_the_guard(trajectory_of: Make) -> None:
    """Half a unit q of each velocity component opens E by up to sum |v_k| q/c^2."""
    exact = trajectory_of(_earth(), np.linspace(0.0, 6000.0, 30), start=True)
    assert exact.velocity is not None
    q = 5e-4
    rounded = replace(exact, quantisation=Quantisation(velocity=np.full(3, q)))
    energy = _drifts(rounded).energy
    r = np.linalg.norm(exact.position, axis=1)

    assert energy is not None
    expected = q * np.abs(exact.velocity).sum(axis=1) / (GM_EARTH / r)
    np.testing.assert_allclose(energy.guard, expected, rtol=1e-4)


def test_a_start_with_few_digits_opens_the_constants(trajectory_of: Make) -> None:
    """If the start is the first row, its digits count once more, at every row."""
    exact = trajectory_of(_earth(), np.linspace(0.0, 6000.0, 30), start=False)
    digits = Quantisation(velocity=np.full(3, 5e-4))
    known = check_trajectory(
        replace(trajectory_of(_earth(), exact.time, start=True), quantisation=digits)
    )
    read = check_trajectory(replace(exact, quantisation=digits))
    assert known.comparison is not None
    assert read.comparison is not None
    with_start, without = read.comparison.drifts.energy, known.comparison.drifts.energy

    assert with_start is not None
    assert without is not None
    assert np.all(with_start.guard > 1.5 * without.guard)


def test_positions_alone_say_nothing(trajectory_of: Make) -> None:
    """No velocities, no constants."""
    exact = trajectory_of(_strong(), np.linspace(0.0, 100.0, 12), drop=("velocity",))

    assert _drifts(exact) == Drifts()


def test_a_state_faster_than_light_has_no_energy(trajectory_of: Make) -> None:
    """It becomes NaN, counts as undecided at best, and stays out of the slope."""
    exact = trajectory_of(_strong(), np.linspace(0.0, 100.0, 12), budget={"energy": 1e-9})
    assert exact.velocity is not None
    velocity = exact.velocity.copy()
    velocity[5] = [3.0, 0.0, 0.0]
    result = check_trajectory(replace(exact, velocity=velocity))
    assert result.comparison is not None
    energy = result.comparison.drifts.energy

    assert energy is not None
    assert np.isnan(energy.values[5])
    assert abs(energy.slope) < 1e-16
    assert result.verdict == "undecided"
    assert result.judgements[0].row == 5
