"""The symplectic methods as the index knows them; kernels are imported when first used."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from truefall.integrators.methods import Method, Parts, Problem
from truefall.integrators.symplectic.compositions import ORDERS, SOURCES

__all__ = ["methods"]

_ALL = tuple(ORDERS)
_SOME = ("strang-2", "suzuki-4", "kahan-li-6", "kahan-li-8")
_PAIRS = ("strang-2", "blanes-moan-4", "blanes-moan-6", "kahan-li-8")
_CHARTS = (
    "areal", "areal-cartesian", "isotropic", "harmonic", "kerr-schild", "painleve-gullstrand",
    "eddington-finkelstein",
)  # fmt: skip


def _four(name: str) -> Callable[[Problem], Parts]:
    def parts(problem: Problem) -> Parts:
        from truefall.integrators.symplectic.schwarzschild import four_parts

        return four_parts(name, problem)

    return parts


def _three(name: str) -> Callable[[Problem], Parts]:
    def parts(problem: Problem) -> Parts:
        from truefall.integrators.symplectic.schwarzschild import three_parts

        return three_parts(name, problem)

    return parts


def _extended(name: str) -> Callable[[Problem], Parts]:
    def parts(problem: Problem) -> Parts:
        from truefall.integrators.symplectic.extended import parts_of

        return parts_of(name, problem)

    return parts


def _transformed(name: str) -> Callable[[Problem], Parts]:
    def parts(problem: Problem) -> Parts:
        from truefall.integrators.symplectic.time_transformed import parts_of

        return parts_of(name, problem)

    return parts


_FAMILIES = (
    ("four-part", _four, _ALL, "Wang, Sun, Liu & Wu 2021, ApJ 907, 66", ("areal",), ("proper",)),
    ("three-part", _three, _ALL, "Zhou, Zhang, Liu & Wu 2022, ApJ 927, 160", ("areal",),
     ("proper",)),
    ("extended-phase-space", _extended, _SOME, "Tao 2016, Phys. Rev. E 94, 043303", _CHARTS,
     ("proper",)),
    ("time-transformed", _transformed, _PAIRS,
     "Mikkola & Tanikawa 1999, Celest. Mech. 74, 287; Preto & Tremaine 1999, AJ 118, 2532",
     ("areal-cartesian",), ("radius",)),
    ("mino-leapfrog", _transformed, _PAIRS, "Mino 2003, Phys. Rev. D 67, 084027 (the time)",
     ("mino",), ("radius-squared",)),
)  # fmt: skip


def methods() -> Iterator[Method]:
    """Every symplectic splitting, composed, by name ``family-set-order``."""
    for family, parts, sets, source, equations, variables in _FAMILIES:
        for name in sets:
            yield Method(
                f"{family}-{name}", ORDERS[name], "symplectic", False, True,
                f"{source}; {SOURCES[name]}", parts(name), equations=equations,
                variables=variables,
            )  # fmt: skip
