"""From a checked trajectory to accepted causes: screening, fits, the rule of acceptance."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import log

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.fault import Fault, all_faults
from truefall.validate.causes.fitting import Fit, Problem, columns_of, fit, glance, numbers_of
from truefall.validate.causes.scene import Scene

__all__ = ["MARGIN", "Candidate", "Search", "rows_of", "score"]

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
Progress = Callable[[str], None]

_SCREEN = 200
_LIKELY = 14
#: Difference of scores that decides (Kass and Raftery 1995 call 10 very strong; from memory).
MARGIN = 12.0
#: Misfit (mean square over the floor's) that is compatible with the floor, and the share of the
#: squared residual that a mistake must remove then if the floor is the file's digits.
COMPATIBLE, _MOST = 9.0, 0.9
#: Misfit up to which a good program's rounding may reach, and the shares there, for mistakes of
#: one number and of more: rounding wanders, and the more numbers the better they follow it.
_ROUNDED, _NEARLY_ALL, _NEARLY_ALL_OF_MANY = 3e4, 0.998, 0.9995
#: The share that is overwhelming whatever remains.
_OVERWHELMING = 0.9999
#: A method's errors that leave so many times less than a mistake are believed in its place.
_VETO = 20.0
#: A mistake beside a method's errors must divide what these alone leave by this.
_BESIDE, _BESIDE_OF_MANY = 30.0, 1000.0
#: A residual explained to this share by a method's errors is called that.
_NUMERICAL = 0.5
#: Misfits within this factor are alike.
_SAME = 10.0
#: A first cause of two explains at least this share alone.
_FIRST = 0.3
#: A method's errors beside a mistake are told if they are this share of the squared residual.
_VISIBLE = 1e-6
_INDEPENDENT = 200
#: Likeness of neighbours in a remainder from which on it wanders.
_WANDERS = 0.5


@dataclass(frozen=True)
class Candidate:
    """A fit with its score: lower is better."""

    fit: Fit
    score: float
    explains: float
    misfit: float
    independent: int
    coarse: bool = False
    twins: tuple[str, ...] = ()

    @property
    def causes(self) -> tuple[str, ...]:
        return tuple(f.cause for f in self.fit.faults)

    @property
    def numerical(self) -> bool:
        return any(f.numerical for f in self.fit.faults)


def rows_of(scene: Scene, most: int = _SCREEN) -> Rows:
    """Rows to screen by: spread evenly over those that may be explained."""
    # rows that even the faultless flight does not reach, near a horizon or too far out, stay out
    usable = np.flatnonzero(scene.usable & np.isfinite(scene.base.position).all(axis=1))
    if usable.size <= most:
        return usable
    return np.asarray(usable[np.unique(np.linspace(0, usable.size - 1, most).astype(int))])


def score(problem: Problem, found: Fit) -> Candidate:
    """Schwarz's criterion (1978) with the floor as the least scatter.

    Neighbouring residuals are alike, so no more than 200 of them count as independent.
    """
    misfit = found.cost / problem.count
    explains = 1.0 - found.cost / problem.cost if problem.cost > 0 else 0.0
    independent = min(problem.count, _INDEPENDENT)
    bare = Candidate(found, 0.0, explains, misfit, independent, problem.scene.coarse)
    return replace(bare, score=_value(max(misfit, 1.0), bare))


def _value(misfit: float, candidate: Candidate) -> float:
    faults = candidate.fit.faults
    charge = sum(len(f.parameters) + f.choices for f in faults)
    return candidate.independent * log(misfit) + charge * log(candidate.independent)


class Search:
    """The search for causes of one trajectory, on some of its rows."""

    def __init__(self, scene: Scene, progress: Progress | None = None) -> None:
        self.scene, self.progress = scene, progress
        self.problem = Problem(scene, rows_of(scene))
        self.faults = [f for f in all_faults() if f.wanted(scene)]
        self.nothing = score(
            self.problem,
            Fit((), np.zeros(0), np.zeros((0, 0)), self.problem.cost, self.problem.zero),
        )

    def singles(self) -> list[Candidate]:
        """The most likely faults on their own, best first."""
        return self._best(None)

    def beside(self, first: Candidate) -> list[Candidate]:
        """The most likely faults beside known ones, all fitted together, best first."""
        return self._best(first.fit)

    def _best(self, first: Fit | None) -> list[Candidate]:
        known = () if first is None else first.faults
        numbers = None if first is None else first.numbers
        columns = None if first is None else columns_of(self.problem, first)
        rough: list[tuple[float, Fault]] = []
        family = ""
        taken = {f.cause for f in known}
        for fault in self.faults:
            if fault.cause in taken:
                continue
            if fault.family != family and self.progress is not None:
                self.progress(fault.family + (" (second pass)" if known else ""))
            family = fault.family
            rough.append((glance(self.problem, [*known, fault], numbers, columns), fault))
        rough.sort(key=lambda r: r[0] * 1.02 ** len(r[1].parameters))
        found = []
        for rank, (cost, fault) in enumerate(rough[: _LIKELY if not known else 5]):
            if rank > 5 and cost > 1e4 * rough[0][0] and cost > 0.01 * self.problem.cost:
                break
            start = None
            if known:
                assert numbers is not None
                start = np.concatenate([numbers, np.zeros(len(fault.parameters))])
            got = fit(
                self.problem, [*known, fault], numbers=start,
                iterations=2 if fault.numerical else 8,
            )  # fmt: skip
            if got is not None:
                found.append(score(self.problem, got))
        return sorted(found, key=lambda c: c.score)


def better(candidate: Candidate, other: Candidate) -> bool:
    """Whether a candidate is decidedly better than another."""
    return candidate.score + MARGIN < other.score


def earned(candidate: Candidate, before: Candidate, method: Candidate | None) -> bool:
    """Whether a mistake has earned its place.

    Parameters
    ----------
    candidate : Candidate
        With the mistake.
    before : Candidate
        Without it: nothing, or the causes found already.
    method : Candidate or None
        The errors of a method in the mistake's place.
    """
    if not better(candidate, before):
        return False
    share = 1.0 - candidate.fit.cost / before.fit.cost
    soft = method is not None and any(f.soft for f in candidate.fit.faults)
    if soft and not (better(candidate, method) and share >= _OVERWHELMING):  # type: ignore[arg-type]
        return False
    if candidate.misfit <= COMPATIBLE and candidate.coarse:
        return share >= _MOST
    if candidate.misfit <= _ROUNDED:
        many = candidate.fit.numbers.size - before.fit.numbers.size > 1
        return share >= (_NEARLY_ALL_OF_MANY if many else _NEARLY_ALL)
    vetoed = method is not None and method.fit.cost * _VETO < candidate.fit.cost
    return share >= _OVERWHELMING and not (vetoed and better(method, candidate))  # type: ignore[arg-type]


def beats_method(pair: Candidate, first: Candidate, method: Candidate) -> bool:
    """Whether a mistake beside a method's errors has earned its place.

    It must be nearly all of the residual, and leave the method less to explain by a factor that
    its own freedom does not account for.
    """
    factor = _BESIDE if first.fit.numbers.size <= 1 else _BESIDE_OF_MANY
    return (
        first.explains >= _NEARLY_ALL
        and better(pair, method)
        and pair.fit.cost * factor < method.fit.cost
    )


def distinct(candidates: Sequence[Candidate]) -> list[Candidate]:
    """The best variant of each cause; those that cannot be told from it are named beside it.

    Of variants alike the one that is registered first counts: the commoner mistake.
    """
    order = {id(f): k for k, f in enumerate(all_faults())}
    kept: list[Candidate] = []
    for causes in dict.fromkeys(c.causes for c in candidates):
        variants = [c for c in candidates if c.causes == causes and np.isfinite(c.misfit)]
        if not variants:
            continue
        least = max(1.0, _SAME * min(c.misfit for c in variants))
        same = [c for c in variants if c.misfit <= least]
        few = min(c.fit.numbers.size for c in same)
        same = [c for c in same if c.fit.numbers.size == few]
        first = min(same, key=lambda c: [order[id(f)] for f in c.fit.faults])
        labels = [c.fit.faults[-1].label for c in same if c is not first]
        kept.append(replace(first, twins=tuple(x for x in labels if x)))
    return sorted(kept, key=lambda c: c.score)


def choose(search: Search) -> tuple[Candidate | None, list[Candidate]]:
    """The accepted candidate (one or two causes), and those that it cannot be told from."""
    singles = distinct(search.singles())
    nothing = search.nothing
    mistakes = [c for c in singles if not c.numerical]
    method = next((c for c in singles if c.numerical), None)
    good = simplest([c for c in mistakes if earned(c, nothing, method)])
    best = good[0] if good else None
    rounding = nothing.misfit <= _ROUNDED  # two causes of what may be rounding are no finding
    if (best is None and not rounding) or (best is not None and best.misfit > _ROUNDED):
        pair = _pair(search, [best] if best is not None else mistakes[:2], method)
        if pair is not None and (best is None or better(pair, best)):
            return pair, []
    if best is not None:
        return best, [c for c in good[1:] if alike(best, c) and not general(c, best)]
    if method is not None and better(method, nothing) and method.explains >= _NUMERICAL:
        return method, []
    return None, []


def simplest(candidates: list[Candidate]) -> list[Candidate]:
    """The same, with those that leave no more than rounding ranked by what they are charged.

    Below a tenth of the best one's amplitude, or the floor, remainders say nothing.
    """
    if not candidates:
        return []
    least = max(1.0, _SAME * min(c.misfit for c in candidates))

    def rank(c: Candidate) -> float:
        return _value(max(c.misfit, least), c)

    ranked = sorted(candidates, key=rank)
    special = [c for c in ranked[1:] if general(ranked[0], c) and c.misfit <= least]
    return sorted(ranked, key=lambda c: c is not special[0]) if special else ranked


def alike(best: Candidate, other: Candidate) -> bool:
    """Whether an accepted candidate cannot be told from the best one."""
    return other.misfit <= max(1.0, _SAME * best.misfit)


def general(other: Candidate, best: Candidate) -> bool:
    """Whether a candidate is the best one's cause in general, which says nothing more."""
    return any(set(best.causes) & set(f.includes) for f in other.fit.faults)


