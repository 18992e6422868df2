"""Charts: round trips, times by quadrature, what each refuses (hypothesis and mpmath)."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from truefall.reference.charts import (
    CHARTS,
    INGOING,
    areal_radius,
    chart_radius,
    convert,
    radius_slope,
    time_offset,
)

chart = st.sampled_from(CHARTS)
#: Areal radii from just outside the horizon to weak fields.
radius = st.floats(-6, 12).map(lambda e: 2.0 + 10.0**e)
angle = st.floats(0.0, 6.2)
speed = st.floats(-0.4, 0.4)


def placed(name, r, a, b):
    rho = float(chart_radius(name, r))
    return rho * np.array([np.cos(a) * np.cos(b), np.sin(a) * np.cos(b), np.sin(b)])


@given(source=chart, target=chart, r=radius, a=angle, b=angle, vx=speed, vy=speed, vz=speed)
def test_there_and_back_gives_the_same_point_and_velocity(source, target, r, a, b, vx, vy, vz):
    """To a few ulp of the vectors, in every pair of charts, near the horizon and far out."""
    x = placed(source, r, a, b)
    # a chart velocity that any chart can hold: light is slow near the horizon
    v = np.array([vx, vy, vz]) * (1 - 2 / r)
    there, moved = convert(x, v, source, target)
    back, again = convert(there, moved, target, source)
    # close to the horizon rho loses what r - 2 lost: the condition of the map, not an error
    loss = 1 + 1e-2 / np.sqrt(r - 2) if "isotropic" in (source, target) else 1.0
    size = np.linalg.norm(x)

    assert np.linalg.norm(back - x) <= 1e-14 * loss * size
    worst = 1e-13 * loss * (1 + 2 / (r - 2))
    assert np.linalg.norm(again - v) <= worst * (np.linalg.norm(v) + 1e-3 * (1 - 2 / r))


@given(name=chart, r=radius)
def test_the_radius_maps_invert_each_other(name, r):
    """r(rho(r)) = r; the isotropic branch is the outer one."""
    rho = chart_radius(name, r)

    assert areal_radius(name, rho) == pytest.approx(r, rel=4e-16)
    assert name != "isotropic" or rho >= 0.5


@pytest.mark.parametrize("name", INGOING)
@pytest.mark.parametrize(("low", "high"), [(2.5, 3.0), (3.0, 50.0), (1e4, 1e5)])
def test_time_offsets_are_the_integral_of_g(name, low, high):
    """dT = dt + g dr with the slope of each chart, by quadrature at 30 digits."""
    slopes = {
        "kerr-schild": lambda r: 2 / (r - 2),
        "painleve-gullstrand": lambda r: mpmath.sqrt(2 / r) / (1 - 2 / r),
        "eddington-finkelstein": lambda r: 1 / (1 - 2 / r),
    }
    with mpmath.workdps(30):
        expected = mpmath.quad(slopes[name], [low, high])
    offset = time_offset("areal", name, [low, high])

    assert offset[1] - offset[0] == pytest.approx(float(expected), rel=1e-10)
    back = time_offset(name, "harmonic", [low, high])
    assert np.array_equal(back, -offset)


@pytest.mark.parametrize("r", [0.5, 2.0, 2.0 + 1e-9, 7.0])
@pytest.mark.parametrize("source", INGOING)
@pytest.mark.parametrize("target", INGOING)
def test_ingoing_charts_convert_at_and_inside_the_horizon(source, target, r):
    """Nothing diverges between them at r = 2; the offset's slope is the difference of the g."""
    x, v = np.array([r, 0.0, 0.0]), np.array([-0.6, 0.05, 0.0])
    there, moved = convert(x, v, source, target)
    back, again = convert(there, moved, target, source)

    assert np.all(np.isfinite(moved))
    assert np.allclose(back, x, rtol=1e-15)
    assert np.allclose(again, v, rtol=1e-14)
    h = 1e-4 * r
    slope = np.diff(time_offset(source, target, [r - h, r + h]))[0] / (2 * h)
    pace = 1 + slope * v[0]
    assert moved[0] == pytest.approx(v[0] / pace, rel=1e-6)


def test_points_a_chart_does_not_cover_are_refused():
    """At and inside the horizon for the static charts, and unknown names."""
    with pytest.raises(ValueError, match="harmonic does not cover"):
        convert([1.5, 0, 0], None, "kerr-schild", "harmonic")
    with pytest.raises(ValueError, match="isotropic does not cover"):
        convert([0.5, 0, 0], None, "isotropic", "areal")
    with pytest.raises(ValueError, match="share no points"):
        time_offset("areal", "kerr-schild", 2.0)
    with pytest.raises(ValueError, match="allowed are"):
        areal_radius("polar", 3.0)
    with pytest.raises(ValueError, match="three components"):
        convert([1.0, 2.0], None, "areal", "areal")


def test_the_horizon_lies_at_areal_two_in_every_chart():
    """r_s = 2GM/c^2 (common practice): chart radius 2, 1/2, 1, 2, 2, 2."""
    expected = {"isotropic": 0.5, "harmonic": 1.0}
    for name in CHARTS:
        assert chart_radius(name, 2.0) == expected.get(name, 2.0)


@given(r=radius)
def test_the_isotropic_slope_is_the_derivative(r):
    """dr/drho against a difference quotient at 40 digits."""
    with mpmath.workdps(40):
        rho = mpmath.mpf(float(chart_radius("isotropic", r)))
        h = mpmath.mpf(10) ** -15 * rho
        area = lambda x: x * (1 + 1 / (2 * x)) ** 2  # noqa: E731 - the definition, nothing more
        expected = (area(rho + h) - area(rho - h)) / (2 * h)

    assert radius_slope("isotropic", float(rho)) == pytest.approx(float(expected), rel=1e-14)


def test_si_units_scale():
    """An Earth satellite: the harmonic radius is GM/c^2 = 4.435 mm smaller (recomputed)."""
    x = np.array([7.2e6, 0.0, 3e5])
    moved, _ = convert(x, None, "areal", "harmonic", gm=3.986004418e14, c=299792458.0)

    assert np.linalg.norm(x) - np.linalg.norm(moved) == pytest.approx(4.435028e-3, rel=1e-6)
