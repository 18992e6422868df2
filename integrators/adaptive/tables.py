"""Tables of explicit Runge-Kutta methods; one function and one line in ``TABLES`` adds one."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

__all__ = ["TABLES", "Table"]

Rows = Sequence[Sequence[float]]


@dataclass(frozen=True)
class Table:
    """Coefficients of an explicit method.

    Attributes
    ----------
    order, estimate : int
        Order of the solution; order of the weaker solution that the error estimate compares.
    a : rows, the i-th with i entries
    b : (s,)
    errors : none, one or two of (s,)
        Weights of the error estimates.
    onward : int
        The stage that is the first of the next step, -1 for none.
    """

    order: int
    estimate: int
    a: Rows
    b: Sequence[float]
    errors: Rows = ()
    onward: int = -1


def _classical() -> Table:
    """Kutta 1901, Z. Math. Phys. 46, 435 (from memory)."""
    return Table(4, 4, ((), (0.5,), (0.0, 0.5), (0.0, 0.0, 1.0)), (1 / 6, 1 / 3, 1 / 3, 1 / 6))


def _dormand_prince_5() -> Table:
    """Dormand & Prince 1980, J. Comput. Appl. Math. 6, 19 (from memory)."""
    b = (35 / 384, 0.0, 500 / 1113, 125 / 192, -2187 / 6784, 11 / 84)
    weaker = (5179 / 57600, 0.0, 7571 / 16695, 393 / 640, -92097 / 339200, 187 / 2100, 1 / 40)
    a = (
        (),
        (1 / 5,),
        (3 / 40, 9 / 40),
        (44 / 45, -56 / 15, 32 / 9),
        (19372 / 6561, -25360 / 2187, 64448 / 6561, -212 / 729),
        (9017 / 3168, -355 / 33, 46732 / 5247, 49 / 176, -5103 / 18656),
        b,
    )
    error = tuple(x - y for x, y in zip((*b, 0.0), weaker, strict=True))
    return Table(5, 4, a, (*b, 0.0), (error,), 6)


def _dormand_prince_8() -> Table:
    """8(5,3); see eighth_order.py."""
    from truefall.integrators.adaptive.eighth_order import ERROR_3, ERROR_5, A, B

    return Table(8, 7, A, B, (ERROR_5, ERROR_3))


def _prince_9() -> Table:
    """9(8); see ninth_order.py."""
    from truefall.integrators.adaptive.ninth_order import CONTINUOUS, A, B

    half = 0.5
    middle = [sum(p * half ** (k + 1) for k, p in enumerate(row)) for row in CONTINUOUS]
    slope = [sum((k + 1) * p * half**k for k, p in enumerate(row)) for row in CONTINUOUS]
    error = [-x for x in slope] + [1.0]
    return Table(9, 8, (*A, B, middle), (*B, 0.0, 0.0), (error,), 17)


TABLES: Mapping[str, Callable[[], Table]] = {
    "runge-kutta-4": _classical,
    "dormand-prince-5": _dormand_prince_5,
    "dormand-prince-8": _dormand_prince_8,
    "prince-9": _prince_9,
}
