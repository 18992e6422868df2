"""Arithmetic of two words, tapes and series, starts and results."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest

from truefall.integrators import EQUATIONS, propagate
from truefall.integrators import arithmetic as two
from truefall.integrators.adaptive.taylor_mino import mino_orbit
from truefall.integrators.equations.cartesian import hamiltonian
from truefall.integrators.equations.rates import rate
from truefall.integrators.equations.spherical import spherical_hamiltonian
from truefall.integrators.equations.tapes import rate_tape
from truefall.integrators.series import run_tape, taylor
from truefall.integrators.starts import begin, finish
from truefall.reference.charts import convert

EPSILON = 2.0**-104
SETS = [(n, v) for n, e in EQUATIONS.items() if e.kind >= 2 for v in e.variables]


def pairs(seed, count):
    rng = np.random.default_rng(seed)
    high = rng.uniform(-1, 1, count) * 10.0 ** rng.integers(-8, 8, count)
    return list(zip(high, high * rng.uniform(-1, 1, count) * 2.0**-54, strict=True))


def exactly(pair):
    return Fraction(float(pair[0])) + Fraction(float(pair[1]))


@pytest.mark.parametrize("name", ["add", "multiply", "divide"])
def test_two_words_against_exact_rationals(name):
    """200 pairs of every size: relative errors of a few units of 2^-106 (sums: of the operands)."""
    operation = {"add": lambda a, b: a + b, "multiply": lambda a, b: a * b,
                 "divide": lambda a, b: a / b}[name]  # fmt: skip
    for a, b in zip(pairs(1, 200), pairs(2, 200), strict=True):
        obtained = getattr(two, name)(*a, *b)
        expected = operation(exactly(a), exactly(b))
        size = max(abs(exactly(a)), abs(exactly(b))) if name == "add" else abs(expected)

        assert abs(exactly(obtained) - expected) <= EPSILON * float(size)
        assert obtained[0] + obtained[1] == obtained[0]


def test_exact_sums_and_products():
    for (a, _), (b, _) in zip(pairs(3, 200), pairs(4, 200), strict=True):
        assert exactly(two.two_sum(a, b)) == Fraction(float(a)) + Fraction(float(b))
        assert exactly(two.two_product(a, b)) == Fraction(float(a)) * Fraction(float(b))


def test_roots_sines_and_angles_in_two_words():
    """Against mpmath with 50 digits; angles up to a thousand radians."""
    with mpmath.workdps(50):
        for high, low in pairs(5, 60):
            size = abs(high), low * np.sign(high)
            value = mpmath.mpf(size[0]) + mpmath.mpf(size[1])
            got = two.root(*size)
            assert abs(mpmath.mpf(got[0]) + got[1] - mpmath.sqrt(value)) < EPSILON * got[0]
            turn = mpmath.mpf(high % 1000.0) + mpmath.mpf(low)
            c, cl, s, sl = two.cosine_and_sine(high % 1000.0, low)
            assert abs(mpmath.mpf(c) + cl - mpmath.cos(turn)) < 8 * EPSILON
            assert abs(mpmath.mpf(s) + sl - mpmath.sin(turn)) < 8 * EPSILON
            around = two.angle(s, sl, c, cl)
            expected = mpmath.atan2(mpmath.mpf(s) + sl, mpmath.mpf(c) + cl)
            assert abs(mpmath.mpf(around[0]) + around[1] - expected) < 8 * EPSILON
    assert two.root(0.0, 0.0) == (0.0, 0.0)


def state_of(name):
    found = EQUATIONS[name]
    x, v = convert([9.0, 2.0, 1.5], [-0.05, 0.27, 0.04], "areal", found.chart)
    y, _, par, _ = begin(found, x[None], v[None], False)
    return found, np.array(x), np.array(v), y[0], par[0]


@pytest.mark.parametrize(("name", "variable"), SETS)
def test_a_tape_gives_what_its_kernel_gives(name, variable):
    """The same equations compiled in numbers and recorded as series, at order 0."""
    found, _, _, y, par = state_of(name)
    number = found.variable(variable)
    tape = rate_tape(found.kind, number, found.size)
    s = np.zeros((tape.rows, 1))
    s[: found.size, 0] = y
    run_tape(tape.lines, tape.literals, par, s, 0, 1.0)
    compiled = np.zeros(found.size)
    rate(found.kind, number, par, y, compiled)

    assert s[tape.results, 0] == pytest.approx(compiled, rel=1e-13, abs=1e-15)


@pytest.mark.parametrize("name", [n for n, e in EQUATIONS.items() if 2 <= e.kind <= 8])
def test_rates_are_the_derivatives_of_the_hamiltonian(name):
    """Central differences of H, which is -1/2 at a particle's start."""
    found, _, _, y, par = state_of(name)

    def h(state):
        if found.kind == 8:
            return spherical_hamiltonian(par[0], state)
        return hamiltonian(found.kind, par[0], state)

    compiled = np.zeros(8)
    rate(found.kind, 0, par, y, compiled)
    assert h(y) == pytest.approx(-0.5, abs=1e-14)
    for i in range(6):
        step = np.zeros(8)
        step[i] = 1e-5
        slope = (h(y + step) - h(y - step)) / 2e-5
        expected = -compiled[i - 3] if i >= 3 else compiled[i + 3]
        assert -slope == pytest.approx(expected, abs=2e-9)


@pytest.mark.parametrize("name", [n for n, e in EQUATIONS.items() if e.kind >= 2])
def test_a_start_comes_back_from_its_state(name):
    found, x, v, y, par = state_of(name)
    row = finish(found, par, y[None])[0]

    assert row[:3] == pytest.approx(x, abs=4e-15)
    assert row[3:6] == pytest.approx(v, abs=1e-15)
    assert row[6] == 0.0


def test_the_fast_series_in_mino_time_is_the_tapes():
    """Order 30, coefficient by coefficient, in powers of half the unit."""
    found, _, _, y, par = state_of("mino")
    tape = rate_tape(found.kind, 0, found.size)
    slow = np.zeros((tape.rows, 31))
    slow[: found.size, 0] = y
    taylor(tape.integrating(), tape.literals, par, slow, 30, 0.5)
    fast = np.zeros((6, 31))
    fast[:4, 0] = y[[0, 1, 8, 9]]
    mino_orbit(par, fast, 30, 0.5)
    scale = np.abs(slow[[0, 1, 8, 9], :]).max(axis=1, keepdims=True) * 0.9 ** np.arange(31)

    assert (np.abs(fast[:4] - slow[[0, 1, 8, 9]]) / scale).max() < 1e-13


@pytest.mark.parametrize(
    ("position", "velocity", "words"),
    [
        ([0.0, 0.0, 9.0], [0.1, 0.0, 0.0], "polar axis"),
        ([2.0, 0.0, 0.0], [0.0, 0.1, 0.0], "radii above 2"),
        ([9.0, 0.0, 0.0], [0.0, 0.0, 0.9], "speed of light"),
    ],
)
def test_starts_that_are_none_are_refused(position, velocity, words):
    with pytest.raises(ValueError, match=words):
        propagate("areal", position, velocity, [0.0, 1.0], method="taylor", tolerance=1e-9)
