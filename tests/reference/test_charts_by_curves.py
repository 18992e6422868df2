"""Charts against the definitions alone: a curve carried over and differentiated at 50 digits.

The expected velocity is dX/dT of the curve x + v s with the radius and the time that the table
of charts states; no slope g(r) and no dr/drho is written down here.
"""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from truefall.reference.charts import (
    CHARTS,
    INGOING,
    chart_radius,
    convert,
    horizon_gap,
    time_offset,
)

EPS = 2.0**-52
chart = st.sampled_from(CHARTS)
seeds = st.integers(0, 2**32 - 1)


def areal(name, rho):
    if name == "isotropic":
        return rho * (1 + 1 / (2 * rho)) ** 2
    return rho + 1 if name == "harmonic" else rho


def own_radius(name, r):
    if name == "isotropic":
        return (r - 1 + mpmath.sqrt(r * (r - 2))) / 2
    return r - 1 if name == "harmonic" else r


def own_time(name, r):
    """``T - t`` of a chart; the logarithms' real parts, so that r < 2 is served too."""
    h = r / 2
    return {
        "kerr-schild": lambda: 2 * mpmath.log(abs(h - 1)),
        "painleve-gullstrand": lambda: (
            2 * mpmath.sqrt(2 * r)
            + 2 * mpmath.log(abs((mpmath.sqrt(h) - 1) / (mpmath.sqrt(h) + 1)))
        ),
        "eddington-finkelstein": lambda: r + 2 * mpmath.log(abs(h - 1)),
    }.get(name, lambda: mpmath.mpf(0))()


def carried(source, target, x, v):
    """Position and velocity in the target chart, from the definitions."""
    x, v = [mpmath.mpf(float(c)) for c in x], [mpmath.mpf(float(c)) for c in v]

    def event(s):
        y = [a + b * s for a, b in zip(x, v, strict=True)]
        rho = mpmath.sqrt(mpmath.fdot(y, y))
        r = areal(source, rho)
        stretch = own_radius(target, r) / rho
        return [s - own_time(source, r) + own_time(target, r), *(c * stretch for c in y)]

    rho = mpmath.sqrt(mpmath.fdot(x, x))
    # far below the distance to the horizon; the difference quotient's error is its square
    h = mpmath.mpf(10) ** -25 * min(rho, abs(areal(source, rho) - 2))
    ahead, behind, here = event(h), event(-h), event(mpmath.mpf(0))
    pace, *speed = [(a - b) / (2 * h) for a, b in zip(ahead, behind, strict=True)]
    return here[1:], [c / pace for c in speed], pace


def generic(seed):
    """Two vectors in the cube, with digits that fill the word."""
    draw = np.random.default_rng(seed).uniform(-1, 1, (2, 3))
    return draw[0], draw[1]


def compared(source, target, x, v, allowed_x, allowed_v):
    with mpmath.workdps(90):
        true_x, true_v, pace = carried(source, target, x, v)
        assume(pace > mpmath.mpf("0.02"))
        true_x, true_v = np.array(true_x, dtype=float), np.array(true_v, dtype=float)
    found_x, found_v = convert(x, v, source, target)

    assert np.linalg.norm(found_x - true_x) <= allowed_x * np.linalg.norm(true_x)
    assert np.linalg.norm(found_v - true_v) <= allowed_v * np.linalg.norm(true_v) / pace


@settings(max_examples=400)
@given(source=chart, target=chart, size=st.floats(-7, 0) | st.floats(0, 12), seed=seeds)
def test_points_and_velocities_are_those_of_the_carried_curve(source, target, size, seed):
    """Exact to rounding far out; near the horizon to the rounding of |x|, over r - 2."""
    edge = {"isotropic": 0.5, "harmonic": 1.0}.get(source, 2.0)
    # 1.2345: else r, the float64 that rho was made from, would be exact by luck
    rho = edge + 1.2345 * (float(chart_radius(source, 2.0 + 10.0**size)) - edge)
    x, v = generic(seed)
    x = rho * x / np.linalg.norm(x)
    beyond = np.linalg.norm(x) - edge
    assume(beyond > 4 * EPS)
    gap = float(horizon_gap(source, np.linalg.norm(x)))
    # below the chart's light speed, which goes to 0 with r - 2 (isotropic: with its root)
    f = gap / (gap + 2)
    v = 0.45 * v * (np.sqrt(f) / 4 if source == "isotropic" else f)
    # a rounding of |x| moves the distance to the horizon by this much of itself
    condition = edge / beyond
    # an isotropic radius follows sqrt(r - 2), so a rounding of r moves it by this much
    steep = 1 / np.sqrt(gap) if target == "isotropic" else 0.0

    compared(source, target, x, v, (4 + 2 * steep) * EPS, (8 + 2 * condition) * EPS)


