"""Integrators: coefficient identities, measured orders, invariants, refusals."""

from __future__ import annotations

import numpy as np
import pytest

from truefall.integrators import EQUATIONS, METHODS, propagate
from truefall.integrators.methods import gauss_legendre_tableau
from truefall.reference import Orbit
from truefall.reference.charts import convert
from truefall.reference.invariants import state_invariants

#: Window of a measured order around the nominal one.
ORDER_WINDOW = 0.2


def start_in(chart):
    """The same physical start in each chart: areal r = 12, mildly eccentric and inclined."""
    return convert([12.0, 0.0, 0.0], [0.0, 0.27, 0.04], "areal", chart)


@pytest.mark.parametrize("stages", [1, 2, 3, 4])
def test_gauss_legendre_coefficients_satisfy_their_conditions(stages):
    """Order conditions B(2s), C(s) and symplecticity to 1e-14; roots of P_s by evaluation."""
    c, b, a = gauss_legendre_tableau(stages)
    for k in range(1, 2 * stages + 1):
        assert b @ c ** (k - 1) == pytest.approx(1 / k, abs=1e-14)
    for k in range(1, stages + 1):
        assert a @ c ** (k - 1) == pytest.approx(c**k / k, abs=1e-14)
    symplectic = b[:, None] * a + (b[:, None] * a).T - np.outer(b, b)
    assert np.abs(symplectic).max() < 1e-14
    polynomial = np.polynomial.legendre.Legendre.basis(stages)
    assert np.abs(polynomial(2 * c - 1)).max() < 1e-14


def test_the_two_stage_nodes_are_the_published_ones():
    """1/2 -+ sqrt(3)/6 (Hairer, Lubich & Wanner II.1, from memory)."""
    c, _, a = gauss_legendre_tableau(2)

    assert c == pytest.approx([0.5 - np.sqrt(3) / 6, 0.5 + np.sqrt(3) / 6], abs=1e-15)
    assert a[0, 1] == pytest.approx(0.25 - np.sqrt(3) / 6, abs=1e-15)


@pytest.mark.parametrize("chart", EQUATIONS)
@pytest.mark.parametrize("method", METHODS)
def test_every_method_has_its_order_on_every_set_of_equations(method, chart):
    """Error at time 240 against the exact solution, from three step sizes, fitted."""
    position, velocity = start_in(chart)
    exact = Orbit(chart=chart, position=position, velocity=velocity).at([240.0])
    order = METHODS[method].order
    longest = {2: 1.0, 4: 1.0, 6: 8.0, 8: 12.0}[order]
    errors, steps = [], []
    for step in longest / np.array([1.0, 1.5, 2.0]):
        run = propagate(chart, position, velocity, [0.0, 240.0], method=method, step=step)
        steps.append(240.0 / run.steps)
        errors.append(np.linalg.norm(run.position[-1] - exact.position[0]))
    slope = np.polyfit(np.log(steps), np.log(errors), 1)[0]

    assert errors[-1] > 1e-10  # truncation still rules
    assert slope == pytest.approx(order, abs=ORDER_WINDOW)


@pytest.mark.parametrize("method", ["gauss-legendre-4", "gauss-legendre-8"])
def test_symplectic_energy_errors_do_not_drift(method):
    """Over 20 revolutions the energy error of the second half is no larger than of the first."""
    position, velocity = start_in("painleve-gullstrand")
    times = np.linspace(0.0, 5000.0, 251)
    run = propagate("painleve-gullstrand", position, velocity, times, method=method, step=4.0)
    found = state_invariants(
        run.position, run.velocity, "painleve-gullstrand", "geometric", 1.0, "massive"
    )
    error = np.abs(found.energy_minus_one - found.energy_minus_one[0])

    assert error[125:].max() < 2 * error[:125].max() + 1e-15


def test_a_fall_passes_the_horizon():
    """Painleve-Gullstrand, from r = 6 to r < 1: as exact below the horizon as above."""
    orbit = Orbit(chart="painleve-gullstrand", position=(6, 0, 0), velocity=(-0.25, 0.2, 0))
    times = np.linspace(0.0, 11.25, 46)
    run = propagate(
        "painleve-gullstrand", (6.0, 0, 0), (-0.25, 0.2, 0), times, method="gauss-legendre-8",
        step=0.05,
    )  # fmt: skip
    exact = orbit.at(times)

    assert exact.radius[-1] < 1.0
    assert np.abs(run.position - exact.position).max() < 1e-11


def test_backwards_undoes_forwards():
    """A symmetric method returns to its start to round-off."""
    position, velocity = start_in("harmonic")
    there = propagate(
        "harmonic", position, velocity, [0.0, 100.0], method="gauss-legendre-6", step=1.0
    )
    back = propagate(
        "harmonic", there.position[-1], there.velocity[-1], [100.0, 0.0],
        method="gauss-legendre-6", step=1.0,
    )  # fmt: skip

    assert np.abs(back.position[-1] - position).max() < 1e-12


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"method": "runge-kuta-4"}, "did you mean 'runge-kutta-4'"),
        ({"equations": "polar"}, "known are harmonic"),
        ({"times": [0.0, 1.0, 1.0]}, "strictly increasing"),
        ({"step": 0.0}, "positive"),
        (
            {"equations": "painleve-gullstrand", "velocity": (0.0, 1.0, 0.0)},
            "speed of light",
        ),
    ],
)
def test_wrong_requests_are_refused(change, words):
    """Unknown names with the nearest known one, times, steps, impossible starts."""
    keys = {
        "equations": "harmonic", "position": (11.0, 0, 0), "velocity": (0, 0.2, 0),
        "times": [0.0, 1.0], "method": "runge-kutta-4", "step": 0.1,
    } | change  # fmt: skip
    with pytest.raises(ValueError, match=words):
        propagate(
            keys["equations"], keys["position"], keys["velocity"], keys["times"],
            method=keys["method"], step=keys["step"],
        )  # fmt: skip