def _pair(search: Search, firsts: list[Candidate], method: Candidate | None) -> Candidate | None:
    """Two causes that together explain decidedly more than one."""
    found = []
    for first in firsts:
        if first.explains < _FIRST:
            continue
        pairs = search.beside(first)
        other = next((p for p in pairs if p.numerical), None)
        for pair in pairs:
            visible = 1.0 - first.explains > _VISIBLE
            if pair.numerical:
                if visible and method is not None and beats_method(pair, first, method):
                    found.append(pair)
            elif pair.fit.faults[-1].soft and not visible:
                continue
            elif earned(pair, first, other) and (
                method is None or pair.explains >= _OVERWHELMING or better(pair, method)
            ):
                found.append(pair)
    return min(found, key=lambda c: c.score, default=None)


def shares(search: Search, candidate: Candidate) -> list[float]:
    """Share of the whole squared residual that each cause removes, in the order of the fit."""
    total, before = search.problem.cost, search.problem.cost
    found = []
    for k in range(1, len(candidate.fit.faults) + 1):
        part = candidate.fit.faults[:k]
        if k == len(candidate.fit.faults):
            cost = candidate.fit.cost
        else:
            got = fit(search.problem, part)
            cost = before if got is None else min(got.cost, before)
        found.append((before - cost) / total if total > 0 else 0.0)
        before = cost
    return found


def spread_of(problem: Problem, found: Fit) -> list[Floats]:
    """One standard deviation of each fault's numbers.

    The remainder's own scatter and the likeness of neighbours widen what the floor gives.
    """
    scatter = max(found.cost / max(problem.count - found.numbers.size, 1), 1.0)
    left = found.left[: 3 * problem.rows.size].reshape(-1, 3)
    power = float(np.sum(left * left))
    alike = 0.0 if power == 0 else float(np.sum(left[1:] * left[:-1])) / power
    alike = min(max(alike, 0.0), 0.99)
    longer = (1 + alike) / (1 - alike)
    if alike > _WANDERS or scatter > COMPATIBLE:  # what wanders says little more than its turns
        longer = max(longer, problem.rows.size / 4)
    widened = scatter * longer
    return [np.sqrt(variance * widened) for _, variance in numbers_of(found)]
