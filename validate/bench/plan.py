"""Which methods meet which equations and problems."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from fnmatch import fnmatchcase
from typing import TYPE_CHECKING

from truefall.validate.bench.measure import Job, controls_of
from truefall.validate.bench.problems import PROBLEMS, truth_of
from truefall.validate.errors import UsageError

if TYPE_CHECKING:
    from truefall.integrators import Equations, Method

__all__ = ["jobs_of"]

#: One method of each kind, for a look within a minute.
_QUICK_METHODS = (
    "taylor", "dormand-prince-8", "runge-kutta-4", "gauss-legendre-8", "four-part-yoshida-4",
    "mino-leapfrog-kahan-li-8",
)  # fmt: skip
_QUICK_PROBLEMS = ("bound-strong", "flyby-fast", "light-deflected")


def _chosen(patterns: Sequence[str], known: Iterable[str], what: str) -> list[str]:
    """The known names that match any of the patterns; all without patterns."""
    names = list(known)
    if not patterns:
        return names
    wanted: list[str] = []
    for pattern in patterns:
        matching = [n for n in names if fnmatchcase(n, pattern)]
        if not matching:
            near = difflib.get_close_matches(pattern, names, n=1)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise UsageError(f"no {what} matches {pattern!r}{hint}; known are {', '.join(names)}")
        wanted += [n for n in matching if n not in wanted]
    return wanted


def _variables(method: Method, equations: Equations, asked: bool) -> list[str]:
    """The independent variables that are tried: the equations' first that the method takes.

    Where the equations were asked for by name, all of them.
    """
    there = [v for v in equations.variables if not method.variables or v in method.variables]
    return there if asked else there[:1]


def jobs_of(
    methods: Sequence[str] = (),
    equations: Sequence[str] = (),
    problems: Sequence[str] = (),
    *,
    quick: bool = False,
) -> list[Job]:
    """Every combination that makes sense, ordered so that a method's runs stand together.

    Parameters
    ----------
    methods, equations, problems : sequence of str
        Names or patterns with * and ?; empty for all (a few with ``quick``).

    Raises
    ------
    UsageError
        For a pattern that matches nothing, or if no combination remains.
    """
    from truefall.integrators import EQUATIONS, METHODS

    known = [e.name for e in EQUATIONS.values() if e.chart != "none"]
    if quick:
        methods = methods or [m for m in _QUICK_METHODS if m in METHODS]
        problems = problems or _QUICK_PROBLEMS
    by_name = {p.name: p for p in PROBLEMS}
    picked = _chosen(equations, known, "set of equations")
    jobs = []
    for name in _chosen(methods, METHODS, "method"):
        method = METHODS[name]
        for place in _chosen(problems, by_name, "case"):
            fitting = [e for e in picked if not method.equations or e in method.equations]
            for e in fitting[:1] if quick and not equations else fitting:
                truth = truth_of(by_name[place], EQUATIONS[e])
                if truth is None:
                    continue
                controls = controls_of(method, truth, quick)
                jobs += [
                    Job(by_name[place], e, variable, name, controls)
                    for variable in _variables(method, EQUATIONS[e], bool(equations))
                ]
    if not jobs:
        raise UsageError("no such method can run those cases in those equations")
    return jobs
