"""Facts of the trade and constants, against their sources.

Status of a value, beside each check: common practice (no source); seen-1 (read in the primary
text), seen-2 (read in a text that quotes it), from memory, recomputed.
"""

from __future__ import annotations

from math import pi, sqrt

import mpmath
import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.reference.charts import CHARTS, areal_radius, chart_radius
from truefall.reference.landmarks import HORIZON
from truefall.reference.observables import ARCSECOND
from truefall.reference.units import CONSTANTS, SYSTEM, length_in


def full(bounded):
    """A Bounded as an mpmath number."""
    return mpmath.mpf(bounded.value) + mpmath.mpf(bounded.low)


@pytest.mark.parametrize(
    ("chart", "own_radius"),
    [("areal", 2.0), ("isotropic", 0.5), ("harmonic", 1.0)]
    + [(chart, 2.0) for chart in CHARTS[3:]],
)
def test_horizon_of_every_chart_is_at_areal_2gm(chart, own_radius):
    """r_s = 2GM/c^2: common practice; chart radii of it: contract of the charts."""
    assert HORIZON == 2.0
    assert float(areal_radius(chart, own_radius)) == HORIZON
    assert float(chart_radius(chart, HORIZON)) == own_radius


@pytest.mark.parametrize("r", [2.0625, 3.0, 7.0, 100.0, 2.0**40])
def test_areal_metric_product_is_minus_one(r):
    """g_tt g_rr = -1 (common practice).

    -g_tt is the squared energy of a particle at rest, and radial light obeys
    g_rr v^2 = -g_tt, so g_tt g_rr = -E^4/v^2.
    """
    rest = Orbit(position=(r, 0, 0), velocity=(0, 0, 0))
    light = Orbit(particle="light", position=(r, 0, 0), velocity=(1, 0, 0))
    product = full(rest.energy) ** 4 / mpmath.mpf(light.velocity_used[0]) ** 2
    assert abs(product - 1) < 3e-16


@pytest.mark.parametrize("chart", CHARTS[:3])
def test_metric_tends_to_minkowski(chart):
    """Deviation falls as 2GM/(c^2 r) (common practice): light speed and clock of one at rest."""
    for rho in (1e4, 1e6):
        rest = Orbit(chart=chart, position=(rho, 0, 0), velocity=(0, 0, 0))
        assert full(rest.energy_minus_one) * rho == pytest.approx(-1, rel=3 / rho)
        light = Orbit(chart=chart, particle="light", position=(rho, 0, 0), velocity=(1, 0, 0))
        assert (1 - light.velocity_used[0]) * rho == pytest.approx(2, rel=3e-6 + 3 / rho)


@pytest.mark.parametrize("chart", CHARTS)
def test_slow_and_weak_acceleration_is_newtons(chart):
    """d2r/dt2 -> -GM/r^2 at rest, r large (common practice), difference O(GM/(c^2 r))."""
    mpmath.mp.dps = 50
    for r in (2.0**14, 2.0**20):
        step = r / 64
        orbit = Orbit(chart=chart, position=(r, 0, 0), velocity=(0, 0, 0))
        states = orbit.at([-step, step])
        back, on = (
            mpmath.mpf(a) + mpmath.mpf(b)
            for a, b in zip(states.position[:, 0], states.position_low[:, 0], strict=True)
        )
        acceleration = (back - 2 * r + on) / mpmath.mpf(step) ** 2
        # the fourth-order term of the difference is step^2/r^3 relative to 1/r^2: 1/r as well
        assert abs(acceleration * r**2 + 1) < 8 / r
        assert acceleration < 0


@pytest.mark.parametrize("chart", CHARTS)
def test_norm_is_kept(chart):
    """g(u,u) = -1 and d tau = ds (common practice): dtau/dT from the metric and from the clock."""
    mpmath.mp.dps = 40
    orbit = Orbit(chart=chart, position=(9.0, 0, 0), velocity=(-0.125, 0.25, 0.0625))
    h = 1 / 64
    for t in (0.0, 4.0):
        states = orbit.at([t - 2 * h, t - h, t, t + h, t + 2 * h])
        tau = [
            mpmath.mpf(a) + mpmath.mpf(b)
            for a, b in zip(states.proper_time, states.proper_time_low, strict=True)
        ]
        rate = (8 * (tau[3] - tau[1]) - (tau[4] - tau[0])) / (12 * h)
        assert rate == pytest.approx(_rate(chart, states.position[2], states.velocity[2]), rel=1e-9)


def _rate(chart, x, v):
    """dtau/dT from the line element of the chart in areal form."""
    rho = float(np.linalg.norm(x))
    n = x / rho
    radial = float(n @ v)
    across2 = float(v @ v) - radial**2
    r = float(areal_radius(chart, rho))
    f = 1 - 2 / r
    slope = 1 - 1 / (4 * rho**2) if chart == "isotropic" else 1.0
    dr = radial * slope
    angular = across2 * (r / rho) ** 2
    squared = {
        "kerr-schild": f - 4 / r * dr - (1 + 2 / r) * dr**2,
        "painleve-gullstrand": 1 - (dr + sqrt(2 / r)) ** 2,
        "eddington-finkelstein": f - 2 * dr,
    }.get(chart, f - dr**2 / f)
    return sqrt(squared - angular)


