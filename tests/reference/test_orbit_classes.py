"""Classes, symmetries and units of exact orbits (hypothesis), the classes from mpmath's roots."""

from __future__ import annotations

import mpmath
import numpy as np
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from truefall.reference import Orbit, StartError
from truefall.reference.charts import CHARTS, INGOING, convert
from truefall.reference.invariants import state_invariants


def component(low, high):
    """Zero, or no smaller than 1e-9: what a program would write, not a subnormal number."""
    return st.floats(low, high).map(lambda v: 0.0 if abs(v) < 1e-9 else v)


starts = st.tuples(
    st.sampled_from(CHARTS),
    st.floats(0.2, 2.5).map(lambda e: 1.2 + 10.0**e),
    component(-0.7, 0.7),
    component(-1.2, 1.2),
    component(-0.3, 0.3),
)


def orbit_of(start, **more):
    """An orbit from (chart, radius, radial, across, out of plane), or None if there is none."""
    name, r, radial, across, out = start
    scale = np.sqrt(2 / (r + 2))
    try:
        return Orbit(
            chart=name,
            position=(r, 0.0, 0.0),
            velocity=(radial * scale, across * scale, out * scale),
            **more,
        )
    except StartError:
        return None


def expected_class(orbit, light):
    """From E, L, r and the sense of motion, by the real roots of the cubic at 60 digits."""
    with mpmath.workdps(60):
        energy = mpmath.mpf(orbit.energy.value) + mpmath.mpf(orbit.energy.low)
        momentum = mpmath.mpf(orbit.angular_momentum.value) + mpmath.mpf(orbit.angular_momentum.low)
        mu = 0 if light else 1
        if momentum == 0:
            return "radial"
        if energy <= 0:
            return "plunge"
        u0 = 1 / mpmath.mpf(float(orbit.at([0.0]).radius[0]))
        roots = mpmath.polyroots(
            [2 * momentum**2, -(momentum**2), 2 * mu, energy**2 - mu], maxsteps=400, extraprec=400,
            asc=False,
        )  # fmt: skip
        real = sorted(mpmath.re(z) for z in roots if abs(mpmath.im(z)) < mpmath.mpf(10) ** -25)
        near = min((abs(z - u0) for z in real), default=1)
        assume(near > mpmath.mpf(10) ** -10)
        lower = [z for z in real if 0 < z < u0]
        upper = [z for z in real if z > u0]
    if lower and upper:
        return "bound"
    if lower:
        return "trapped" if light else "plunge"
    return "flyby" if upper else "capture"


@settings(max_examples=80)
@given(start=starts, light=st.booleans())
def test_the_class_is_that_of_the_cubics_roots(start, light):
    """Every chart, particles and light."""
    orbit = orbit_of(start, particle="light" if light else "massive")
    assume(orbit is not None)

    assert expected_class(orbit, light) == orbit.orbit_class


@settings(max_examples=30)
@given(start=starts, share=st.floats(-0.9, 0.9))
def test_energy_and_momentum_are_kept_along_the_orbit(start, share):
    """Computed from the rounded states by the float64 formulas, which know nothing of u(s)."""
    orbit = orbit_of(start)
    assume(orbit is not None)
    span = 60.0
    times = np.array([0.2, 0.6, 1.0]) * share * span
    times = times[orbit.reachable(times)]
    assume(times.size)
    states = orbit.at(times)
    deep = states.radius > (0.3 if orbit.chart in INGOING else 2.01)
    found = state_invariants(
        states.position, states.velocity, orbit.chart, "geometric", 1.0, "massive"
    )
    good = deep & (found.rate > 1e-2)
    scale = 1e-13 / found.rate**2 * (1 + 10 / states.radius)
    error = np.abs(found.energy_minus_one - orbit.energy_minus_one.value)

    assert np.all(error[good] <= (scale * np.maximum(1.0, abs(orbit.energy.value)))[good])
    spin = np.linalg.norm(found.angular_momentum, axis=1)
    assert np.all(
        np.abs(spin - orbit.angular_momentum.value)[good] <= (scale * 30 * (1 + spin))[good]
    )


@settings(max_examples=20)
@given(start=starts, target=st.sampled_from(CHARTS[:3]))
def test_static_charts_show_the_same_orbit(start, target):
    """A start converted between charts of the same time follows the same path (to its rounding)."""
    name = start[0]
    assume(name not in INGOING)
    orbit = orbit_of(start)
    assume(orbit is not None)
    x, v = convert(orbit.position, orbit.velocity, name, target)
    other = Orbit(chart=target, position=x, velocity=v)
    times = np.array([3.0, -7.0])
    here, there = orbit.at(times), other.at(times)
    moved, speed = convert(here.position, here.velocity, name, target)

    assert np.allclose(moved, there.position, rtol=1e-9, atol=1e-9)
    assert np.allclose(speed, there.velocity, rtol=1e-7, atol=1e-9)


@settings(max_examples=20)
@given(start=starts, time=st.floats(-40, 40))
def test_turning_the_axes_turns_the_states(start, time):
    """x, y, z permuted cyclically: every number moves with its axis, to the last bit."""
    orbit = orbit_of(start)
    assume(orbit is not None and orbit.reachable([time]).all())
    turned = Orbit(
        chart=orbit.chart, position=np.roll(orbit.position, 1), velocity=np.roll(orbit.velocity, 1)
    )

    assert np.array_equal(np.roll(orbit.at([time]).position, 1, axis=1), turned.at([time]).position)


@settings(max_examples=15)
@given(start=starts, time=st.floats(0.5, 20))
def test_metres_and_kilometres_show_the_same_orbit(start, time):
    """SI and astronomical units with GM/c^2 a power of two apart from geometric ones."""
    orbit = orbit_of(start)
    assume(orbit is not None and orbit.reachable([time]).all())
    c = 299792458.0
    gm = 2.0**20 * c**2  # rounded, like any other
    length = gm / c**2
    other = Orbit(
        system="SI", gm=gm, chart=orbit.chart, position=np.array(orbit.position) * length,
        velocity=np.array(orbit.velocity) * c,
    )  # fmt: skip
    stamp = time * length / c
    assume(other.reachable([stamp]).all())
    here, there = orbit.at([time]), other.at([stamp])

    assert np.allclose(there.position / length, here.position, rtol=1e-7, atol=1e-9)


@settings(max_examples=15)
@given(start=starts, time=st.floats(1, 50))
def test_static_orbits_run_backwards_alike(start, time):
    """Reversed velocity and reversed time: the mirror of the past is the future."""
    assume(start[0] not in INGOING)
    orbit = orbit_of(start)
    assume(orbit is not None)
    mirrored = Orbit(
        chart=orbit.chart, position=orbit.position, velocity=[-v for v in orbit.velocity]
    )

    assert np.array_equal(orbit.at([-time]).position, mirrored.at([time]).position)
    assert np.array_equal(orbit.at([-time]).velocity, -mirrored.at([time]).velocity)
