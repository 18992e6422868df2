"""How errors grow: laws recognised from samples made by those laws."""

from __future__ import annotations

import numpy as np
import pytest

from truefall.validate.growth import growth_of

TIME = np.linspace(0.0, 1000.0, 500)
#: An orbit's own oscillation, which must not be taken for growth.
SWING = 1.0 + 0.5 * np.cos(TIME / 11.0)


@pytest.mark.parametrize(
    ("error", "kind", "exponent", "within"),
    [
        (1e-9 * TIME * SWING, "linear", 1.0, 0.1),
        (1e-12 * TIME**2 * SWING, "quadratic", 2.0, 0.1),
        (1e-15 * TIME**3.5, "power", 3.5, 0.05),
        (1e-9 * SWING, "bounded", 0.0, 0.25),
        (1e-12 * np.exp(0.02 * TIME) * SWING, "exponential", 0.02, 1e-3),
    ],
)
def test_laws_are_recognised(error: np.ndarray, kind: str, exponent: float, within: float) -> None:
    """The named law and its exponent (an exponential's rate per unit of time)."""
    found = growth_of(TIME, error, np.zeros_like(TIME), 0.0)

    assert found.kind == kind
    assert found.exponent == pytest.approx(exponent, abs=within)


def test_backward_runs_grow_alike() -> None:
    """Time is counted from the start, in either direction."""
    found = growth_of(-TIME, 1e-9 * TIME, np.zeros_like(TIME), 0.0)

    assert found.kind == "linear"


def test_fewer_than_eight_samples_support_no_law() -> None:
    """However straight they look."""
    few = np.arange(8.0)  # the first is the start itself

    assert growth_of(few, few, np.zeros(8), 0.0).kind == "irregular"
    assert growth_of(few, few, np.zeros(8), 0.0).exponent is None


def test_errors_within_the_guard_do_not_grow() -> None:
    """What the digits leave open is no evidence."""
    found = growth_of(TIME, 1e-9 * TIME, np.full_like(TIME, 1.0), 0.0)

    assert (found.kind, found.exponent) == ("none", None)


def test_scatter_is_no_law() -> None:
    """Errors over eight decades without order get no exponent."""
    random = np.random.default_rng(5)
    error = 10.0 ** random.uniform(-12, -4, TIME.size)
    error[TIME > 100] *= 10.0 ** (4 * np.sin(np.log(TIME[TIME > 100]) * 6))

    assert growth_of(TIME, error, np.zeros_like(TIME), 0.0).kind in ("irregular", "bounded")
