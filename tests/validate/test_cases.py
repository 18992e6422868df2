"""The catalogue: complete, true to its words, and reachable to its last sample."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.budget import parse_budget
from truefall.validate.cases import Case, case, load_cases, show_case
from truefall.validate.errors import InputError, UsageError
from truefall.validate.orbit_file import CHARTS, PARTICLES, SYSTEMS

if TYPE_CHECKING:
    from truefall.reference import States

CLASSES = {
    "bound", "circular-stable", "circular-unstable", "asymptotic", "plunge", "capture", "flyby",
    "radial", "trapped", "critical",
}  # fmt: skip
ALL = [pytest.param(c, id=c.name) for c in load_cases()]


@cache
def states_of(name: str) -> tuple[Orbit, States]:
    chosen = case(name)
    orbit = chosen.spec.orbit()
    return orbit, orbit.at(np.array(chosen.spec.times))


def test_catalogue_covers_every_class_chart_system_particle_and_clock() -> None:
    catalogue = load_cases()
    assert len(catalogue) >= 28
    assert {c.orbit_class for c in catalogue} == CLASSES
    assert {c.spec.chart for c in catalogue} == set(CHARTS)
    assert {c.spec.system for c in catalogue} == set(SYSTEMS)
    assert {c.spec.particle for c in catalogue} == set(PARTICLES)
    assert {c.spec.clock for c in catalogue} == {"coordinate", "proper"}
    assert {c.level for c in catalogue} == {"lower", "average", "higher"}
    assert len({c.title for c in catalogue}) == len(catalogue)


@pytest.mark.parametrize("chosen", ALL)
def test_declared_class_is_the_orbits_and_every_time_is_reached(chosen: Case) -> None:
    orbit = chosen.spec.orbit()
    assert orbit.orbit_class == chosen.orbit_class
    assert orbit.reachable(np.array(chosen.spec.times)).all()


@pytest.mark.parametrize("chosen", ALL)
def test_every_case_has_samples_words_and_a_budget_that_parses(chosen: Case) -> None:
    assert chosen.spec.times is not None
    assert len(chosen.spec.times) >= 6
    budget = parse_budget(chosen.spec.budget, chosen.spec.system, chosen.name)
    assert budget.absolute["position"] > 0
    assert len(chosen.why) > 30
    assert len(chosen.scenario) > 15
    assert chosen.name in show_case(chosen)


@pytest.mark.parametrize("chosen", ALL)
def test_budget_can_be_met_with_float64_output(chosen: Case) -> None:
    """A budget below the spacing of the numbers that the file holds could never pass."""
    _, found = states_of(chosen.name)
    budget = parse_budget(chosen.spec.budget, chosen.spec.system, chosen.name)
    spacing = float(np.max(np.spacing(np.linalg.norm(found.position, axis=1))))
    assert budget.absolute["position"] > 4 * spacing


def test_an_unknown_name_is_answered_with_the_nearest_one() -> None:
    with pytest.raises(UsageError, match="did you mean 'light-critical'"):
        case("light-critcal")
    with pytest.raises(UsageError, match="truefall cases lists them"):
        case("qqqq")


def test_a_case_without_its_words_is_refused() -> None:
    from truefall.validate import cases

    text = case("radial-fall").text
    with pytest.raises(InputError, match=r"broken\.toml: \[case\] lacks why"):
        cases._parse("broken", text.replace("why =", "wherefore ="))
    with pytest.raises(InputError, match="known level"):
        cases._parse("broken", text.replace('level = "lower"', 'level = "easy"'))


# What the stories say, held against the orbits. ------------------------------------------------


def test_fall_with_energy_one_ends_after_32_thirds() -> None:
    """tau = (2/3) r^(3/2) / sqrt(2) from r = 8: the cycloid's limit; textbook, from memory."""
    orbit = case("radial-fall-parabolic").spec.orbit()
    assert orbit.ends_after is not None
    assert orbit.ends_after.time == 32 / 3
    assert orbit.energy_minus_one.value == 0.0


def test_unstable_circle_and_light_ring_stay_exactly() -> None:
    for name, radius in (("circular-unstable", 4.0), ("light-circular", 3.0)):
        _, found = states_of(name)
        assert np.all(found.radius == radius)


def test_separatrix_neighbours_part_and_the_exact_one_stays() -> None:
    exact = case("whirl-inward").spec.orbit().at(np.array([600.0]))
    above = case("whirl-ulp-above").spec.orbit().at(np.array([600.0]))
    below = case("whirl-ulp-below").spec.orbit().at(np.array([600.0]))
    assert abs(exact.radius[0] - 4.0) < 1e-15
    assert above.radius[0] > 40.0
    assert below.radius[0] < 2.0 + 1e-12


