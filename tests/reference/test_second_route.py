"""The exact engine against a route that shares no formula with it.

Expected states: Hamilton's equations in Cartesian coordinates of each chart at 50 digits and more,
written once by make_second_route.py into tests/data/second_route.json, and here recomputed in part
to show that the file is what the script makes.  Periods and ends: quadratures.
"""

from __future__ import annotations

import ast
import datetime
import functools
import json
from fractions import Fraction
from math import nextafter
from pathlib import Path

import make_second_route as script
import mp_geodesic as geodesic
import mp_metrics as metrics
import mpmath
import numpy as np
import pytest
import second_route_compare as compare
import second_route_orbits as table

from truefall.reference import EndReached, Orbit

HERE = Path(__file__).parent
DATA = json.loads((HERE.parent / "data" / "second_route.json").read_text())
ORBITS = {orbit["name"]: orbit for orbit in DATA["orbits"]}
FAR = {orbit["name"]: orbit for orbit in DATA["far"]}
RELATIVE = 1e-31


@pytest.fixture(autouse=True)
def _precision():
    with mpmath.workdps(45):
        yield


@functools.cache
def _made(name):
    orbit = ORBITS.get(name) or FAR[name]
    return Orbit(**{key: orbit[key] for key in compare.KEYS})


def _engine(orbit):
    """The engine's orbit; made once for all tests that hold it."""
    return _made(orbit["name"])


@pytest.mark.parametrize("name", [*ORBITS, *FAR])
def test_states(name):
    """Every class in every chart, both clocks, forwards and backwards, weak and strong fields.

    Also one ulp beside degenerate starts, and a million revolutions on: 1e-31 with the second
    word, the nearest float64 without, and within the proven bound.
    """
    orbit = ORBITS.get(name) or FAR[name]
    engine = _engine(orbit)
    assert engine.reachable(orbit["times"]).all()
    states = engine.at(orbit["times"])
    faults = [
        fault
        for k, row in enumerate(orbit["states"])
        for fault in compare.compare_row(states, k, row, RELATIVE)
    ]
    assert not faults, "\n".join(faults)


@pytest.mark.parametrize("name", DATA["periods"])
def test_periods(name):
    """Radial period, proper period, azimuth per period and turning points by quadrature."""
    engine = _engine(ORBITS[name])
    assert engine.orbit_class == "bound"
    for attribute, text in DATA["periods"][name].items():
        found, expected = getattr(engine, attribute), mpmath.mpf(text)
        assert abs(mpmath.mpf(found.value) + mpmath.mpf(found.low) - expected) < (
            1e-30 * expected
        ), attribute
        assert abs(mpmath.mpf(found.value) - expected) <= found.bound * (1 + 1e-9) + 1e-33 * float(
            expected
        ), attribute


@pytest.mark.parametrize("name", DATA["ends"])
def test_ends(name):
    """Time to r = 0 in the ingoing charts, to the horizon on the proper clock in the others."""
    orbit = ORBITS[name]
    engine = _engine(orbit)
    expected = mpmath.mpf(DATA["ends"][name]["time"])
    end = engine.ends_after
    assert end is not None
    assert end.time == float(expected)
    assert end.radius == (0.0 if orbit["chart"] in table.CHARTS[3:] else 2.0)
    beyond = nextafter(end.time, np.inf)
    with pytest.raises(EndReached):
        engine.at([orbit["times"][0], beyond])


@pytest.mark.parametrize("name", [n for n in ORBITS if n.startswith("plunge-proper/")])
def test_past_ends_on_the_proper_clock(name):
    """The same orbit backwards, up from r = 2 to its apoapsis and down to the start."""
    orbit = ORBITS[name]
    energy, momentum, radius, outward, _ = script.invariants(orbit, 130)
    with mpmath.workdps(36):
        past = script.quadrature.time_to(energy, momentum, radius, not outward, 2, "areal", True)
        assert _engine(orbit).ends_before.time == -float(past["parameter"])


@pytest.mark.parametrize("base", ["light-flyby", "light-critical", "light-inside"])
def test_light_comes_from_infinity_in_finite_ingoing_time(base):
    """In Eddington-Finkelstein time an ingoing ray took the integral of b^2/r^2 / (s (1 + s)) dr,
    s^2 = 1 - (1 - 2/r) b^2/r^2, from infinity: dt + dr/(1 - 2/r) with the pole divided out."""
    orbit = ORBITS[f"{base}/eddington-finkelstein"]
    energy, momentum, radius, outward, _ = script.invariants(orbit, 60)
    assert not outward

    def rate(u):
        root = mpmath.sqrt(1 - (1 - 2 * u) * (momentum * u) ** 2)
        return momentum**2 / (root * (1 + root))

    assert abs(energy - 1) < 1e-40
    past = _engine(orbit).ends_before
    assert past.time == -float(mpmath.quad(rate, [0, 1 / radius]))
    assert past.radius == np.inf


