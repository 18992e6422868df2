"""Units: exact speeds of light, GM/c^2 and GM/c^3 correctly rounded, what is refused."""

from __future__ import annotations

from fractions import Fraction
from math import floor

import mpmath
import pytest

from truefall.reference.declaration import SYSTEMS as DECLARED
from truefall.reference.units import (
    CONSTANTS,
    LENGTHS,
    SYSTEM,
    SYSTEMS,
    TIMES,
    length_in,
    speed_of_light,
    time_in,
)


def test_the_speed_of_light_is_exact_in_every_system():
    """299 792 458 m/s (SI definition); in km/s a rational, not the float64 299792.458."""
    assert speed_of_light("geometric") == 1
    assert speed_of_light("SI") == 299_792_458
    assert speed_of_light("astronomical") == Fraction(299_792_458, 1000)
    assert speed_of_light("astronomical") != Fraction(299792.458)
    assert {name: SYSTEM[name].c_exact for name in SYSTEMS} == DECLARED


@pytest.mark.parametrize("name", [key for key in CONSTANTS if key.startswith("gm_")])
@pytest.mark.parametrize(("system", "metres"), [("SI", 1), ("astronomical", 1000)])
def test_gravitational_lengths_and_times_are_correctly_rounded(name, system, metres):
    """Against 40 digits; kilometres from a gm in km^3/s^2."""
    gm = CONSTANTS[name].value / metres**3
    with mpmath.workdps(40):
        c = mpmath.mpf(299_792_458) / metres
        length, time = float(mpmath.mpf(gm) / c**2), float(mpmath.mpf(gm) / c**3)

    assert length_in(system, gm) == length
    assert time_in(system, gm) == time


def test_printed_solar_and_terrestrial_values():
    """GM/c^3 of the sun, GM/c^2 of the earth (recomputed), and the pulsar literature's digits.

    4.925490947 us (from memory) is 4.92549094764... cut off, not rounded.
    """
    sun = time_in("SI", CONSTANTS["gm_sun_nominal"].value)

    assert sun == pytest.approx(4.92549094764127e-6, rel=2e-15)
    assert floor(sun * 1e15) == 4_925_490_947
    earth = length_in("SI", CONSTANTS["gm_earth_tcg"].value)
    assert round(earth * 1e12) == 4_435_028_039


def test_units_of_budgets_hang_together():
    """Ratios by hand; the astronomical unit is IAU 2012 Resolution B2 (seen in a quotation)."""
    assert LENGTHS["km"] / LENGTHS["mm"] == 10**6
    assert LENGTHS["um"] / LENGTHS["nm"] == LENGTHS["m"] * 1000
    assert LENGTHS["cm"] * 100 == LENGTHS["m"]
    assert LENGTHS["au"] == CONSTANTS["au"].value
    assert TIMES["d"] == 24 * TIMES["h"] == 1440 * TIMES["min"] == 86400 * TIMES["s"]
    assert TIMES["ms"] == 10**3 * TIMES["us"] == 10**6 * TIMES["ns"] == 10**9 * TIMES["ps"]


@pytest.mark.parametrize("function", [length_in, time_in])
@pytest.mark.parametrize("gm", [0.0, -1.0, float("inf"), float("nan")])
def test_a_mass_that_is_none_is_refused(function, gm):
    with pytest.raises(ValueError, match="positive and finite"):
        function("SI", gm)


@pytest.mark.parametrize("function", [length_in, time_in, lambda name, _: speed_of_light(name)])
def test_an_unknown_system_is_refused(function):
    with pytest.raises(ValueError, match="allowed are geometric, SI, astronomical"):
        function("imperial", 1.0)


def test_every_constant_names_source_status_and_unit():
    """A number without a source is no constant."""
    for name, constant in CONSTANTS.items():
        assert constant.source, name
        assert constant.unit, name
        assert constant.status in ("seen", "from memory", "recomputed"), name
