"""The index: every set of equations and every method by name; one line adds one."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from truefall.integrators.methods import Method, Parts, Problem
from truefall.integrators.symplectic.index_entries import methods as symplectic_methods

__all__ = ["EQUATIONS", "METHODS", "VARIABLES", "Equations"]

#: Independent variables: name to number.  d lambda = weight d sigma with the weight
#: 1, d lambda/dT, R, R^(3/2), R^2 (R the chart's radius).
VARIABLES: Mapping[str, int] = {
    "proper": 0, "chart": 1, "radius": 2, "radius-3/2": 3, "radius-squared": 4,
}  # fmt: skip


@dataclass(frozen=True)
class Equations:
    """A set of equations of motion, GM = c = 1.

    Attributes
    ----------
    name, chart : str
        Name here; the contract's name of the chart of its positions.
    kind, size : int
        Number in ``equations/rates.py``; length of the state.
    time_row, clock_row : int
        Where the state keeps the chart's time and the particle's clock.
    variables : tuple of str
        Independent variables it can be run in; the first is the default.
    static : bool
        Whether the chart ends at the horizon.
    """

    name: str
    chart: str
    kind: int
    size: int = 8
    time_row: int = 6
    clock_row: int = 7
    variables: tuple[str, ...] = ("proper", "chart", "radius", "radius-3/2", "radius-squared")
    static: bool = False

    def variable(self, name: str) -> int:
        """The number of an independent variable (Mino's equations are written in theirs)."""
        return 0 if len(self.variables) == 1 else VARIABLES[name]


def _mino(name: str, chart: str, kind: int, static: bool) -> Equations:
    return Equations(name, chart, kind, 10, 8, 9, ("radius-squared",), static)


def _classical(name: str, kind: int) -> Equations:
    return Equations(name, "none", kind, 5, 4, 4, ("chart",))


EQUATIONS: Mapping[str, Equations] = {
    e.name: e
    for e in (
        Equations("areal", "areal", 8, static=True),
        Equations("areal-cartesian", "areal", 2, static=True),
        Equations("isotropic", "isotropic", 3, static=True),
        Equations("harmonic", "harmonic", 4, static=True),
        Equations("kerr-schild", "kerr-schild", 5),
        Equations("painleve-gullstrand", "painleve-gullstrand", 6),
        Equations("eddington-finkelstein", "eddington-finkelstein", 7),
        _mino("mino", "areal", 9, True),
        _mino("mino-kerr-schild", "kerr-schild", 10, False),
        _mino("mino-painleve-gullstrand", "painleve-gullstrand", 11, False),
        _classical("kepler", 0),
        _classical("arenstorf", 1),
    )
}


def _taylor(problem: Problem) -> Parts:
    from truefall.integrators.adaptive import taylor, taylor_mino

    return taylor_mino.parts(problem) if problem.kind == 9 else taylor.parts(problem)


def _gauss_legendre(problem: Problem) -> Parts:
    from truefall.integrators.implicit.gauss_legendre import parts

    return parts(problem)


def _gauss_radau(problem: Problem) -> Parts:
    from truefall.integrators.adaptive.gauss_radau import parts

    return parts(problem)


def _extrapolation(problem: Problem) -> Parts:
    from truefall.integrators.adaptive.extrapolation import parts

    return parts(problem)


def _runge_kutta(name: str, order: int, family: str, source: str) -> Method:
    def parts(problem: Problem) -> Parts:
        from truefall.integrators.adaptive.runge_kutta import parts_of

        return parts_of(name, problem)

    return Method(name, order, family, family == "adaptive", False, source, parts)


def _gauss(order: int) -> Method:
    source = "Hairer, Lubich & Wanner, Geometric Numerical Integration, II.1"
    return Method(
        f"gauss-legendre-{order}", order, "implicit", False, True, source, _gauss_legendre,
        arithmetics=("float64", "compensated", "double-double"),
    )  # fmt: skip


METHODS: Mapping[str, Method] = {
    m.name: m
    for m in (
        Method(
            "taylor", None, "adaptive", True, False, "Jorba & Zou 2005, Exp. Math. 14, 99",
            _taylor, orders=range(2, 101), default_order=32,
            arithmetics=("float64", "compensated", "double-double"),
            ),
        _runge_kutta("runge-kutta-4", 4, "explicit", "Kutta 1901, Z. Math. Phys. 46, 435"),
        _runge_kutta(
            "dormand-prince-5", 5, "adaptive",
            "Dormand & Prince 1980, J. Comput. Appl. Math. 6, 19",
        ),
        _runge_kutta(
            "dormand-prince-8", 8, "adaptive",
            "Hairer, Norsett & Wanner, Solving Ordinary Differential Equations I, II.5, II.10",
        ),
        _runge_kutta(
            "prince-9", 9, "adaptive",
            "Prince 2018, Parallel derivation of efficient continuous/discrete explicit "
            "Runge-Kutta methods",
        ),
        Method(
            "gragg-bulirsch-stoer", None, "adaptive", True, False,
            "Bulirsch & Stoer 1966, Numer. Math. 8, 1", _extrapolation,
            orders=range(4, 25, 2), default_order=12,
        ),
        Method(
            "gauss-radau-15", 15, "adaptive", True, False,
            "Everhart 1985; Rein & Spiegel 2015, MNRAS 446, 1424", _gauss_radau,
            arithmetics=("float64", "compensated", "double-double"),
        ),
        *(_gauss(order) for order in range(2, 17, 2)),
        *symplectic_methods(),
    )
}  # fmt: skip
