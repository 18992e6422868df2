"""Special orbits, horizon, infall, and bound eccentric orbits, against published values.

Status beside each check: seen-1, seen-2, from memory, recomputed (with mpmath and Arb).
"""

from __future__ import annotations

from math import asin, degrees, nextafter, pi, sqrt

import mp_quadrature as quadrature
import mpmath
import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.reference import closed_form as cf
from truefall.reference import landmarks as marks
from truefall.reference import observables as obs


def full(bounded):
    return mpmath.mpf(bounded.value) + mpmath.mpf(bounded.low)


@pytest.fixture(autouse=True)
def _precision():
    with mpmath.workdps(40):
        yield


def test_landmarks():
    """Radii 6, 4, 3 (seen-2), E and L of the innermost circle (from memory, recomputed):
    Kaplan 1949; Bardeen, Press & Teukolsky 1972, ApJ 178, 347; b_crit: Darwin 1959."""
    assert (marks.INNERMOST_STABLE, marks.MARGINALLY_BOUND, marks.PHOTON_SPHERE) == (6, 4, 3)
    assert pytest.approx(0.942809041582063, abs=5e-16) == marks.INNERMOST_STABLE_ENERGY
    assert pytest.approx(3.4641016151377546, abs=5e-16) == marks.INNERMOST_STABLE_MOMENTUM
    assert pytest.approx(5.196152422706632, abs=1e-15) == marks.CRITICAL_IMPACT
    assert pi * marks.CRITICAL_IMPACT**2 == pytest.approx(84.8230016469, abs=5e-11)
    assert pytest.approx(0.192450089729875, abs=5e-16) == marks.LIGHT_RING_LYAPUNOV


def test_innermost_orbit_from_the_engine():
    """E = sqrt(8/9), 1 - E = 5.72 % ("5.7 %" seen-2; digits recomputed), M Omega = 6^(-3/2)
    (Kluzniak, Michelson & Wagoner 1990; from memory, recomputed), u^t = sqrt 2, local speed 1/2."""
    speed = 1 / sqrt(6.0)
    orbit = Orbit(position=(6, 0, 0), velocity=(0, speed, 0))
    # E is stationary along circles, so the rounding of the speed enters squared or at 1 ulp
    assert -full(orbit.energy_minus_one) == pytest.approx(0.0571909584179366, abs=2e-16)
    assert full(orbit.angular_momentum) == pytest.approx(3.4641016151377546, abs=2e-15)
    assert speed / 6 == pytest.approx(0.068041381743977, abs=5e-16)
    assert obs.orbital_frequency(6.0) == pytest.approx(0.068041381743977, abs=5e-16)
    dtau = orbit.at([2.0**-20]).proper_time[0] / 2.0**-20
    assert 1 / dtau == pytest.approx(sqrt(2), rel=1e-12)  # recomputed; textbooks
    assert speed / sqrt(1 - 2 / 6) == pytest.approx(0.5, rel=1e-15)  # seen-2 ("0.5 c")
    # 2198.587 Hz x Msun/M with the nominal GM (recomputed; 2.2 kHz from memory)
    from truefall.reference.units import CONSTANTS

    gm, c = CONSTANTS["gm_sun_nominal"].value, CONSTANTS["c"].value
    frequency = obs.orbital_frequency(6 * gm / c**2, gm, c) / (2 * pi)
    assert frequency == pytest.approx(2198.587, abs=5e-4)


def test_marginally_bound_circle_is_exact():
    """r = 4, L = 4, E = 1 (r seen-2, recomputed): exactly, from float64 numbers."""
    orbit = Orbit(position=(4, 0, 0), velocity=(0, 0.5, 0))
    assert orbit.orbit_class == "circular-unstable"
    assert (orbit.energy.value, orbit.energy.low) == (1.0, 0.0)
    assert (orbit.angular_momentum.value, orbit.angular_momentum.low) == (4.0, 0.0)


