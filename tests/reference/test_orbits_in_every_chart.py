"""One orbit, told in two charts: the same constants, class, states and times (hypothesis).

Starts whose images are exact float64 numbers are held to 30 digits with the table of charts
alone; random starts to what the rounding of the converted start leaves.
"""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from truefall.reference import Orbit, StartError
from truefall.reference.charts import CHARTS, INGOING, areal_radius, convert, time_offset

EXACT = [
    # the classes: from E and L by hand, against the barrier (L^2 < 12: none; E < 1 or > 1)
    # r = 8: sqrt(2/r) = 1/2 and f = 3/4; the first orbit winds onto r = 4 for ever
    ("areal", 8, (-3 / 16, 3 / 8, 0), "eddington-finkelstein", 8, (-1 / 4, 1 / 2, 0), "asymptotic"),
    ("areal", 8, (-3 / 16, 3 / 8, 0), "harmonic", 7, (-3 / 16, 21 / 64, 0), "asymptotic"),
    ("areal", 8, (0, 3 / 8, 1 / 16), "kerr-schild", 8, (0, 3 / 8, 1 / 16), "bound"),
    ("areal", 8, (0, 3 / 8, 1 / 16), "painleve-gullstrand", 8, (0, 3 / 8, 1 / 16), "bound"),
    ("kerr-schild", 8, (-1 / 2, 1 / 4, 0), "eddington-finkelstein", 8, (-1, 1 / 2, 0), "capture"),
    ("painleve-gullstrand", 8, (-3 / 8, 0, 3 / 8), "eddington-finkelstein", 8, (-0.5, 0, 0.5),
     "capture"),
    # rho = 8: r = 289/32, dr/drho = 255/256, r/rho = 289/256
    ("isotropic", 8, (1 / 16, 5 / 16, 0), "areal", 289 / 32, (255 / 4096, 1445 / 4096, 0), "bound"),
    # at the horizon, dT_ef = dT_pg + dr/2, and below it, dT_ef = dT_ks + dr
    ("painleve-gullstrand", 2, (-1, 1 / 4, 0), "eddington-finkelstein", 2, (-2, 1 / 2, 0),
     "capture"),
    ("kerr-schild", 1.5, (-1 / 2, 1 / 8, 0), "eddington-finkelstein", 1.5, (-1, 1 / 4, 0),
     "plunge"),
]  # fmt: skip


def exactly(high, low):
    return [mpmath.mpf(float(a)) + mpmath.mpf(float(b)) for a, b in zip(high, low, strict=True)]


def areal_of(name, rho):
    return {"isotropic": lambda: rho * (1 + 1 / (2 * rho)) ** 2, "harmonic": lambda: rho + 1}.get(
        name, lambda: rho
    )()


def time_of(name, r):
    """``T - t`` of the table of charts."""
    h = r / 2
    if name == "painleve-gullstrand":
        root = mpmath.sqrt(h)
        return 4 * root + 2 * mpmath.log(abs((root - 1) / (root + 1)))
    if name not in INGOING:
        return mpmath.mpf(0)
    return 2 * mpmath.log(abs(h - 1)) + (r if name == "eddington-finkelstein" else 0)


@pytest.mark.parametrize(("one", "x", "v", "two", "y", "w", "kind"), EXACT)
def test_exact_images_are_one_orbit_to_thirty_digits(one, x, v, two, y, w, kind):
    """Constants, class, radii, directions and chart times at the same proper times."""
    here = Orbit(chart=one, position=(x, 0, 0), velocity=v, clock="proper")
    there = Orbit(chart=two, position=(y, 0, 0), velocity=w, clock="proper")
    assert here.orbit_class == there.orbit_class == kind
    for a, b in (
        (here.energy, there.energy),
        (here.energy_minus_one, there.energy_minus_one),
        (here.angular_momentum, there.angular_momentum),
    ):
        assert a.value == b.value
        assert abs(a.low - b.low) <= 2.0**-104 * abs(a.value)
    times = np.array([-1.5, 0.125, 0.75, 3.0])
    times = times[here.reachable(times) & there.reachable(times)]
    assert times.size >= 2
    first, second = here.at(times), there.at(times)
    with mpmath.workdps(50):
        start = time_of(two, mpmath.mpf(areal_of(two, mpmath.mpf(y)))) if x != 2 else None
        for k in range(times.size):
            p = exactly(first.position[k], first.position_low[k])
            q = exactly(second.position[k], second.position_low[k])
            rho, sigma = (mpmath.sqrt(mpmath.fdot(a, a)) for a in (p, q))
            r = areal_of(one, rho)
            assert abs(r - areal_of(two, sigma)) < mpmath.mpf(10) ** -29 * r
            for a, b in zip(p, q, strict=True):
                assert abs(a / rho - b / sigma) < mpmath.mpf(10) ** -29
            if start is None:  # each T is infinite there, only their difference is not
                continue
            (passed,) = exactly([first.coordinate_time[k]], [first.coordinate_time_low[k]])
            (other,) = exactly([second.coordinate_time[k]], [second.coordinate_time_low[k]])
            offset = time_of(two, r) - start - time_of(one, r) + time_of(one, areal_of(two, y))
            assert abs(other - passed - offset) < mpmath.mpf(10) ** -28 * (1 + abs(other))