@pytest.mark.parametrize("name", ["whirl-inward-harmonic", "whirl-inward"])
def test_separatrix_twins_are_one_orbit(name: str) -> None:
    """Harmonic r - 1 and areal r differ by one at every moment (same time coordinate)."""
    _, found = states_of(name)
    shift = 1.0 if name.endswith("harmonic") else 0.0
    other = case("whirl-inward").spec.orbit().at(np.array(case(name).spec.times))
    size = np.linalg.norm(found.position, axis=1)
    assert np.allclose(size + shift, np.linalg.norm(other.position, axis=1), rtol=4e-16, atol=0)


def test_strong_orbit_advances_by_212_degrees() -> None:
    """The quadrature of the radial equation by a rule of its own (trapezoid in chi, exact in the
    limit for periodic integrands): azimuth = 2 integral of dchi / sqrt(1 - (6 + 2 e cos chi)/p).

    Source: the equation of the orbit in chi, Darwin 1961, from memory.
    """
    p, e, n = 10.0, 0.3, 400
    chi = 2 * math.pi * np.arange(n) / n
    azimuth = float(np.mean(1 / np.sqrt(1 - (6 + 2 * e * np.cos(chi)) / p))) * 2 * math.pi
    orbit = case("bound-strong").spec.orbit()
    assert orbit.azimuth_per_radial_period is not None
    assert orbit.azimuth_per_radial_period.value == pytest.approx(azimuth, rel=1e-14)
    assert math.degrees(azimuth - 2 * math.pi) == pytest.approx(212, abs=0.5)


def test_solar_limb_bends_light_by_1_75_arcseconds() -> None:
    """4 GM/(c^2 b) = 1.75 arcseconds at the solar limb (common knowledge, Eddington 1919)."""
    orbit = case("light-sun-limb").spec.orbit()
    far = orbit.at(np.array([-1e10, 1e10]))
    bending = abs(far.azimuth[1] - far.azimuth[0]) - math.pi
    assert math.degrees(bending) * 3600 == pytest.approx(1.75, abs=0.005)


def test_proper_and_chart_clock_differ_by_what_the_stories_say() -> None:
    _, strong = states_of("bound-proper-time")
    assert strong.coordinate_time is not None
    assert strong.coordinate_time[-1] / strong.time[-1] == pytest.approx(1.15, abs=0.01)
    _, weak = states_of("earth-satellite-proper")
    assert weak.coordinate_time is not None
    assert weak.coordinate_time[-1] - weak.time[-1] == pytest.approx(139e-6, abs=1e-6)


def test_million_revolutions_start_again_at_the_periapsis() -> None:
    _, found = states_of("bound-million-revolutions")
    periapsis = 10.0 / 1.3
    assert abs(found.radius[2] - periapsis) < 1e-3
    assert found.winding[1] > 1e6


# The catalogue through the whole program. -------------------------------------------------------


@pytest.mark.parametrize("chosen", ALL)
def test_what_make_writes_check_passes_and_twice_the_budget_fails(
    chosen: Case, tmp_path: Path
) -> None:
    """Not a test of the truth (that is tests/reference), but of all that lies between."""
    from truefall.validate.check import check_file
    from truefall.validate.formats import read_trajectories, write_trajectory
    from truefall.validate.make import make

    suffix = ".h5" if len(chosen.name) % 2 else ".csv"
    times = chosen.spec.times or ()
    some = times if len(times) < 20 else (*times[: -1 : len(times) // 20], times[-1])
    made = make(replace(chosen.spec, times=some), tmp_path / f"exact{suffix}")
    (result,) = check_file(made.path, budget=dict(chosen.spec.budget))
    assert result.verdict == "pass", result.reason
    assert result.orbit is not None
    assert result.orbit.orbit_class == chosen.orbit_class
    (found,) = read_trajectories(made.path)
    budget = parse_budget(chosen.spec.budget, chosen.spec.system, chosen.name)
    position = found.position.copy()
    position[-1, 1] += 2 * budget.absolute["position"]
    write_trajectory(tmp_path / "spoiled.npz", replace(found, position=position, stored=None))
    (result,) = check_file(tmp_path / "spoiled.npz", budget=dict(chosen.spec.budget))
    assert result.verdict == "fail"
    (judgement,) = (j for j in result.judgements if j.quantity == "position")
    assert judgement.failing_rows == 1
