"""Splittings, extended phase space, time-transformed leapfrogs: order, structure, truth."""

from __future__ import annotations

import types
from itertools import pairwise

import numpy as np
import pytest
from numba import njit

from truefall.integrators import EQUATIONS, METHODS, propagate
from truefall.integrators.arithmetic import compensated_add
from truefall.integrators.equations.spherical import spherical_hamiltonian
from truefall.integrators.methods import Problem
from truefall.integrators.symplectic import extended, schwarzschild
from truefall.integrators.symplectic.extended import extended_step
from truefall.integrators.symplectic.index_entries import methods
from truefall.integrators.symplectic.time_transformed import cartesian_step, mino_step
from truefall.reference import Orbit
from truefall.reference.charts import convert

#: Window of a measured order around the nominal one.
ORDER_WINDOW = 0.2
NAMES = [m.name for m in methods()]
PAIRS = [(m.name, equations) for m in methods() for equations in m.equations]
#: Longest step that is tried; 12 elsewhere.
STEP = {"areal-cartesian": 1.0, "mino": 0.2}


def start_in(chart):
    """The same physical start in each chart: inclined, off the axes, bound."""
    return convert([12.0, 1.0, 2.0], [0.0, 0.27, 0.04], "areal", chart)


@pytest.mark.parametrize(("name", "equations"), PAIRS)
def test_measured_order_is_the_nominal_one(name, equations, monkeypatch):
    """Errors against certified states at time stamps off the steps, the shortest steps
    at which truncation dominates fitted.

    Extended phase space: bound loosely, which holds for so short a run; the beat of a stiff
    binding with the step makes single errors jump by factors of two.
    """
    monkeypatch.setattr(extended, "BINDING", (6.0, 6.0))
    chart = EQUATIONS[equations].chart
    x, v = start_in(chart)
    loose = name.startswith("extended")
    times = np.linspace(0.0, 60.3 if loose else 200.3, 9)
    exact = Orbit(chart=chart, position=x, velocity=v).at(times)
    longest, rounding = (3.0, 5e-13) if loose else (STEP.get(equations, 12.0), 2e-12)
    found = []
    for k in range(18):
        step = longest * 2.0 ** (-k / 3)
        run = propagate(equations, x, v, times, method=name, step=step)
        found.append((step, np.linalg.norm(run.position - exact.position)))
    steps, errors = np.array([pair for pair in found if pair[1] > rounding][-6:]).T
    assert len(steps) >= 5
    slope = np.polyfit(np.log(steps), np.log(errors), 1)[0]
    assert slope == pytest.approx(METHODS[name].order, abs=ORDER_WINDOW)


@pytest.mark.parametrize(
    ("name", "equations", "step", "within"),
    [
        ("four-part-kahan-li-8", "areal", 2.0, 1e-11),
        ("three-part-blanes-moan-6", "areal", 0.5, 1e-10),
        ("extended-phase-space-kahan-li-8", "harmonic", 0.5, 1e-10),
        ("time-transformed-kahan-li-8", "areal-cartesian", 0.1, 1e-11),
        ("mino-leapfrog-kahan-li-8", "mino", 0.02, 1e-11),
    ],
)
@pytest.mark.parametrize("particle", ["massive", "light"])
def test_they_follow_the_exact_orbit(name, equations, step, within, particle):
    """Position, velocity and clock of a bound particle and of a ray, forwards and backwards."""
    chart = EQUATIONS[equations].chart
    x, v = start_in(chart)
    if particle == "light":
        v = np.array([-0.5, 0.8, 0.1])  # of light the direction counts
        step *= 0.05
    for end in (60.0, -60.0):
        times = np.linspace(0.0, end, 5)
        exact = Orbit(chart=chart, position=x, velocity=v, particle=particle).at(times)
        run = propagate(equations, x, v, times, method=name, step=step, particle=particle)
        assert run.status == "finished"
        assert np.abs(run.position - exact.position).max() < within
        assert np.abs(run.velocity - exact.velocity).max() < within
        clock = exact.affine if particle == "light" else exact.proper_time
        assert np.abs(run.clock - clock).max() < 10 * within


