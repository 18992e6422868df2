"""Energy, angular momentum and norm against the full contraction of the metric at 50 digits."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from truefall.reference.charts import CHARTS, convert
from truefall.reference.invariants import state_invariants


def metric(name, x):
    """g_mn in Cartesian form, coordinates (T, x, y, z), from each chart's line element."""
    rho = mpmath.sqrt(sum(c * c for c in x))
    n = [c / rho for c in x]
    g = mpmath.zeros(4, 4)

    def spatial(transverse, radial):
        for i in range(3):
            for j in range(3):
                g[i + 1, j + 1] = (transverse if i == j else 0) + (radial - transverse) * n[i] * n[
                    j
                ]

    def mixed(value):
        for i in range(3):
            g[0, i + 1] = g[i + 1, 0] = value * n[i]

    m = 2 / rho
    g[0, 0] = -(1 - m)
    if name == "areal":
        spatial(mpmath.mpf(1), 1 / (1 - m))
    elif name == "isotropic":
        q = 1 / (2 * rho)
        g[0, 0] = -(((1 - q) / (1 + q)) ** 2)
        spatial((1 + q) ** 4, (1 + q) ** 4)
    elif name == "harmonic":
        g[0, 0] = -(rho - 1) / (rho + 1)
        spatial((1 + 1 / rho) ** 2, (rho + 1) / (rho - 1))
    elif name == "kerr-schild":
        spatial(mpmath.mpf(1), 1 + m)
        mixed(m)
    elif name == "painleve-gullstrand":
        spatial(mpmath.mpf(1), mpmath.mpf(1))
        mixed(mpmath.sqrt(m))
    else:
        spatial(mpmath.mpf(1), mpmath.mpf(0))
        mixed(mpmath.mpf(1))
    return g, rho


def contracted(name, x, v):
    """E, L vector and dtau/dT of a chart velocity, from g and its symmetries alone."""
    x, v = [mpmath.mpf(c) for c in x], [mpmath.mpf(c) for c in v]
    g, _ = metric(name, x)
    u = mpmath.matrix([1, *v])
    lower = g * u
    square = -(u.T * lower)[0]
    if square <= 0:
        return None
    rate = mpmath.sqrt(square)
    p = [lower[k + 1] / rate for k in range(3)]
    momentum = [x[1] * p[2] - x[2] * p[1], x[2] * p[0] - x[0] * p[2], x[0] * p[1] - x[1] * p[0]]
    return -lower[0] / rate, momentum, rate


@given(
    name=st.sampled_from(CHARTS),
    size=st.floats(0.5, 12).map(lambda e: 10.0**e),
    direction=st.tuples(*[st.floats(-1, 1)] * 3),
    velocity=st.tuples(*[st.floats(-1, 1)] * 3),
    share=st.floats(0.01, 1.2),
)
def test_energy_and_momentum_are_those_of_the_metric(name, size, direction, velocity, share):
    """E - 1 keeps its digits in fields of 1e-12: relative to max(|E - 1|, GM/(c^2 r))."""
    assume(np.linalg.norm(direction) > 0.1)
    x = np.array(direction) / np.linalg.norm(direction) * size
    v = np.array(velocity) * share / np.sqrt(size)
    with mpmath.workdps(50):
        true = contracted(name, x, v)
        assume(true is not None and true[2] > 0.05)
        energy_minus_one = float(true[0] - 1)
        momentum = np.array([float(c) for c in true[1]])
        rate = float(true[2])
    found = state_invariants([x], [v], name, "geometric", 1.0, "massive")
    scale = max(abs(energy_minus_one), 1 / size)

    assert abs(found.energy_minus_one[0] - energy_minus_one) <= 2e-14 * scale / rate**2
    # 1e-45: at rest the contraction at 50 digits leaves its own last places, not nought
    assert np.linalg.norm(found.angular_momentum[0] - momentum) <= 1e-14 * (
        np.linalg.norm(x) * (np.linalg.norm(v) / rate**2 + 1e-45)
    )
    assert found.rate[0] == pytest.approx(rate, rel=1e-13)


@pytest.mark.parametrize("name", CHARTS)
def test_light_has_norm_zero_and_its_impact_parameter(name):
    """A tangential ray from x = (9, 0, 0) in each chart, scaled to light speed by bisection."""
    with mpmath.workdps(40):
        x = [mpmath.mpf(9), mpmath.mpf(0), mpmath.mpf(0)]
        g, _ = metric(name, x)
        d = [mpmath.mpf("0.3"), mpmath.mpf("0.8"), mpmath.mpf(0)]
        a = sum(g[i + 1, j + 1] * d[i] * d[j] for i in range(3) for j in range(3))
        b = sum(g[0, i + 1] * d[i] for i in range(3))
        size = (-b + mpmath.sqrt(b * b - a * g[0, 0])) / a
        v = [float(size * c) for c in d]
        u = mpmath.matrix([1, *(size * c for c in d)])
        lower = g * u
        impact = float(9 * lower[2] / -lower[0])
    found = state_invariants([[9.0, 0, 0]], [v], name, "geometric", 1.0, "light")

    assert abs(found.null[0]) < 2e-15
    assert found.angular_momentum[0, 2] == pytest.approx(impact, rel=1e-14)