# name: printed value, uncertainty, source, status
PRINTED = {
    "c": ("299792458", 0.0, "SI, exact", "seen (SciPy CODATA 2022)"),
    "G": ("6.67430e-11", 0.00015e-11, "CODATA 2022, NIST", "seen-2"),
    "gm_sun_nominal": ("1.3271244e20", 0.0, "IAU 2015 Res. B3; Prsa et al. 2016", "seen-2"),
    "gm_sun_tcb": ("1.32712442099e20", 1e10, "Luzum et al. 2011, Table 1", "seen-2"),
    "gm_sun_tdb": ("1.32712440041e20", 1e10, "Luzum et al. 2011, Table 1", "seen-2"),
    "gm_earth_tcg": ("3.986004418e14", 8e5, "IERS TN36 (2010), Table 1.1", "seen-2"),
    "gm_earth_tt": ("3.986004415e14", 8e5, "Ries 1992; IERS TN36 ch. 1", "from memory"),
    "gm_earth_tdb": ("3.986004356e14", 8e5, "IAU 2009 list", "from memory"),
    "gm_earth_nominal": ("3.986004e14", 0.0, "IAU 2015 Res. B3", "from memory"),
    "gm_earth_gps": ("3.986005e14", 0.0, "IS-GPS-200", "seen-2"),
    "L_G": ("6.969290134e-10", 0.0, "IAU 2000 Res. B1.9", "seen-2"),
    "L_B": ("1.550519768e-8", 0.0, "IAU 2006 Res. B3 (not ...772e-8, which is older)", "seen-2"),
    "au": ("149597870700", 0.0, "IAU 2012 Res. B2", "seen-2 (SciPy)"),
    "parsec": ("3.085677581491367e16", 0.0, "IAU 2015 Res. B2 note 4", "recomputed, seen (SciPy)"),
    "radius_sun_nominal": ("6.957e8", 0.0, "IAU 2015 Res. B3", "from memory"),
}


@pytest.mark.parametrize("name", sorted(CONSTANTS))
def test_constants_are_the_printed_ones(name):
    printed, uncertainty, _source, _status = PRINTED[name]
    assert CONSTANTS[name].value == float(printed)
    assert CONSTANTS[name].uncertainty == uncertainty


def test_constants_hang_together():
    """Time scales (IAU resolutions, seen-2): TDB = TCB (1 - L_B), TT = TCG (1 - L_G)."""
    value = {name: constant.value for name, constant in CONSTANTS.items()}
    # recomputed: 1.32712440041267e20; the printed value has 12 digits
    assert value["gm_sun_tcb"] * (1 - value["L_B"]) == pytest.approx(1.32712440041267e20, rel=4e-15)
    assert value["gm_sun_tdb"] == pytest.approx(value["gm_sun_tcb"] * (1 - value["L_B"]), abs=0.5e9)
    # recomputed: 3.98600441522e14, 3.98600435620e14; printed to 10 digits
    tt = value["gm_earth_tcg"] * (1 - value["L_G"])
    tdb = value["gm_earth_tcg"] * (1 - value["L_B"])
    assert tt == pytest.approx(3.98600441522e14, rel=2e-12)
    assert tdb == pytest.approx(3.98600435620e14, rel=2e-12)
    assert value["gm_earth_tt"] == pytest.approx(tt, abs=0.5e5)
    assert value["gm_earth_tdb"] == pytest.approx(tdb, abs=0.5e5)
    # parsec: 648000/pi AU (recomputed); AU/c = 499.004783836156 s (recomputed)
    assert value["parsec"] == pytest.approx(648000 / pi * value["au"], rel=2e-16)
    assert value["au"] / value["c"] == pytest.approx(499.004783836156, rel=2e-15)
    assert pytest.approx(4.84813681109536e-6, rel=2e-15) == ARCSECOND


def test_no_constant_is_g_times_a_mass():
    """Suns and earths are known to 1e-9 or better; a product with G would carry 2.2e-5."""
    for name, constant in CONSTANTS.items():
        if name.startswith("gm_"):
            assert constant.uncertainty / constant.value < 3e-9, name


@pytest.mark.parametrize(
    ("name", "length", "time"),
    [
        ("gm_sun_nominal", 1476.62503805, 4.92549094764127e-6),
        ("gm_sun_tcb", None, 4.92549102554358e-6),
        ("gm_sun_tdb", None, 4.92549094916294e-6),
        ("gm_earth_tcg", 4.435028039e-3, None),
    ],
)
def test_gravitational_lengths_and_times(name, length, time):
    """GM/c^2 and GM/c^3 (recomputed; derived, e.g. Prsa et al. 2016)."""
    unit = length_in("SI", CONSTANTS[name].value)
    if length is not None:
        assert unit == pytest.approx(length, rel=2e-10)
    if time is not None:
        assert unit / float(SYSTEM["SI"].c_exact) == pytest.approx(time, rel=2e-15)