@pytest.mark.parametrize("r", [16.0, 64.0, 4.0, 256.0])
def test_circular_orbits(r):
    """Omega^2 = 1/r^3, u^t = (1 - 3/r)^(-1/2), E, L: Bardeen, Press & Teukolsky 1972,
    eqs. (2.12)-(2.16) at a = 0 (from memory, recomputed)."""
    orbit = Orbit(position=(r, 0, 0), velocity=(0, 1 / sqrt(r), 0))
    energy = (1 - 2 / mpmath.mpf(r)) / mpmath.sqrt(1 - 3 / mpmath.mpf(r))
    momentum = mpmath.sqrt(r / (1 - 3 / mpmath.mpf(r)))
    assert abs(full(orbit.energy) - energy) < 1e-30
    assert abs(full(orbit.angular_momentum) / momentum - 1) < 1e-30
    states = orbit.at([128.0])
    tau = mpmath.mpf(states.proper_time[0]) + mpmath.mpf(states.proper_time_low[0])
    assert abs(tau / 128 - mpmath.sqrt(1 - 3 / mpmath.mpf(r))) < 1e-30
    assert states.azimuth[0] == pytest.approx(128 / r**1.5, rel=1e-15)
    assert obs.circular_clock_offset(r) == pytest.approx(sqrt(1 - 3 / r) - 1, rel=4e-15)


def test_epicyclic_frequency():
    """Maximum 0.022097086912 at r = 8, kappa/Omega = 1/2; 3:2 at r = 10.8 (Okazaki, Kato & Fukue
    1987; Abramowicz & Kluzniak 2001, A&A 374, L19; from memory, recomputed).  The engine's radial
    period of a nearly circular orbit tends to 2 pi/kappa."""
    peak = obs.radial_frequency(8.0)
    assert peak == pytest.approx(0.022097086912, abs=5e-13)
    assert peak > max(obs.radial_frequency(7.99), obs.radial_frequency(8.01))
    assert peak / obs.orbital_frequency(8.0) == pytest.approx(0.5, rel=1e-15)
    ratio = obs.orbital_frequency(10.8) / obs.radial_frequency(10.8)
    assert ratio == pytest.approx(1.5, rel=1e-15)
    orbit = Orbit.from_elements(semilatus_rectum=8.0, eccentricity=2.0**-20)
    assert orbit.radial_period.value == pytest.approx(2 * pi / peak, rel=1e-10)


def _radius(orbit, times):
    states = orbit.at(times)
    p, q = states.position, states.position_low
    return [
        mpmath.sqrt(sum((mpmath.mpf(a) + mpmath.mpf(b)) ** 2 for a, b in zip(x, y, strict=True)))
        for x, y in zip(p, q, strict=True)
    ]


def test_light_ring_growth():
    """lambda = 1/(3 sqrt 3) = 0.192450089729875 per unit t (Cardoso et al. 2009, PRD 79, 064016,
    eq. (40)-(41)?, from memory, recomputed): a ray one part in 2^53 off the circle, by the
    engine."""
    for sign in (1.0, -1.0):
        ray = Orbit(particle="light", position=(3, 0, 0), velocity=(sign * 2.0**-53, 1, 0))
        near, far = (abs(r - 3) for r in _radius(ray, [60.0, 90.0]))
        assert mpmath.log(far / near) / 30 == pytest.approx(0.192450089729875, abs=2e-9)
        # e^pi per half orbit (Johnson et al. 2020, Sci. Adv. 6, eaaz1310, gamma = pi; from memory)
        half = 3 * sqrt(3) * pi
        one, two = (abs(r - 3) for r in _radius(ray, [60.0, 60.0 + half]))
        assert mpmath.log(two / one) == pytest.approx(pi, abs=1e-8)


def test_growth_beside_the_unstable_circle():
    """The massive exponent, Omega sqrt(6/r - 1) = sqrt(1/128) at r = 4 (recomputed), by the engine:
    starts one unit in the last place beside the circle."""
    for toward in (1.0, 0.0):
        orbit = Orbit(position=(4, 0, 0), velocity=(0, nextafter(0.5, toward), 0))
        a, b, c = _radius(orbit, [130.0, 190.0, 250.0])
        growth = mpmath.log((c - b) / (b - a)) / 60
        assert growth == pytest.approx(obs.lyapunov_exponent(4.0), abs=1e-5)
        assert obs.lyapunov_exponent(4.0) == pytest.approx(sqrt(1 / 128), rel=1e-15)
    assert obs.lyapunov_exponent(3.0) == pytest.approx(0.192450089729875, abs=5e-16)