def test_an_earth_satellite_keeps_its_energy_digits():
    """The engine's E - 1 = -3.1e-10 from the same numbers, to 1e-13 relative, in every chart."""
    from truefall.reference import Orbit

    for name in CHARTS:
        keys = {"system": "SI", "gm": 3.986004418e14, "chart": name}
        x, v = (7.2e6, 0.0, 3e5), (10.0, 7300.0, 1200.0)
        exact = Orbit(position=x, velocity=v, **keys)
        found = state_invariants([x], [v], name, "SI", 3.986004418e14, "massive")

        assert found.energy_minus_one[0] == pytest.approx(exact.energy_minus_one.value, rel=1e-13)
        assert np.linalg.norm(found.angular_momentum[0]) == pytest.approx(
            exact.angular_momentum.value, rel=1e-14
        )


@settings(max_examples=150)
@given(
    name=st.sampled_from(("areal", "isotropic", "harmonic")),
    size=st.floats(-6, 0),
    seed=st.integers(0, 2**32 - 1),
)
def test_close_to_the_horizon_static_charts_keep_what_the_position_keeps(name, size, seed):
    """Relative errors no larger than what one rounding of |x| does to the distance from there."""
    draw = np.random.default_rng(seed).uniform(-1, 1, (2, 3))
    edge = {"areal": 2.0, "isotropic": 0.5, "harmonic": 1.0}[name]
    x = draw[0] / np.linalg.norm(draw[0]) * edge * (1 + 10.0**size)
    beyond = np.linalg.norm(x) - edge
    light_speed = {
        "areal": beyond / (2 + beyond),
        "isotropic": beyond / (1 + beyond) / 4,
        "harmonic": beyond / (2 + beyond),
    }[name]
    v = 0.5 * light_speed * draw[1]
    with mpmath.workdps(50):
        true = contracted(name, x, v)
        assume(true is not None)
        energy, rate = float(true[0]), float(true[2])
        momentum = np.array([float(c) for c in true[1]])
    found = state_invariants([x], [v], name, "geometric", 1.0, "massive")
    condition = 1 + edge / beyond

    assert found.energy[0] == pytest.approx(energy, rel=8 * 2.0**-52 * condition)
    assert found.rate[0] == pytest.approx(rate, rel=8 * 2.0**-52 * condition)
    assert np.allclose(
        found.angular_momentum[0], momentum, rtol=0,
        atol=8 * 2.0**-52 * condition * np.linalg.norm(x) * np.linalg.norm(v) / rate * 4,
    )  # fmt: skip


@settings(max_examples=100)
@given(source=st.sampled_from(CHARTS), target=st.sampled_from(CHARTS), size=st.floats(0.6, 9),
       seed=st.integers(0, 2**32 - 1))  # fmt: skip
def test_every_chart_sees_the_same_constants(source, target, size, seed):
    """A state carried to another chart keeps E - 1 and L, each to the rounding of the state."""
    r = 10.0**size
    draw = np.random.default_rng(seed).uniform(-1, 1, (2, 3))
    x = draw[0] / np.linalg.norm(draw[0]) * r
    v = 0.5 * draw[1] / np.sqrt(r)
    here = state_invariants([x], [v], source, "geometric", 1.0, "massive")
    assume(here.rate[0] > 0.2)
    there = state_invariants(
        *(np.atleast_2d(a) for a in convert(x, v, source, target)),
        target, "geometric", 1.0, "massive",
    )  # fmt: skip
    # an ulp of v, and of 1 in dT'/dT, moves v^2/2 and v.p by v ulps of v: all are of order 1/r
    rounding = 64 * 2.0**-52 / here.rate[0] ** 3
    scale = here.scale[0]
    if "eddington-finkelstein" in (source, target):
        # there dr/dT stands in q by itself: its last place counts in full
        scale = max(scale, np.linalg.norm(v))

    assert abs(there.energy_minus_one[0] - here.energy_minus_one[0]) <= rounding * scale
    assert np.linalg.norm(there.angular_momentum - here.angular_momentum) <= (
        rounding * r * np.linalg.norm(v)
    )


def test_states_outside_a_chart_have_no_constants():
    """At and behind the horizon of static charts, faster than light, and at r = 0: NaN."""
    for name, edge in (("areal", 2.0), ("isotropic", 0.5), ("harmonic", 1.0)):
        x = [[0.6 * edge * s, 0.8 * edge * s, 0.0] for s in (0.4, 1.0, 8.0)]
        for particle in ("massive", "light"):
            found = state_invariants(x, np.zeros((3, 3)), name, "geometric", 1.0, particle)
            value = found.rate if particle == "massive" else found.null
            assert np.array_equal(np.isnan(value), [True, True, False])
    for name in CHARTS:
        found = state_invariants([[9.0, 0, 0]], [[0, 1.2, 0]], name, "geometric", 1.0, "massive")
        assert np.isnan(found.energy[0])
        found = state_invariants([[0.0, 0, 0]], [[0, 0.1, 0]], name, "geometric", 1.0, "massive")
        assert np.isnan(found.energy[0])


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("polar", "SI", 1.0, "massive"), "chart is 'polar'"),
        (("areal", "imperial", 1.0, "massive"), "system is 'imperial'"),
        (("areal", "SI", -1.0, "massive"), "gm is -1.0"),
        (("areal", "SI", float("nan"), "massive"), "gm is nan"),
        (("areal", "SI", 1.0, "photon"), "particle is 'photon'"),
    ],
)
def test_unknown_words_are_refused(words, message):
    """By name and with what is allowed."""
    with pytest.raises(ValueError, match=message):
        state_invariants([[9.0, 0, 0]], [[0, 0.1, 0]], *words)