@settings(max_examples=200)
@given(
    source=st.sampled_from(INGOING),
    target=st.sampled_from(INGOING),
    size=st.floats(-9, 0.5),
    seed=seeds,
)
def test_below_the_horizon_ingoing_charts_agree_with_the_curve(source, target, size, seed):
    """Down to r = 1e-9, with no loss at r = 2."""
    x, v = generic(seed)
    x = 10.0**size * x / np.linalg.norm(x)
    assume(abs(np.linalg.norm(x) - 2) > 1e-12)
    compared(source, target, x, 0.5 * v, 4 * EPS, 16 * EPS)


@pytest.mark.parametrize(
    ("source", "target", "x", "v", "there", "moved"),
    [
        # r = 8: sqrt(2/r) = 1/2, f = 3/4, so the paces are exact binary fractions
        ("areal", "eddington-finkelstein", 8, (-3 / 16, 3 / 8), 8, (-1 / 4, 1 / 2)),
        ("areal", "harmonic", 8, (-3 / 16, 3 / 8), 7, (-3 / 16, 21 / 64)),
        ("kerr-schild", "eddington-finkelstein", 8, (-1 / 2, 1 / 4), 8, (-1, 1 / 2)),
        ("painleve-gullstrand", "eddington-finkelstein", 8, (-3 / 8, 3 / 8), 8, (-1 / 2, 1 / 2)),
        # rho = 8: r = 289/32, dr/drho = 255/256, r/rho = 289/256
        ("isotropic", "areal", 8, (1 / 8, 1 / 4), 289 / 32, (255 / 2048, 289 / 1024)),
        # at the horizon itself dT_ks = dT_pg - dr/2 and dT_ef = dT_ks + dr
        ("painleve-gullstrand", "kerr-schild", 2, (-1, 1 / 2), 2, (-2 / 3, 1 / 3)),
        ("kerr-schild", "eddington-finkelstein", 2, (-1 / 2, 1 / 4), 2, (-1, 1 / 2)),
    ],
)
def test_states_worked_out_by_hand(source, target, x, v, there, moved):
    """States with exact images, there and back."""
    for a, b, start, end in (
        (source, target, (x, v), (there, moved)),
        (target, source, (there, moved), (x, v)),
    ):
        found_x, found_v = convert([start[0], 0, 0], [*start[1], 0], a, b)

        assert np.allclose(found_x, [end[0], 0, 0], rtol=2 * EPS, atol=0)
        assert np.allclose(found_v, [*end[1], 0], rtol=4 * EPS, atol=0)


@pytest.mark.parametrize(
    ("arguments", "keys", "words"),
    [
        (([0, 0, 0], [0, 0, 0], "kerr-schild", "painleve-gullstrand"), {}, "r = 0"),
        (([np.nan, 0, 9], None, "areal", "harmonic"), {}, "position must be finite"),
        (([9, 0, 0], [np.inf, 0, 0], "areal", "harmonic"), {}, "velocity must be finite"),
        (([9, 0, 0], [0, 0], "areal", "harmonic"), {}, "shape of position"),
        (([9, 0, 0], None, "areal", "harmonic"), {"gm": -1.0}, "gm and c must be positive"),
        (([9, 0, 0], None, "areal", "harmonic"), {"c": 0.0}, "gm and c must be positive"),
        # ingoing radial light: f = 3/5 at r = 5
        (([5, 0, 0], [-0.6, 0, 0], "areal", "eddington-finkelstein"), {}, "does not advance"),
        (([5, 0, 0], [-1, 0, 0], "kerr-schild", "eddington-finkelstein"), {}, "does not advance"),
        (([5, 0, 0], [-0.9, 0, 0], "areal", "eddington-finkelstein"), {}, "does not advance"),
    ],
)
def test_what_cannot_be_converted_is_refused(arguments, keys, words):
    """One sentence, and no NaN or warning in place of a refusal."""
    with pytest.raises(ValueError, match=words):
        convert(*arguments, **keys)


def test_times_at_radii_that_do_not_exist_are_refused():
    """Nought, negative radii and NaN."""
    for r in (0.0, -1.0, np.nan):
        with pytest.raises(ValueError, match="greater than 0"):
            time_offset("kerr-schild", "painleve-gullstrand", [3.0, r])


@given(source=chart, target=chart, low=st.floats(-3, 6), high=st.floats(-3, 6))
def test_time_offsets_are_those_of_the_table(source, target, low, high):
    """Differences between two radii, from the stated T(r) at 50 digits."""
    r = np.array([2 + 10.0**low, 2 + 10.0**high])
    with mpmath.workdps(50):
        a, b = (mpmath.mpf(float(c)) for c in r)
        expected = own_time(target, b) - own_time(source, b)
        expected -= own_time(target, a) - own_time(source, a)
        expected = float(expected)
    found = time_offset(source, target, r)

    assert abs(found[1] - found[0] - expected) <= 8 * EPS * (max(r) + 40)