# the reference problem -------------------------------------------------------------------------


@njit(error_model="numpy")
def _deviations(step, par, code, table, y, h, many, every, out):
    """Largest |H + 1/2| of ``many`` steps; its signed value and r after every few."""
    carry, change, memory = np.zeros(8), np.zeros(8), np.zeros((1, 1))
    worst = 0.0
    for k in range(many):
        step(8, 0, par, code, table, 1.0, y, h, memory, change)
        compensated_add(y, carry, change)
        off = spherical_hamiltonian(par[0], y) + 0.5
        worst = max(worst, abs(off))
        if k % every == 0:
            out[k // every, 0], out[k // every, 1] = off, y[0]
    return worst


def _reference_problem(name, h, many=1_000_000, every=10, r=11.0):
    """E = .995, p_phi = 4.6, theta = pi/2, p_r = 0 at r = 11, p_theta from the norm."""
    energy, spin = 0.995, 4.6
    turning = np.sqrt(r * r * (energy**2 / (1 - 2 / r) - 1) - spin**2)
    y = np.array([r, np.pi / 2, 0.0, 0.0, turning, spin, 0.0, 0.0])
    parts = schwarzschild.four_parts(name, Problem(8, 0, 8, 2, False))
    out = np.zeros((many // every, 2))
    par = np.array([energy, 1.0, 0.0])
    worst = _deviations(parts.step, par, parts.code, parts.table, y, h, many, every, out)
    return worst, out


def _drift(off, radius, h):
    """Slope of the mean deviation over whole radial periods, and its uncertainty."""
    inside = radius[1:-1]
    low = np.flatnonzero((inside < radius[:-2]) & (inside <= radius[2:])) + 1
    means = np.array([off[a:b].mean() for a, b in pairwise(low)])
    time = h * low[:-1]
    slopes, covariance = np.polyfit(time, means, 1, cov=True)
    assert len(means) > 30
    return slopes[0], np.sqrt(covariance[0, 0])


@pytest.mark.parametrize(
    ("name", "h", "level"),
    [
        ("strang-2", 1.0, 1.2e-5), ("strang-2", 0.5, 2.95e-6), ("strang-2", 0.25, 7.4e-7),
        ("yoshida-4", 1.0, 1.8e-8), ("yoshida-4", 0.5, 1.12e-9), ("yoshida-4", 0.25, 7.1e-11),
    ],
)  # fmt: skip
def test_levels_of_the_four_part_splitting(name, h, level, record_property):
    """Levels recomputed elsewhere in this order of the parts; no drift over 1e6 steps.

    1.17e-5, 2.92e-6, 7.3e-7 (order 2) and 1.78e-8, 1.11e-9, 7.0e-11 (order 4 of Yoshida).
    """
    worst, out = _reference_problem(name, h)
    slope, uncertainty = _drift(out[:, 0], out[:, 1], 10.0 * h)
    print(f"{name} h={h}: max |H + 1/2| = {worst:.4g}, drift {slope:.2g} +- {uncertainty:.2g}")
    record_property(f"{name} h={h}", worst)
    assert 0.9 * level < worst <= level
    assert abs(slope) < 3.0 * uncertainty


@pytest.mark.parametrize(("name", "level"), [("strang-2", 1.96e-8), ("yoshida-4", 6.45e-13)])
def test_levels_of_the_four_part_splitting_farther_out(name, level):
    """Start at r = 70, h = 1: 1.95e-8 and 6.4e-13, recomputed elsewhere."""
    worst, _ = _reference_problem(name, 1.0, r=70.0)
    assert 0.95 * level < worst <= level


def test_a_method_that_drifts_is_seen_to_drift():
    """The measure of drift is no ornament: a slow decay put into the series is found."""
    _, out = _reference_problem("strang-2", 1.0, 300_000)
    time = np.arange(len(out)) * 10.0
    scale = np.abs(out[:, 0]).max() / time[-1]
    slope, uncertainty = _drift(out[:, 0] - 0.1 * scale * time, out[:, 1], 10.0)
    assert abs(slope) > 3.0 * uncertainty


# structure -------------------------------------------------------------------------------------

_OMEGA = np.block([[np.zeros((3, 3)), np.eye(3)], [-np.eye(3), np.zeros((3, 3))]])


def _interpreted(kernel):
    """The source of a kernel with NumPy's functions, which know complex numbers."""
    source = kernel.py_func
    names = dict(source.__globals__)
    for name in ("sin", "cos", "sqrt"):
        names[name] = getattr(np, name)
    names["atan2"] = lambda z, x: (
        np.arctan2(z.real, x.real)
        + 1j * ((x.real * z.imag - z.real * x.imag) / (x.real**2 + z.real**2))
    )
    if source.__name__ == "splitting_step":
        for name in ("_angular", "_mixed", "_potential", "_free"):
            names[name] = _interpreted(names[name])
    return types.FunctionType(source.__code__, names, source.__name__)


@pytest.mark.parametrize("family", [schwarzschild.four_parts, schwarzschild.three_parts])
@pytest.mark.parametrize("name", ["strang-2", "blanes-moan-6", "kahan-li-8"])
def test_splittings_keep_the_symplectic_form(family, name):
    """J^T Omega J = Omega, the Jacobian by complex steps through the interpreted source."""
    parts = family(name, Problem(8, 0, 8, 2, False))
    step = _interpreted(parts.step)
    y = np.array([9.0, 1.1, 0.3, 0.12, 1.7, 3.1, 0.0, 0.0])
    jacobian = np.zeros((6, 6))
    for j in range(6):
        moved, change = y.astype(complex), np.zeros(8, dtype=complex)
        moved[j] += 1e-30j
        par = np.array([0.96, 1.0, 0.0])
        step(8, 0, par, parts.code, parts.table, 1.0, moved, 2.5, np.zeros((1, 1)), change)
        jacobian[:, j] = (moved + change)[:6].imag / 1e-30
    assert np.abs(jacobian - np.eye(6)).max() > 0.1, "the step does something"
    assert np.abs(jacobian.T @ _OMEGA @ jacobian - _OMEGA).max() < 1e-12


def _jacobian(function, z, size):
    """Central differences of fourth order."""
    columns = []
    for j in range(z.size):
        e = np.zeros(z.size)
        e[j] = size
        a, b = function(z + e) - function(z - e), function(z + 2 * e) - function(z - 2 * e)
        columns.append((8.0 * a - b) / (12.0 * size))
    return np.array(columns).T


@pytest.mark.parametrize("kind", [2, 3, 5, 6, 8])
def test_extended_phase_space_keeps_the_form_of_both_copies(kind):
    """The map of (q, p, x, y) with its scales and omega fixed; differences, hence 1e-9."""
    parts = METHODS["extended-phase-space-suzuki-4"].parts(Problem(kind, 0, 8, 4, False))
    y0 = np.array([8.0, 1.2, 0.7, 0.1, 0.2, 0.3, 0.0, 0.0])
    if kind == 8:
        y0[3:6] = 0.1, 1.2, 3.0
    par = np.array([0.96, 1.0, 12.0])
    kept = np.zeros(parts.memory)
    change = np.zeros(8)
    extended_step(kind, 0, par, parts.code, parts.table, 1.0, y0, 0.5, kept.copy(), change)
    extended_step(kind, 0, par, parts.code, parts.table, 1.0, y0, 0.5, kept, change)
    kept[2] = 0.0

    def both(z):
        y, memory, moved = y0.copy(), kept.copy(), np.zeros(8)
        y[:6] = z[:6]
        memory[2, :6] = z[6:] - z[:6]
        extended_step(kind, 0, par, parts.code, parts.table, 1.0, y, 0.5, memory, moved)
        first = (y + moved)[:6]
        return np.concatenate([first, first + memory[2, :6]])

    z = np.concatenate([y0[:6], y0[:6] * 1.001])
    jacobian = _jacobian(both, z, 2e-4)
    form = np.kron(np.eye(2), _OMEGA)
    # H(q, y) + H(x, p): q pairs with p, x with y
    assert np.abs(jacobian - np.eye(12)).max() > 0.01
    assert np.abs(jacobian.T @ form @ jacobian - form).max() < 1e-9


def test_logarithmic_leapfrog_keeps_the_form_with_time_and_energy():
    """Positions and lambda against velocities and B, which the kernel keeps in its memory."""
    parts = METHODS["time-transformed-blanes-moan-6"].parts(Problem(2, 2, 8, 6, False))
    par = np.array([0.96, 1.0, 12.0])

    def step(z):
        y, change, memory = np.zeros(8), np.zeros(8), np.zeros(parts.memory)
        y[:3], y[7] = z[:3], z[3]
        memory[0], memory[1] = (1.0, z[7], 0.0), z[4:7]
        cartesian_step(2, 2, par, parts.code, parts.table, 1.0, y, 0.7, memory, change)
        return np.concatenate([z[:3] + change[:3], [z[3] + change[7]], memory[1], [z[7]]])

    jacobian = _jacobian(step, np.array([8.0, 1.2, 0.7, 0.0, 0.1, 0.3, 0.1, 0.09]), 2e-4)
    form = np.block([[np.zeros((4, 4)), np.eye(4)], [-np.eye(4), np.zeros((4, 4))]])
    assert np.abs(jacobian - np.eye(8)).max() > 0.1
    assert np.abs(jacobian.T @ form @ jacobian - form).max() < 1e-9


@pytest.mark.parametrize("name", ["strang-2", "blanes-moan-6", "kahan-li-8"])
def test_mino_leapfrog_keeps_areas(name):
    """u and w = du/ds are conjugate: the determinant of their Jacobian is 1."""
    parts = METHODS[f"mino-leapfrog-{name}"].parts(Problem(9, 0, 10, 2, False))
    par = np.array([0.96, 1.0, 14.0])

    def step(z):
        y, change = np.zeros(10), np.zeros(10)
        y[:2] = z
        mino_step(9, 0, par, parts.code, parts.table, 1.0, y, 0.3, np.zeros((1, 1)), change)
        return z + change[:2]

    jacobian = _jacobian(step, np.array([0.1, 0.04]), 1e-4)
    assert np.abs(jacobian - np.eye(2)).max() > 0.1
    assert abs(np.linalg.det(jacobian) - 1.0) < 1e-9


@pytest.mark.parametrize(
    ("name", "equations", "steps"),
    [
        ("four-part-kahan-li-8", "areal", 200),
        ("three-part-blanes-moan-6", "areal", 200),
        ("extended-phase-space-kahan-li-8", "harmonic", 800),
        ("time-transformed-kahan-li-8", "areal-cartesian", 200),
        ("mino-leapfrog-kahan-li-8", "mino", 200),
    ],
)
def test_weak_fields_keep_their_digits(name, equations, steps):
    """GM/(c^2 r) = 6e-10, one revolution: 2e-14 of the radius, the clock to rounding."""
    r = 1.6e9
    rate = r**-1.5
    period = 2 * np.pi / rate
    x, v = np.array([r, 0.1 * r, 0.05 * r]), np.array([0.0, 1.1 * r * rate, 0.1 * r * rate])
    chart = EQUATIONS[equations].chart
    times = np.linspace(0.0, period, 4)
    exact = Orbit(chart=chart, position=x, velocity=v).at(times)
    unit = {"areal-cartesian": 1.0 / r, "mino": 1.0 / r**2}.get(equations, 1.0)
    run = propagate(equations, x, v, times, method=name, step=period / steps * unit)
    assert np.linalg.norm(run.position - exact.position, axis=1).max() < 2e-14 * r
    assert np.abs(run.clock - exact.proper_time).max() < 2e-15 * period


@pytest.mark.parametrize("name", NAMES)
def test_time_runs_back_to_the_start(name):
    """There and back in the same steps: rounding only (method of its own step, fixed)."""
    equations = METHODS[name].equations[0]
    chart = EQUATIONS[equations].chart
    x, v = start_in(chart)
    from truefall.integrators.starts import begin

    states, _, pars, _ = begin(EQUATIONS[equations], np.array([x]), np.array([v]), False)
    y, par = states[0].copy(), pars[0].copy()
    kind, size = EQUATIONS[equations].kind, EQUATIONS[equations].size
    parts = METHODS[name].parts(Problem(kind, 0, size, 2, False))
    memory, change = np.zeros(parts.memory), np.zeros(size)
    h = 0.5 * STEP.get(equations, 4.0)
    for sign in (1.0, -1.0):
        for _ in range(20):
            parts.step(kind, 0, par, parts.code, parts.table, 1.0, y, sign * h, memory, change)
            y += change
        if sign > 0.0:
            assert np.abs(y - states[0]).max() > 0.1
    assert np.abs(y - states[0]).max() < 1e-11


def test_logarithmic_leapfrog_follows_an_exact_conic():
    """Without the relativistic term the orbit is Kepler's ellipse at any step; only time is off."""
    parts = METHODS["time-transformed-strang-2"].parts(Problem(2, 2, 8, 2, False))
    e, a = 0.6, 400.0
    r, speed = a * (1 - e), np.sqrt((1 + e) / (a * (1 - e)))
    y = np.array([r, 0.0, 0.0, 0.0, speed, 0.0, 0.0, 0.0])
    par = np.array([1.0, 1.0, 0.0])  # L^2 = 0 in U: Newton's potential
    memory, change = np.zeros(parts.memory), np.zeros(8)
    off, time = [], []
    for _ in range(200):
        cartesian_step(2, 2, par, parts.code, parts.table, 1.0, y, 2.0, memory, change)
        y += change
        size = np.hypot(y[0], y[1])
        off.append(size + e * y[0] - a * (1 - e * e))  # the ellipse in focal form
        anomaly = np.arctan2(y[1] / (a * np.sqrt(1 - e * e)), y[0] / a + e)
        time.append((anomaly - e * np.sin(anomaly)) * a**1.5)
    assert np.abs(off).max() < 1e-9 * a
    clock = y[7] % (2 * np.pi * a**1.5)
    late = (clock - time[-1] + np.pi * a**1.5) % (2 * np.pi * a**1.5) - np.pi * a**1.5
    assert abs(late) > 1e-3


def test_energy_of_long_runs_stays_in_bounds():
    """Light and compensated sums over many revolutions; plain sums do worse."""
    x, v = start_in("areal")
    times = np.array([0.0, 2e5])
    exact = Orbit(chart="areal", position=x, velocity=v).at(times)
    errors = {}
    for arithmetic in ("compensated", "float64"):
        run = propagate(
            "areal", x, v, times, method="four-part-kahan-li-8", step=1.0, arithmetic=arithmetic
        )
        errors[arithmetic] = np.abs(run.position[-1] - exact.position[-1]).max()
    print(errors)
    assert errors["compensated"] < 1e-8
    assert errors["compensated"] < errors["float64"]


@pytest.mark.parametrize("equations", METHODS["extended-phase-space-suzuki-4"].equations)
def test_the_copies_of_extended_phase_space_stay_together(equations):
    """Thirty revolutions from the apoapsis of an eccentric orbit, in every chart."""
    chart = EQUATIONS[equations].chart
    x, v = convert([40.0, 1.0, 2.0], [0.0, 0.1, 0.02], "areal", chart)
    times = np.array([0.0, 2e4])
    exact = Orbit(chart=chart, position=x, velocity=v)
    assert float(exact.apoapsis.value) > 2.5 * float(exact.periapsis.value)
    run = propagate(equations, x, v, times, method="extended-phase-space-kahan-li-8", step=0.5)
    assert run.status == "finished"
    off = np.linalg.norm(run.position[-1] - exact.at(times).position[-1])
    print(f"{equations}: {off:.2g} after {times[-1]:g}")
    assert off < 1e-5


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"equations": "harmonic"}, "it takes areal"),
        ({"variable": "chart"}, "it takes proper"),
        ({"tolerance": 1e-9}, "fixed step"),
        ({"step": None}, "needs a step"),
        ({"order": 6}, "has order 4"),
    ],
)
def test_what_does_not_go_together_is_refused(change, words):
    x, v = start_in("harmonic")
    keys = {"equations": "areal", "method": "four-part-suzuki-4", "step": 1.0} | change
    with pytest.raises(ValueError, match=words):
        propagate(keys.pop("equations"), x, v, [0.0, 1.0], **keys)
