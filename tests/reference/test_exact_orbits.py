"""Exactly degenerate starts, ends, and the independent orbits that came with the data."""

from __future__ import annotations

import json
from decimal import Decimal, localcontext
from pathlib import Path

import mpmath
import numpy as np
import pytest
from flint import fmpq

from truefall.reference import EndReached, Orbit, StartError
from truefall.reference.exact.disc import working
from truefall.reference.exact.solution import Solution
from truefall.reference.exact.start import Motion

TRUTH = json.loads((Path(__file__).parents[1] / "data" / "truth_orbits.json").read_text())
#: Of this orbit only the first sample is a trajectory: its E^2 = 0.94173 exceeds the barrier,
#: 0.91073 for its L, so it ends at r = 0 (time 186.5) and the later samples, which bounce, do
#: not belong to it.  Found by the engine, confirmed by integrating the geodesic equation.
BROKEN = {"whirl-painleve": 1}


@pytest.mark.parametrize("entry", TRUTH["orbits"], ids=lambda o: o["name"])
def test_independent_orbits_are_met_to_the_last_digit(entry):
    """Taylor integrations at 320 bits (data file): 1e-31 with the second word, and to the ulp."""
    orbit = Orbit(
        **{
            k: entry[k]
            for k in ("system", "gm", "particle", "chart", "position", "velocity", "clock")
        }
    )
    rows = BROKEN.get(entry["name"], len(entry["times"]))
    states = orbit.at(entry["times"][:rows])
    with localcontext() as context:
        context.prec = 50
        for k, true in enumerate(entry["true"][:rows]):
            for name in ("position", "velocity"):
                expected = [Decimal(x) for x in true[name]]
                size = sum(x * x for x in expected).sqrt()
                high, low = getattr(states, name)[k], getattr(states, name + "_low")[k]
                for c in range(3):
                    assert float(expected[c]) == high[c]
                    assert abs(Decimal(high[c]) + Decimal(low[c]) - expected[c]) < size * Decimal(
                        "1e-31"
                    )
            if true["proper_time"] is not None:
                assert float(Decimal(true["proper_time"])) == states.proper_time[k]


def test_the_broken_entry_ends_where_an_integration_says():
    """The plunge of the file's fourth orbit: r = 0 at time 186.5056 (its own integration)."""
    entry = next(o for o in TRUTH["orbits"] if o["name"] == "whirl-painleve")
    orbit = Orbit(chart=entry["chart"], position=entry["position"], velocity=entry["velocity"])

    assert orbit.orbit_class == "plunge"
    assert orbit.ends_after.time == pytest.approx(186.505652, abs=2e-6)
    with pytest.raises(EndReached, match="r = 0"):
        orbit.at(entry["times"])


SEPARATRIX = [
    ("areal", (8, 0, 0), (-3 / 16, 3 / 8, 0)),
    ("harmonic", (7, 0, 0), (-3 / 16, 21 / 64, 0)),
    ("eddington-finkelstein", (8, 0, 0), (-1 / 4, 1 / 2, 0)),
]


@pytest.mark.parametrize(("chart", "position", "velocity"), SEPARATRIX)
def test_the_separatrix_is_recognised_and_never_left(chart, position, velocity):
    """E = 1, L = 4: u = 1/4 tanh^2 of Mino time; at time 1e6 the orbit is at r = 4 to the ulp."""
    orbit = Orbit(chart=chart, position=position, velocity=velocity)
    states = orbit.at([0.0, 10.0, 1e6, 1e12])

    assert orbit.orbit_class == "asymptotic"
    assert orbit.energy.value == 1.0
    assert orbit.angular_momentum.value == 4.0
    assert states.radius[0] == 8.0
    assert states.radius[2] == states.radius[3] == 4.0
    # azimuth = L s and u = tanh^2(s sqrt 2)/4 (elementary integral): s from the radius
    with mpmath.workdps(30):
        u = 1 / mpmath.mpf(states.radius[1])
        s = [mpmath.atanh(2 * mpmath.sqrt(x)) / mpmath.sqrt(2) for x in (mpmath.mpf(1) / 8, u)]
        expected = 4 * (s[1] - s[0])
    assert states.azimuth[1] == pytest.approx(float(expected), rel=1e-13)


@pytest.mark.parametrize("ulps", [1, -1])
def test_one_ulp_beside_the_separatrix_is_another_orbit(ulps):
    """The neighbours plunge or turn round, both within a few whirls."""
    speed = 3 / 8
    for _ in range(abs(ulps)):
        speed = np.nextafter(speed, np.inf * ulps)
    orbit = Orbit(position=(8, 0, 0), velocity=(-3 / 16, speed, 0))

    assert orbit.orbit_class == ("flyby" if ulps > 0 else "plunge")
    assert abs(orbit.at([1e4]).radius[0] - 4.0) > 1.0


