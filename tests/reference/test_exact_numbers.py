"""The engine's building blocks: exact square-root fields, bounded series, correct rounding."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import pytest
from flint import arb, arb_series, fmpq
from hypothesis import given
from hypothesis import strategies as st

from truefall.reference.exact.disc import Disc, log2_upper, working
from truefall.reference.exact.field import Surd, is_zero, sign, sqrt_of, to_ball
from truefall.reference.exact.rounding import ball_to_float, round_ball, upper_float

small = st.integers(-20, 20)
positive = st.integers(1, 60)


@given(a=small, b=small, d=positive)
def test_a_surd_that_is_zero_is_recognised(a, b, d):
    """(a + b sqrt d)(a - b sqrt d) - (a^2 - b^2 d) vanishes, and only equal numbers differ by 0."""
    root = sqrt_of(fmpq(d))
    product = (a + b * root) * (a - b * root) if isinstance(root, Surd) else None
    if product is None:
        assert root * root == d
        return

    assert is_zero(product - (a * a - b * b * d))
    assert not is_zero(product - (a * a - b * b * d) - fmpq(1, 10**30))


@given(a=small, b=small, c=small, e=small, d=positive)
def test_signs_in_a_two_storey_tower_agree_with_mpmath(a, b, c, e, d):
    """Sign of a + b sqrt d + (c + e sqrt d) sqrt(1 + sqrt d) against 60 digits."""
    with mpmath.workdps(60):
        lower = mpmath.sqrt(d)
        true = a + b * lower + (c + e * lower) * mpmath.sqrt(1 + lower)
        expected = 0 if abs(true) < mpmath.mpf(10) ** -50 else int(mpmath.sign(true))
    inner = sqrt_of(fmpq(d))
    outer = sqrt_of(1 + inner)

    assert expected == sign(a + b * inner + (c + e * inner) * outer)


def test_a_square_root_hidden_in_a_sum_is_found_out():
    """sqrt(3 + 2 sqrt 2) = 1 + sqrt 2, seen exactly and inverted exactly."""
    inner = sqrt_of(fmpq(2))
    outer = sqrt_of(3 + 2 * inner)

    assert is_zero(outer - inner - 1)
    assert is_zero(1 / (outer + inner + 1) - 1 / (2 * inner + 2))
    with pytest.raises(ZeroDivisionError):
        (outer - inner - 1).inverse()


@pytest.mark.parametrize("name", ["inverse", "sqrt"])
def test_a_disc_bounds_the_function_and_its_tail(name):
    """1/f and sqrt f of f = 2 + x + x^2/3: sampled on circles, against the promised bounds."""
    order = 24
    with working(200):
        coefficients = [arb(2), arb(1), arb(1) / 3]
        disc = Disc.build(arb_series(coefficients, order), order, 1.0, log2_upper(arb(6)))
        disc = Disc(disc.series, disc.logs, disc.radius, disc.sup, exact=True)
        made = disc.inverse() if name == "inverse" else disc.sqrt()
        digits = [c.mid().str(45, radius=False) for c in made.series.coeffs()]
    function = (lambda z: 1 / z) if name == "inverse" else mpmath.sqrt
    with mpmath.workdps(50):
        kept = [mpmath.mpf(d) for d in digits]
        for share in (1.0, 0.5, 0.1):
            radius = mpmath.mpf(2) ** made.radius * share
            log_radius = made.radius + math.log2(share) - 1e-6
            for k in range(24):
                z = radius * mpmath.expjpi(mpmath.mpf(k) / 12)
                value = function(2 + z + z * z / 3)
                rest = abs(value - sum(c * z**j for j, c in enumerate(kept)))

                assert mpmath.log(abs(value), 2) <= made.sup + 1e-9
                if share < 1:
                    assert mpmath.log(rest + mpmath.mpf(10) ** -43, 2) <= made.tail(
                        log_radius + 2e-6
                    )


@given(
    numerator=st.integers(-(2**70), 2**70),
    shift=st.integers(-1140, 900),
)
def test_rounding_is_to_the_nearest_float(numerator, shift):
    """Against Python's exact conversion of rationals, subnormal numbers included."""
    exact = Fraction(numerator) * (Fraction(2) ** shift)
    with working(128):
        ball = arb((numerator, shift)) if numerator else arb(0)
    expected = float(exact)

    assert expected == ball_to_float(ball)
    assert upper_float(ball) >= abs(exact)


@given(value=st.floats(1e-300, 1e300), spread=st.floats(1e-30, 1e-10))
def test_a_rounded_ball_carries_a_true_bound(value, spread):
    """The bound covers the whole ball; undecided balls say so."""
    with working(160):
        third = arb(value) / 3
        ball = third + third * arb(spread) * arb(0, 1)
        low, high = ball.lower(), ball.upper()
        rounded = round_ball(ball)
    ends = [Fraction(int(m)) * Fraction(2) ** int(e) for m, e in (low.man_exp(), high.man_exp())]

    assert all(abs(Fraction(rounded.value) - x) <= Fraction(rounded.bound) for x in ends)
    assert rounded.decided == (float(ends[0]) == float(ends[1]) == rounded.value)


def test_to_ball_encloses_a_tower():
    """An enclosure at 100 bits contains the value mpmath finds at 60 digits."""
    inner = sqrt_of(fmpq(7, 3))
    number = (1 + inner) / (2 - 3 * sqrt_of(5 + inner))
    with mpmath.workdps(60):
        lower = mpmath.sqrt(mpmath.mpf(7) / 3)
        true = (1 + lower) / (2 - 3 * mpmath.sqrt(5 + lower))
    with working(100):
        ball = to_ball(number)
    with working(300):
        assert (ball - arb(mpmath.nstr(true, 55))).contains(0)