starts = st.tuples(
    st.sampled_from(CHARTS), st.floats(0.45, 2.5).map(lambda e: 1.2 + 10.0**e),
    st.integers(0, 2**32 - 1),
)  # fmt: skip


def told_twice(start, target, particle, clock):
    """The same orbit in the chart of the start and in another, by float64 conversion."""
    name, r, seed = start
    draw = np.random.default_rng(seed).uniform(-1, 1, (2, 3))
    x = draw[0] / np.linalg.norm(draw[0]) * r
    v = draw[1] * np.sqrt(1 / r)
    # ingoing charts forget the way in for radial light; nothing here is that radial
    try:
        here = Orbit(chart=name, position=x, velocity=v, particle=particle, clock=clock)
        y, w = convert(here.position, here.velocity_used, name, target)
        there = Orbit(chart=target, position=y, velocity=w, particle=particle, clock=clock)
    except StartError:
        assume(False)
    return here, there


def close(here, there, first, second):
    """States in the two charts, where both are well outside the horizon."""
    moved, speed = convert(first.position, first.velocity, here.chart, there.chart)
    size = np.linalg.norm(moved, axis=1, keepdims=True)
    assert np.all(np.linalg.norm(second.position - moved, axis=1, keepdims=True) <= 1e-11 * size)
    fast = np.linalg.norm(speed, axis=1, keepdims=True)
    assert np.all(np.linalg.norm(second.velocity - speed, axis=1, keepdims=True) <= 1e-10 * fast)


@settings(max_examples=30)
@given(start=starts, target=st.sampled_from(CHARTS))
def test_at_the_same_proper_time_every_chart_shows_the_same_event(start, target):
    """Massive particles; the chart times differ by the difference of their offsets."""
    here, there = told_twice(start, target, "massive", "proper")
    times = np.array([-4.0, 1.0, 6.0])
    times = times[here.reachable(times) & there.reachable(times)]
    assume(times.size)
    first, second = here.at(times), there.at(times)
    outside = (first.radius > 2.2) & (first.radius < 1e3)
    assume(outside.all())
    close(here, there, first, second)
    radii = np.append(areal_radius(here.chart, np.linalg.norm(here.position)), first.radius)
    offset = time_offset(here.chart, there.chart, radii)
    error = second.coordinate_time - first.coordinate_time - (offset[1:] - offset[0])

    assert np.all(np.abs(error) <= 1e-10 * (1 + np.abs(offset[1:])))


@settings(max_examples=30)
@given(start=starts, target=st.sampled_from(CHARTS))
def test_light_passes_the_same_events_in_every_chart(start, target):
    """At chart times that differ by the offsets; the affine parameter (E = 1) is common."""
    here, there = told_twice(start, target, "light", "coordinate")
    times = np.array([-3.0, 0.5, 5.0])
    times = times[here.reachable(times)]
    assume(times.size)
    first = here.at(times)
    assume(((first.radius > 2.2) & (first.radius < 1e3)).all())
    radii = np.append(areal_radius(here.chart, np.linalg.norm(here.position)), first.radius)
    offset = time_offset(here.chart, there.chart, radii)
    stamps = times + (offset[1:] - offset[0])
    assume(there.reachable(stamps).all())
    second = there.at(stamps)
    close(here, there, first, second)

    assert np.allclose(second.affine, first.affine, rtol=1e-11, atol=1e-11)


@settings(max_examples=15)
@given(target=st.sampled_from(INGOING), source=st.sampled_from(INGOING),
       r=st.floats(1.0, 2.6), seed=st.integers(0, 2**32 - 1))  # fmt: skip
def test_falls_below_the_horizon_are_one_fall_in_the_three_ingoing_charts(target, source, r, seed):
    """From starts on both sides of r = 2, at the same proper times."""
    here, there = told_twice((source, r, seed), target, "massive", "proper")
    times = np.array([-0.1, 0.2, 0.6])
    times = times[here.reachable(times) & there.reachable(times)]
    assume(times.size)
    first, second = here.at(times), there.at(times)
    assume((first.radius > 0.4).all())
    close(here, there, first, second)
    radii = np.append(r, first.radius)
    offset = time_offset(source, target, radii)
    error = second.coordinate_time - first.coordinate_time - (offset[1:] - offset[0])

    assert np.all(np.abs(error) <= 1e-11)