@pytest.mark.parametrize(
    ("r", "angle"),
    [(6.0, 45.0), (3.0 + 2.0**-40, 90.0), (4.0, 66.7162682789), (10.0, 27.6945614508)],
)
def test_escape_cone(r, angle):
    """sin psi = 3 sqrt 3 sqrt(1 - 2/r)/r (Synge 1966, MNRAS 131, 463; from memory, recomputed):
    inward rays just inside and outside the cone are captured and turn."""
    psi = asin(min(1.0, 3 * sqrt(3) * sqrt(1 - 2 / r) / r))
    assert degrees(psi) == pytest.approx(angle, abs=1e-4 if r < 3.1 else 6e-11)
    if r < 3.1:
        return
    f = 1 - 2 / r
    for shift, name in ((-1e-9, "capture"), (1e-9, "flyby")):
        # static observer's angle from the inward direction: tan psi = r phidot sqrt f/(-rdot)
        direction = (-f * np.cos(psi + shift), sqrt(f) * np.sin(psi + shift), 0.0)
        ray = Orbit(particle="light", position=(r, 0, 0), velocity=direction)
        assert ray.orbit_class == name


@pytest.mark.parametrize(
    ("energy", "time"), [(0.0, pi), (1.0, 4 / 3)], ids=["longest", "from rest at infinity"]
)
def test_horizon_to_centre(energy, time):
    """pi at most (MTW sec. 31.3, from memory; that a maximum exists: Lewis & Kwan 2007, PASA 24,
    46, abstract seen-1); 4/3 from rest at infinity (MTW sec. 31.2, from memory); recomputed."""
    from truefall.reference.units import CONSTANTS

    assert cf.horizon_to_centre(energy) == pytest.approx(time, rel=1e-15)
    solar = CONSTANTS["gm_sun_nominal"].value / CONSTANTS["c"].value ** 3
    # 15.473886 us and 6.567321264 us x M/Msun (recomputed)
    printed = {0.0: 15.473886e-6, 1.0: 6.567321264e-6}[energy]
    assert cf.horizon_to_centre(energy) * solar == pytest.approx(printed, rel=4e-8)


def test_infall_by_engine_and_closed_form():
    """10 -> 2 from rest at infinity: 13.57378651666526 (MTW; recomputed); and on to r = 0."""
    assert cf.fall_time_from_infinity(10.0, 2.0).proper == pytest.approx(
        13.57378651666526, abs=2e-14
    )
    # E = 1 exactly: r = 8, rdot = -(1 - 2/r) sqrt(2/r) = -3/8
    orbit = Orbit(position=(8, 0, 0), velocity=(-0.375, 0, 0), clock="proper")
    assert (orbit.energy.value, orbit.energy_minus_one.value) == (1.0, 0.0)
    fall = cf.fall_time_from_infinity(8.0, 2.0)
    assert orbit.ends_after.time == pytest.approx(fall.proper, rel=4e-16)
    rest = Orbit(
        chart="painleve-gullstrand", position=(8, 0, 0), velocity=(-0.5, 0, 0), clock="proper"
    )
    assert rest.energy.value == 1.0
    assert rest.ends_after.time == pytest.approx(fall.proper + 4 / 3, rel=4e-16)
    # in this chart the time of such a particle is its proper time
    assert rest.at([5.0]).coordinate_time[0] == pytest.approx(5.0, rel=4e-16)


@pytest.mark.parametrize("apex", [2.5, 9.0, 1000.0])
def test_cycloid(apex):
    """Fall from rest (MTW eqs. 25.38, 31.10; from memory) against the engine."""
    orbit = Orbit(position=(apex, 0, 0), velocity=(0, 0, 0))
    whole = cf.cycloid_fall(apex, 0.0)
    assert whole.proper == pytest.approx(pi * sqrt(apex**3 / 8), rel=1e-15)
    for share in (0.9, 0.3, 0.01):
        r = 2 + share * (apex - 2)
        fall = cf.cycloid_fall(apex, r)
        states = orbit.at([fall.coordinate])
        # the closed form's time is good to a few ulp: the radius to the speed times that
        reach = 4 * np.spacing(fall.coordinate) * abs(states.velocity[0, 0])
        assert states.radius[0] == pytest.approx(r, rel=2e-15, abs=reach)
        assert states.proper_time[0] == pytest.approx(fall.proper, rel=3e-15)


