"""Fixed-step methods; each advances ``y`` by one step of ``dy/dT = rate(y)``."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["METHODS", "Method", "gauss_legendre_tableau"]

Floats = npt.NDArray[np.float64]
Rate = Callable[[Floats], Floats]
Step = Callable[[Rate, Floats, float], tuple[Floats, int]]

_ITERATIONS = 100
#: Relative change below which a stage's rounding, not its convergence, is seen.
_SETTLED = 1e-13


@dataclass(frozen=True)
class Method:
    """A method: its order, and a step that returns the change of ``y`` and the evaluations."""

    order: int
    step: Step


def _classical(rate: Rate, y: Floats, h: float) -> tuple[Floats, int]:
    """The classical fourth-order Runge-Kutta method (Kutta 1901)."""
    k1 = rate(y)
    k2 = rate(y + 0.5 * h * k1)
    k3 = rate(y + 0.5 * h * k2)
    k4 = rate(y + h * k3)
    return h / 6 * (k1 + 2 * k2 + 2 * k3 + k4), 4


def gauss_legendre_tableau(stages: int) -> tuple[Floats, Floats, Floats]:
    """Nodes c, weights b and matrix a of the collocation method at Legendre's roots.

    Order ``2 stages``, symplectic (Hairer, Lubich & Wanner, Geometric Numerical Integration,
    II.1, from memory): ``sum_j a_ij c_j^(k-1) = c_i^k / k`` for k = 1 ... stages.
    """
    roots, weights = np.polynomial.legendre.leggauss(stages)
    c = 0.5 * (roots + 1)
    powers = np.vander(c, stages, increasing=True)
    k = np.arange(1, stages + 1)
    a = (c[:, None] ** k / k) @ np.linalg.inv(powers)
    return c, 0.5 * weights, a


def _gauss_legendre(stages: int) -> Step:
    _, b, a = gauss_legendre_tableau(stages)

    def step(rate: Rate, y: Floats, h: float) -> tuple[Floats, int]:
        """Fixed-point iteration until the stages stop changing, to round-off.

        Raises ArithmeticError if they do not: the step is too long for the iteration.
        """
        k = np.tile(rate(y), (stages, 1))
        count, last = 1, np.inf
        for _ in range(_ITERATIONS):
            new = np.array([rate(y + h * (row @ k)) for row in a])
            count += stages
            change = float(np.abs(new - k).max())
            k = new
            settled = change <= _SETTLED * float(np.abs(k).max())
            if change == 0.0 or (settled and change >= last):
                return h * (b @ k), count
            last = change
        raise ArithmeticError(f"the stages of a step of {h!r} do not settle; take shorter steps")

    return step


#: Name to method; one line adds a method.
METHODS = {
    "runge-kutta-4": Method(4, _classical),
    "gauss-legendre-2": Method(2, _gauss_legendre(1)),
    "gauss-legendre-4": Method(4, _gauss_legendre(2)),
    "gauss-legendre-6": Method(6, _gauss_legendre(3)),
    "gauss-legendre-8": Method(8, _gauss_legendre(4)),
}
