"""Orbits given by elements, against the second route from a start worked out with mpmath.

r = p/(1 + e cos chi), dtau/dchi and the constants after Cutler, Kennefick & Poisson 1994, PRD 50,
3816 (from memory); the plane by the usual three angles, with the start at periapsis argument plus
chi.  The start has 60 digits; from there the Cartesian equations of motion are integrated.
"""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import make_second_route as script
import mpmath
import pytest
import second_route_compare as compare

from truefall.reference import Orbit

HERE = Path(__file__).parent


EARTH = {"system": "SI", "gm": 3.986004418e14}
ELEMENTS = [
    ("bound", {"semilatus_rectum": 9.5, "eccentricity": 0.3, "anomaly": 2.5}, [40.0, -300.0]),
    ("periapsis", {"semilatus_rectum": 9.5, "eccentricity": 0.7}, [90.0, -40.0]),
    ("circle", {"semilatus_rectum": 8.0, "eccentricity": 0.0, "anomaly": -1.0}, [70.0]),
    ("parabola", {"semilatus_rectum": 12.0, "eccentricity": 1.0, "anomaly": -2.0}, [100.0, -50.0]),
    ("flyby", {"semilatus_rectum": 15.0, "eccentricity": 1.5, "anomaly": 1.25}, [30.0, -90.0]),
    ("satellite", {"semilatus_rectum": 9e6, "eccentricity": 0.25, "anomaly": 4.0, **EARTH}, [5e3]),
    ("proper", {"semilatus_rectum": 7.25, "eccentricity": 0.6, "clock": "proper"}, [50.0, -120.0]),
]
ANGLES = {"inclination": 0.625, "node": 2.25, "periapsis": -0.75}


def _start(p, e, chi, length, c):
    """Position and velocity as rationals of some 60 digits, in file units."""
    cosine, sine = mpmath.cos(chi), mpmath.sin(chi)
    r = p / (1 + e * cosine)
    energy = mpmath.sqrt(((p - 2) ** 2 - 4 * e**2) / (p * (p - 3 - e**2)))
    rate = energy / (1 - 2 / r)  # dt/dtau
    radial = e * sine * mpmath.sqrt((p - 6 - 2 * e * cosine) / (p * (p - 3 - e**2))) / rate
    across = p / mpmath.sqrt(p - 3 - e**2) / (r * rate)
    angle = mpmath.mpf(ANGLES["periapsis"]) + chi
    tilt, node = mpmath.mpf(ANGLES["inclination"]), mpmath.mpf(ANGLES["node"])

    def direction(theta):
        a, b = mpmath.cos(theta), mpmath.sin(theta)
        return [
            mpmath.cos(node) * a - mpmath.sin(node) * b * mpmath.cos(tilt),
            mpmath.sin(node) * a + mpmath.cos(node) * b * mpmath.cos(tilt),
            b * mpmath.sin(tilt),
        ]

    n, t = direction(angle), direction(angle + mpmath.pi / 2)
    place = [r * length * q for q in n]
    speed = [c * (radial * a + across * b) for a, b in zip(n, t, strict=True)]
    return [_rational(q) for q in place], [_rational(q) for q in speed]


def _rational(x):
    man, exp = mpmath.mpf(x).man, mpmath.mpf(x).exp
    return Fraction(int(man)) * Fraction(2) ** int(exp) * (-1 if x < 0 and man > 0 else 1)


@pytest.mark.parametrize(("name", "given", "times"), ELEMENTS, ids=[row[0] for row in ELEMENTS])
def test_elements(name, given, times):
    """Both words to 1e-28, the nearest float64, the proven bound; the class follows from e."""
    system, gm = given.get("system", "geometric"), given.get("gm", 1.0)
    orbit = Orbit.from_elements(**given, **ANGLES)
    classes = {"circle": "circular-stable", "parabola": "flyby", "flyby": "flyby"}
    assert orbit.orbit_class == classes.get(name, "bound")
    with mpmath.workdps(60):
        light = script.geodesic.LIGHT_SPEED[system]
        c = mpmath.mpf(light.numerator) / light.denominator
        length = mpmath.mpf(gm) / c**2
        p, e = (mpmath.mpf(given[k]) for k in ("semilatus_rectum", "eccentricity"))
        place, speed = _start(p / length, e, mpmath.mpf(given.get("anomaly", 0.0)), length, c)
    start = {
        "system": system,
        "gm": gm,
        "particle": "massive",
        "chart": "areal",
        "clock": given.get("clock", "coordinate"),
        "position": place,
        "velocity": speed,
        "times": times,
    }
    rows = script.rows(start, 38)
    states = orbit.at(times)
    with mpmath.workdps(45):
        faults = [
            f for k, row in enumerate(rows) for f in compare.compare_row(states, k, row, 1e-28)
        ]
    assert not faults, "\n".join(faults)
    assert orbit.position == tuple(float(q) for q in place)
    assert orbit.velocity == tuple(float(q) for q in speed)