@pytest.mark.parametrize(
    ("particle", "position", "velocity", "name"),
    [
        ("massive", (4, 0, 0), (0, 0.5, 0), "circular-unstable"),
        ("light", (3, 0, 0), (0, 1, 0), "circular-unstable"),
        ("light", (0, 0, -3), (1, 1, 0), "circular-unstable"),
    ],
)
def test_exact_circles_stay_for_ever(particle, position, velocity, name):
    """Omega = r^(-3/2) (Bardeen, Press & Teukolsky 1972, from memory), at time 1e9 too."""
    orbit = Orbit(particle=particle, position=position, velocity=velocity)
    states = orbit.at([1.0, 1e9])
    r = float(np.linalg.norm(position))

    assert orbit.orbit_class == name
    assert np.all(states.radius == r)
    assert states.azimuth[1] == pytest.approx(1e9 * r**-1.5, rel=1e-15)


@pytest.mark.parametrize(
    ("chart", "position", "direction"),
    [("areal", (18, 0, 0), (-10, 3, 0)), ("harmonic", (17, 0, 0), (-60, 17, 0))],
)
def test_exactly_critical_light(chart, position, direction):
    """Impact parameter 3 sqrt 3 exactly: it winds onto r = 3 and is there at time 1e6."""
    orbit = Orbit(particle="light", chart=chart, position=position, velocity=direction)

    assert orbit.orbit_class == "critical"
    assert orbit.angular_momentum.value == 3 * np.sqrt(3)
    assert orbit.at([1e6]).radius[0] == 3.0


def test_the_winding_onto_the_innermost_stable_circle():
    """E^2 = 8/9, L^2 = 12: u = 1/6 + 1/(6 s^2) of Mino time (elementary), the clock by quadrature.

    No float64 start was found that has these constants exactly, so they are given as such.
    """
    motion = Motion(
        mu=1, energy_squared=fmpq(8, 9), momentum_squared=fmpq(12), energy_sign=1, inward=-1,
        inverse_radius=fmpq(1, 3), inward_squared=fmpq(1, 9), double_root=fmpq(1, 6), triple=True,
        circular=False,
    )  # fmt: skip
    with mpmath.workdps(40):
        energy = mpmath.sqrt(mpmath.mpf(8) / 9)

        def rate(s):
            u = (1 + 1 / s**2) / 6
            return energy / (u**2 * (1 - 2 * u))

        times = [mpmath.quad(rate, [1, 2, 4, 8, 16, s]) for s in (32, 64)]
        with working(256):
            solution = Solution(motion, "areal", 256)
            for s, time in zip((32, 64), times, strict=True):
                instant = solution.at("chart", fmpq(*mpmath_rational(time)))
                u = mpmath.mpf(instant.u.mid().str(45, radius=False))
                swept = mpmath.mpf(instant.azimuth.mid().str(45, radius=False))
                assert abs(u - (1 + mpmath.mpf(1) / s**2) / 6) < mpmath.mpf(10) ** -33
                assert abs(swept - mpmath.sqrt(12) * (s - 1)) < mpmath.mpf(10) ** -33
            far = solution.at("chart", fmpq(10**9))
    assert float(1 / far.u) == pytest.approx(6.0, abs=1e-12)


def mpmath_rational(value):
    """Numerator and denominator of an mpf."""
    sign, mantissa, exponent, _ = value._mpf_
    mantissa = -int(mantissa) if sign else int(mantissa)
    return (mantissa << exponent, 1) if exponent >= 0 else (mantissa, 1 << -exponent)


def test_maximal_proper_time_below_the_horizon_is_pi():
    """E = 0, L = 0: pi in all (MTW section 31.3, from memory; Lewis & Kwan 2007)."""
    orbit = Orbit(chart="kerr-schild", position=(1, 0, 0), velocity=(-0.5, 0, 0), clock="proper")

    assert orbit.energy.value == 0.0
    assert orbit.ends_after.time - orbit.ends_before.time == pytest.approx(np.pi, abs=1e-15)
    assert "past edge" in orbit.ends_before.reason


def test_a_fall_with_unit_energy_ends_at_a_rational_time():
    """From r = 8 with E = 1: 32/3 of proper and of Painleve-Gullstrand time (elementary)."""
    orbit = Orbit(chart="painleve-gullstrand", position=(8, 0, 0), velocity=(-0.5, 0, 0))

    assert orbit.energy.value == 1.0
    assert orbit.ends_after.time == 32 / 3
    end = orbit.ends_after.time
    states = orbit.at([np.nextafter(end, 0)])
    assert 0 < states.radius[0] < 1e-9
    with pytest.raises(EndReached):
        orbit.at([10.7])