def test_isofrequency_limit():
    """Where d(T_r, Phi)/d(p, e^2) = 0 meets e = 0: p = (39 + sqrt 145)/8 = 6.380199322349
    (Warburton, Barack & Sago 2013, PRD 87, 084012, abstract seen-1; value from memory,
    recomputed, converging linearly in e^2)."""
    expected = (39 + mpmath.sqrt(145)) / 8
    assert abs(expected - mpmath.mpf("6.380199322349")) < 1e-12

    def jacobian(p):
        e2, dp, de = mpmath.mpf("1e-8"), mpmath.mpf("1e-10"), mpmath.mpf("1e-12")

        def pair(p, e2):
            energy = mpmath.sqrt(((p - 2) ** 2 - 4 * e2) / (p * (p - 3 - e2)))
            found = quadrature.periods(energy, p / mpmath.sqrt(p - 3 - e2))
            return found["radial_period"], found["azimuth_per_radial_period"]

        along_p = [(a - b) / dp for a, b in zip(pair(p + dp, e2), pair(p - dp, e2), strict=True)]
        along_e = [(a - b) / de for a, b in zip(pair(p, e2 + de), pair(p, e2 - de), strict=True)]
        return along_p[0] * along_e[1] - along_p[1] * along_e[0]

    low, high = expected - mpmath.mpf("2e-8"), expected + mpmath.mpf("6e-8")
    assert jacobian(low) * jacobian(high) < 0


# (p, e): Phi, T_r, tau_r; Arb, radius < 1e-21 (recomputed; the pairs are those of the literature:
# Barack & Sago 2010, PRD 81, 084021; Cutler, Kennefick & Poisson 1994, PRD 50, 3816).
TABLE = {
    ("7", "0.2"): (
        "17.1715679396393512225",
        "321.6889944432241452965",
        "243.874151631697010040",
    ),
    ("10", "0.2"): (
        "9.95331819285409311785",
        "328.3819630776365958267",
        "276.384247165722021088",
    ),
    ("10", "0.3"): (
        "9.97702363511547398212",
        "348.2738683609032417286",
        "295.365034767236815074",
    ),
    ("20", "0.5"): (
        "7.51704711344502248899",
        "989.5592835908986097828",
        "930.547212145817118621",
    ),
    ("7.50478", "0.188917"): (
        "14.2036164377643412790",
        "298.4062810937695244758",
        "232.299173813891545312",
    ),
}
NAMES = ("azimuth_per_radial_period", "radial_period", "proper_radial_period")


def _constants(p, e):
    """E and L from p and e (Cutler, Kennefick & Poisson 1994, eqs. 2.1-2.12 approx., from
    memory)."""
    energy = mpmath.sqrt(((p - 2) ** 2 - 4 * e**2) / (p * (p - 3 - e**2)))
    return energy, p / mpmath.sqrt(p - 3 - e**2)


@pytest.mark.parametrize("elements", sorted(TABLE), ids="-".join)
def test_periods_to_twenty_digits(elements):
    """The table against mpmath's quadratures at the decimal (p, e), and the engine against those
    quadratures at the float64 numbers nearest to them."""
    exact = quadrature.periods(*_constants(*(mpmath.mpf(q) for q in elements)))
    for name, printed in zip(NAMES, TABLE[elements], strict=True):
        assert abs(exact[name] / mpmath.mpf(printed) - 1) < 1e-20
    p, e = (float(q) for q in elements)
    orbit = Orbit.from_elements(semilatus_rectum=p, eccentricity=e)
    nearest = quadrature.periods(*_constants(mpmath.mpf(p), mpmath.mpf(e)))
    for name in (*NAMES, "periapsis", "apoapsis"):
        assert abs(full(getattr(orbit, name)) / nearest[name] - 1) < 1e-30


def test_periods_of_an_exact_pair_by_the_engine():
    """(20, 0.5) is exact in float64: the engine against the table itself."""
    orbit = Orbit.from_elements(semilatus_rectum=20.0, eccentricity=0.5)
    for name, printed in zip(NAMES, TABLE["20", "0.5"], strict=True):
        assert abs(full(getattr(orbit, name)) / mpmath.mpf(printed) - 1) < 1e-20


@pytest.mark.parametrize("elements", sorted(TABLE), ids="-".join)
def test_closed_forms_in_double(elements):
    """The same table in float64: 5e-14 relative."""
    p, e = (float(q) for q in elements)
    found = (
        cf.azimuth_per_radial_period(p, e),
        cf.radial_period(p, e),
        cf.proper_radial_period(p, e),
    )
    for value, printed in zip(found, TABLE[elements], strict=True):
        assert value == pytest.approx(float(printed), rel=5e-14)
    assert cf.azimuth(p, e, 2 * pi) == pytest.approx(float(TABLE[elements][0]), rel=5e-14)
    whole = cf.times_since_periapsis(p, e, 2 * pi)
    assert whole.coordinate == pytest.approx(float(TABLE[elements][1]), rel=5e-14)
    assert whole.proper == pytest.approx(float(TABLE[elements][2]), rel=5e-14)


