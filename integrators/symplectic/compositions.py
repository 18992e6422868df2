"""Compositions of a map with its adjoint, of order 2 to 8, valid for any number of parts.

Let ``chi(h)`` be the flows of the parts of a Hamiltonian one after another, and ``chi*(h)`` the
same flows in the opposite order.  Every method here is::

    chi(alpha_1 h), chi*(alpha_2 h), chi(alpha_3 h), ... chi*(alpha_2s h)

with palindromic ``alpha``.  Two families are written in this form:

* weights ``w`` of a symmetric map of second order, ``S(h) = chi*(h/2) chi(h/2)``: alpha is
  ``w_1/2, w_1/2, w_2/2, w_2/2, ...``;
* coefficients of splittings into two parts, ``a_1 b_1 a_2 b_2 ... a_1``: alpha is
  ``a_1, b_1 - alpha_1, a_2 - alpha_2, b_2 - alpha_3, ...``.  With two parts the same flows come
  back; with more the order stays (McLachlan 1995, SIAM J. Sci. Comput. 16, 151; Hairer, Lubich &
  Wanner, Geometric Numerical Integration, III.3.3; from memory, and shown for four letters by the
  expansion in the tests).  Sets for equations of second order (Runge-Kutta-Nystroem) need
  commutators to vanish that do not with more parts, and are not here.

Sources of the digits beside each set; the sums are closed by the middle coefficients, so that
they are consistent to the last bit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cache

import numpy as np
import numpy.typing as npt

__all__ = ["ORDERS", "SOURCES", "fractions", "sequence"]

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.int64]

_CUBE, _FOURTH = 2.0 ** (1.0 / 3.0), 4.0 ** (1.0 / 3.0)
#: Outer weights of symmetric maps of second order; the middle one makes the sum 1.
_WEIGHTS: Mapping[str, tuple[float, ...]] = {
    "strang-2": (),
    "yoshida-4": (1.0 / (2.0 - _CUBE),),
    "suzuki-4": (1.0 / (4.0 - _FOURTH), 1.0 / (4.0 - _FOURTH)),
    "yoshida-6": (0.78451361047755726382, 0.23557321335935813368, -1.17767998417887100695),
    "kahan-li-6": (
        0.39216144400731413928, 0.33259913678935943860, -0.70624617255763935981,
        0.082213596293550800230,
    ),
    "kahan-li-8": (
        0.13020248308889008088, 0.56116298177510838456, -0.38947496264484728641,
        0.15884190655515560090, -0.39590389413323757734, 0.18453964097831570709,
        0.25837438768632204729, 0.29501172360931029887,
    ),
    "mclachlan-8": (
        0.74167036435061295345, -0.40910082580003159400, 0.19075471029623837995,
        -0.57386247111608226666, 0.29906418130365592384, 0.33462491824529818378,
        0.31529309239676659663,
    ),
}  # fmt: skip
#: Two-part splittings a_1 b_1 a_2 ... : the a and b up to the middle, which closes the sums.
_PAIRS: Mapping[str, tuple[tuple[float, ...], tuple[float, ...]]] = {
    "blanes-moan-4": (
        (0.0792036964311957, 0.353172906049774, -0.0420650803577195),
        (0.209515106613362, -0.143851773179818),
    ),
    "blanes-moan-6": (
        (0.0502627644003922, 0.413514300428344, 0.0450798897943977, -0.188054853819569,
         0.541960678450780),
        (0.148816447901042, -0.132385865767784, 0.067307604692185, 0.432666402578175),
    ),
}  # fmt: skip

#: Order of every set.
ORDERS: Mapping[str, int] = {
    name: int(name.rpartition("-")[2]) for name in (*_WEIGHTS, *_PAIRS)
}  # fmt: skip
SOURCES: Mapping[str, str] = {
    "strang-2": "Strang 1968, SIAM J. Numer. Anal. 5, 506",
    "yoshida-4": "Yoshida 1990, Phys. Lett. A 150, 262; Forest & Ruth 1990, Physica D 43, 105",
    "suzuki-4": "Suzuki 1990, Phys. Lett. A 146, 319",
    "yoshida-6": "Yoshida 1990, Phys. Lett. A 150, 262 (solution A)",
    "kahan-li-6": "Kahan & Li 1997, Math. Comp. 66, 1089 (9 stages)",
    "kahan-li-8": "Kahan & Li 1997, Math. Comp. 66, 1089 (17 stages)",
    "mclachlan-8": (
        "McLachlan 1995, SIAM J. Sci. Comput. 16, 151, or Suzuki & Umeno 1993; Hairer, Lubich & "
        "Wanner, Geometric Numerical Integration, V.3.2 (15 stages)"
    ),
    "blanes-moan-4": "Blanes & Moan 2002, J. Comput. Appl. Math. 142, 313 (S6)",
    "blanes-moan-6": "Blanes & Moan 2002, J. Comput. Appl. Math. 142, 313 (S10)",
}


@cache
def fractions(name: str) -> tuple[float, ...]:
    """``alpha``: the step of each map and adjoint, in turn, as fractions of the whole step."""
    if name in _WEIGHTS:
        outer = _WEIGHTS[name]
        weights = (*outer, 1.0 - 2.0 * sum(outer), *reversed(outer))
        return tuple(0.5 * w for w in weights for _ in range(2))
    a, b = _PAIRS[name]
    kicks = (*b, 0.5 - sum(b))
    drifts = (*a, 1.0 - 2.0 * sum(a))
    half: list[float] = []
    last = 0.0
    for drift, kick in zip(drifts, kicks, strict=False):
        half.append(drift - last)
        half.append(kick - half[-1])
        last = half[-1]
    return (*half, *reversed(half))


@cache
def sequence(name: str, parts: int) -> tuple[Integers, Floats]:
    """The flows of a step in order, neighbours of one part joined.

    Parameters
    ----------
    name : str
        A set of :data:`ORDERS`.
    parts : int
        Into how many parts, numbered from the outermost, the Hamiltonian is split.

    Returns
    -------
    code : (m, 1) int64
        The part.
    table : (m, 1) float64
        For how long, as a fraction of the step.
    """
    flows: list[list[float]] = []
    for place, alpha in enumerate(fractions(name)):
        order: Sequence[int] = range(parts) if place % 2 == 0 else range(parts - 1, -1, -1)
        for part in order:
            if flows and flows[-1][0] == part:
                flows[-1][1] += alpha
            else:
                flows.append([part, alpha])
    code = np.array([[int(part)] for part, _ in flows], dtype=np.int64)
    return code, np.array([[time] for _, time in flows])