def test_chart_time_at_a_horizon_has_no_end_and_keeps_its_digits():
    """Outside, r - 2 falls like exp(-t/2); its logarithm at t = 1e6 is seen in the velocity."""
    orbit = Orbit(position=(6, 0, 0), velocity=(-0.25, 0.2, 0))
    states = orbit.at([400.0, 402.0])
    speed = np.linalg.norm(states.velocity, axis=1)

    assert orbit.ends_after is None
    assert np.all(states.radius == 2.0)
    assert speed[1] / speed[0] == pytest.approx(np.exp(-1), rel=1e-12)
    assert np.all(orbit.at([1e6]).velocity == 0.0)


def test_ingoing_light_leaves_infinity_at_a_finite_null_time():
    """Eddington-Finkelstein time of a ray is bounded towards its past; that end is stated."""
    orbit = Orbit(
        particle="light", chart="eddington-finkelstein", position=(5, 0, 0), velocity=(-1, 1, 0)
    )
    end = orbit.ends_before

    assert "past null infinity" in end.reason
    assert orbit.at([end.time * (1 - 1e-12)]).radius[0] > 1e9
    with pytest.raises(EndReached):
        orbit.at([end.time * 1.01])


@pytest.mark.parametrize(
    ("keys", "key", "words"),
    [
        ({"velocity": (0, 1, 0)}, "start.velocity", "speed of light"),
        ({"position": (2, 0, 0)}, "start.position", "ingoing chart"),
        ({"chart": "harmonic", "position": (0.5, 0, 0)}, "start.position", "horizon"),
        ({"position": (0, 0, 0)}, "start.position", "centre"),
        ({"velocity": (0, float("nan"), 0)}, "start.velocity", "finite"),
        ({"chart": "polar"}, "chart", "allowed are"),
        ({"gm": 2.0}, "gm", "geometric"),
        ({"particle": "light", "clock": "proper"}, "clock", "proper time"),
        ({"particle": "light", "velocity": (0, 0, 0)}, "start.velocity", "direction"),
        (
            {"particle": "light", "chart": "eddington-finkelstein", "velocity": (-1, 0, 0)},
            "start.velocity",
            "ingoing radial light",
        ),
        (
            {"chart": "kerr-schild", "position": (1, 0, 0), "velocity": (0.1, 0, 0)},
            "start.velocity",
            "fall faster",
        ),
        (
            {
                "particle": "light", "chart": "kerr-schild", "position": (1, 0, 0),
                "velocity": (1, 0.1, 0),
            },
            "start.velocity",
            "inward",
        ),
    ],
)  # fmt: skip
def test_starts_that_are_no_orbit_are_refused_with_the_key(keys, key, words):
    """One sentence, and the key of the orbit file at fault."""
    given_keys = {"position": (8, 0, 0), "velocity": (0, 0.4, 0)} | keys
    with pytest.raises(StartError, match=words) as caught:
        Orbit(**given_keys)

    assert caught.value.key == key


def test_elements_are_exact():
    """p and e themselves, not a rounded state, set the turning points: p/(1 -+ e)."""
    orbit = Orbit.from_elements(semilatus_rectum=10.0, eccentricity=0.25, anomaly=1.0)

    assert orbit.periapsis.value == 8.0
    assert orbit.apoapsis.value == 10 / 0.75
    with pytest.raises(StartError, match="separatrix"):
        Orbit.from_elements(semilatus_rectum=7.0, eccentricity=0.5)


def test_times_may_come_in_any_order_and_run_backwards():
    """The same instants, whatever the order; the past of a turning point mirrors its future."""
    orbit = Orbit(position=(10, 0, 0), velocity=(0, 0.35, 0.05))
    times = np.array([30.0, -30.0, 0.0, 1e5, -1e5])
    one = orbit.at(times)
    other = orbit.at(times[::-1])

    assert np.array_equal(one.position, other.position[::-1])
    assert np.array_equal(one.position[0] * [1, -1, -1], one.position[1])


@pytest.mark.parametrize(
    ("position", "velocity"),
    [
        ((4.999999999998739, 3.451163556774521e-12, 0.0), (1.78e-13, 0.4472135954999815, 0.0)),
        ((5.900000000000648, -5.83032816205074e-08, 0.0), (-3.6e-13, 0.4116934847963064, 0.0)),
        ((6.0, 0.0, 0.0), (0.0, 0.408248290463863, 0.0)),
    ],
)
def test_starts_a_hair_beside_unstable_circles(position, velocity):
    """Turning points 1e-6 apart or complex by as little: enclosed, and E and L come back."""
    orbit = Orbit(position=position, velocity=velocity)
    states = orbit.at([50.0, -50.0])

    assert np.all(np.isfinite(states.position))
    again = Orbit(position=states.position[0], velocity=states.velocity[0])
    assert again.energy_minus_one.value == pytest.approx(orbit.energy_minus_one.value, rel=1e-13)
    assert again.angular_momentum.value == pytest.approx(orbit.angular_momentum.value, rel=1e-14)