@pytest.mark.parametrize("p", [6.9, 30.0, 1e4, 1.5e9])
@pytest.mark.parametrize("e", [0.0, 1e-6, 0.3, 0.44])
def test_closed_forms_against_quadrature(p, e):
    """Any (p, e), weak and strong fields: float64 closed forms against mpmath (5e-14)."""
    with mpmath.workdps(60):
        energy, momentum = _constants(mpmath.mpf(p), mpmath.mpf(e))
        assert cf.energy_minus_one(p, e) == pytest.approx(float(energy - 1), rel=4e-15)
        assert cf.constants_from_elements(p, e)[1] == pytest.approx(float(momentum), rel=1e-15)
        if e == 0.0:
            kappa = mpmath.sqrt((1 - 6 / mpmath.mpf(p)) / mpmath.mpf(p) ** 3)
            exact = {
                "radial_period": 2 * mpmath.pi / kappa,
                "azimuth_per_radial_period": 2 * mpmath.pi / mpmath.sqrt(1 - 6 / mpmath.mpf(p)),
            }
        else:
            exact = quadrature.periods(energy, momentum)
        advance = exact["azimuth_per_radial_period"] - 2 * mpmath.pi
        assert cf.precession_per_orbit(p, e) == pytest.approx(float(advance), rel=5e-14)
        assert cf.radial_period(p, e) == pytest.approx(float(exact["radial_period"]), rel=5e-14)
        back = cf.elements_from_constants(
            cf.energy_minus_one(p, e), cf.constants_from_elements(p, e)[1]
        )
        # e^2 is fixed by the difference of E and the circular energy: sqrt(eps) near circles
        assert back == pytest.approx((p, e), rel=1e-11, abs=1e-6)


def test_incomplete_times_against_the_engine():
    """Azimuth and both times to any anomaly: the engine's radius at the closed form's time."""
    p, e = 9.0, 0.25
    orbit = Orbit.from_elements(semilatus_rectum=p, eccentricity=e)
    for chi in (0.5, 2.0, 3.0, -1.25, 40.0):
        times = cf.times_since_periapsis(p, e, chi)
        states = orbit.at([times.coordinate])
        assert states.radius[0] == pytest.approx(p / (1 + e * np.cos(chi)), rel=5e-14)
        assert states.proper_time[0] == pytest.approx(times.proper, rel=5e-14)
        assert states.azimuth[0] == pytest.approx(times.azimuth, rel=5e-14)
        if abs(chi) < pi:
            assert cf.azimuth(p, e, chi) == pytest.approx(times.azimuth, rel=1e-13)


@pytest.mark.parametrize(("p", "e"), [(5.9, 0.0), (6.0, 0.0), (7.0, 0.5), (7.0, -0.1)])
def test_no_orbit_inside_the_separatrix(p, e):
    """p = 6 + 2e (Cutler, Kennefick & Poisson 1994; from memory)."""
    with pytest.raises(ValueError, match=r"6 \+ 2e|e >= 0|0 <= e < 1"):
        cf.radial_period(p, e)
    assert cf.separatrix(0.5) == 7.0


@pytest.mark.parametrize("e", [0.0, 0.3, 0.7])
def test_weak_field_series(e):
    """Phi/2pi - 1 = 3/p + (27/2 + 3e^2/4)/p^2 + (135/2 + 45e^2/4)/p^3 + (2835/8 + 945e^2/8 +
    105e^4/64)/p^4: e.g. Damour & Schaefer 1988 (2PN); recomputed at e = 0, .3, .7."""
    for p in (1e3, 1e4):
        series = 3 / p + (13.5 + 0.75 * e**2) / p**2 + (67.5 + 11.25 * e**2) / p**3
        series += (2835 / 8 + 945 / 8 * e**2 + 105 / 64 * e**4) / p**4
        exact = cf.precession_per_orbit(p, e) / (2 * pi)
        assert exact == pytest.approx(series, rel=1500 / p**4 + 5e-15)