@pytest.mark.parametrize("name", [n for n in ORBITS if "circular" in n or "whirl-" in n])
def test_degenerate_classes(name):
    """Starts that float64 represents exactly keep their class; their neighbours do not have it."""
    expected = {
        "circular-stable": "circular-stable",
        "circular-unstable": "circular-unstable",
        "light-circular": "circular-unstable",
        "whirl-in": "asymptotic",
        "whirl-out": "asymptotic",
        "near-circular": "bound",
        "beside-whirl-up": "flyby",
        "beside-whirl-down": "plunge",
    }[name.split("/")[0]]
    assert _engine(ORBITS[name]).orbit_class == expected


def test_file_is_of_the_present_table():
    """Starts, charts and times in the file are those of the script's table, all of them."""
    wanted = {orbit["name"]: orbit for orbit in table.orbits()}
    assert list(wanted) == list(ORBITS)
    for name, orbit in wanted.items():
        assert {key: ORBITS[name][key] for key in orbit} == orbit, name
        assert len(ORBITS[name]["states"]) == len(orbit["times"])
        # two runs of the script, with different precision and order
        assert ORBITS[name]["agreement"] < 1e-33, name
    assert [f"far/{name}" for name, _, _ in table.FAR] == list(FAR)


def _handful():
    """Six orbits recomputed at every run: three fixed ones, three that change from day to day."""
    fixed = ["plunge/painleve-gullstrand", "flyby/harmonic", "light-flyby/isotropic"]
    cheap = [n for n in ORBITS if not n.startswith(("satellite", "beside-critical", "planet"))]
    day = datetime.datetime.now(datetime.UTC).date().toordinal()
    return fixed + [cheap[(day * 31 + k * len(cheap) // 3) % len(cheap)] for k in range(3)]


@pytest.mark.parametrize("place", range(6))
def test_file_is_what_the_script_makes(place):
    """Recomputed with 40 digits: 1e-28 of each vector's size (beside unstable circles ten go)."""
    name = _handful()[place]
    orbit = {**ORBITS[name], "times": ORBITS[name]["times"][:2]}
    for row, stored in zip(script.rows(orbit, 40), ORBITS[name]["states"], strict=False):
        assert script.difference(stored, row) < 1e-28, name


def test_without_gmpy2():
    """The plain mpmath numbers give the same as the faster ones."""
    orbit = ORBITS["bound/kerr-schild"]
    arguments = {key: orbit[key] for key in compare.KEYS}
    g = geodesic.Geodesic(**arguments, digits=24, use_gmpy=False)
    (state,) = g.states([Fraction(orbit["times"][0])])
    row = script.as_text(orbit, state, g.arithmetic)
    assert script.difference(orbit["states"][0], row) < 1e-21


@pytest.mark.parametrize("chart", metrics.CHARTS)
def test_metrics_are_inverse_and_slopes_are_derivatives(chart):
    """The second route's own foundation: g times its inverse, and d/du, at a few radii."""
    for text in ("0.45", "0.1", "1e-9") + (("0.7", "3.0") if chart in metrics.INGOING else ()):
        u = mpmath.mpf(text)
        root = mpmath.sqrt(2 * u)
        g_tt, g_tn, alpha, beta = metrics.covariant(chart, u, root)
        (a, b, c, d), slopes = metrics.contravariant(chart, u, root)
        # in the basis (T, n): blocks ((g_tt, g_tn), (g_tn, alpha + beta)); b and d carry x, not n
        radial = b / u, c + d / u**2
        product = [
            g_tt * a + g_tn * radial[0] - 1,
            g_tt * radial[0] + g_tn * radial[1],
            g_tn * a + (alpha + beta) * radial[0],
            g_tn * radial[0] + (alpha + beta) * radial[1] - 1,
            alpha * c - 1,
        ]
        assert max(abs(q) for q in product) < 1e-40
        for k, slope in enumerate(slopes):
            found = mpmath.diff(
                lambda q, k=k: metrics.contravariant(chart, q, mpmath.sqrt(2 * q))[0][k] + 0 * q, u
            )
            assert abs(found - slope) < 1e-18 * (1 + abs(slope))


def test_second_route_imports_nothing_of_the_package():
    for name in ("mp_geodesic", "mp_metrics", "mp_series", "mp_quadrature", "make_second_route"):
        tree = ast.parse((HERE / f"{name}.py").read_text())
        for node in ast.walk(tree):
            names = [a.name for a in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            assert not any(q.split(".")[0] in ("truefall", "flint") for q in names), name
