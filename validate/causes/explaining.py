"""The explanation of a check: findings in the file's units, recomputed exactly."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.characters import character
from truefall.validate.causes.describing import describe
from truefall.validate.causes.engine import Candidate, Search, choose, shares, spread_of
from truefall.validate.causes.fault import Fault, Fitted
from truefall.validate.causes.finding import Explanation, Finding, Value
from truefall.validate.causes.fitting import Problem, fit
from truefall.validate.causes.order import with_order
from truefall.validate.causes.plan import exact_flight, first_plan
from truefall.validate.causes.scene import Scene, scene_of

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["explanation_of"]

Floats = npt.NDArray[np.float64]
_EXACT_ROWS = 400


def explanation_of(
    result: CheckResult,
    progress: Callable[[str], None] | None = None,
    second_file: CheckResult | None = None,
) -> Explanation:
    """Why a trajectory disagrees, as far as the known causes tell."""
    with np.errstate(all="ignore"):  # flights that go nowhere give NaN, which count as unexplained
        found = _explanation(result, progress)
        if second_file is not None:
            found = with_order(found, result, second_file)
        return found


def _explanation(result: CheckResult, progress: Callable[[str], None] | None) -> Explanation:
    scene = scene_of(result)
    if scene is None:
        return Explanation(description="there is no residual to explain")
    if scene.usable.sum() < 6:
        return Explanation(description="there are too few rows to tell causes apart")
    search = Search(scene, progress)
    if search.problem.rows.size < 6:
        return Explanation(description=describe(scene), unexplained=True)
    if search.nothing.misfit <= 1.0:
        return Explanation(description="the residual is within what digits and rounding leave open")
    chosen, alike = choose(search)
    if chosen is None or (chosen.numerical and len(chosen.fit.faults) == 1):
        return _numerical(search, chosen)
    findings: list[Finding] = []
    for candidate in [chosen, *alike]:
        findings += _findings(search, candidate, refine=True)
    ambiguous: tuple[frozenset[str], ...] = ()
    if alike:
        ambiguous = (frozenset(f.cause for f in findings),)
    return Explanation(
        findings=tuple(findings),
        ambiguous=ambiguous,
        remainder=findings[-1].after if not alike else findings[0].after,
    )


def _numerical(search: Search, method: Candidate | None) -> Explanation:
    """The numerical character of the residual, or the residual in words."""
    after = None if method is None else _findings(search, method, refine=False)[0].after
    found = character(search, method, after)
    if found is None:
        return Explanation(description=describe(search.scene), unexplained=True)
    return Explanation(findings=(found,), remainder=found.after)


def _is_geodesic(scene: Scene, faults: tuple[Fault, ...], numbers: Floats) -> bool:
    plan, used = first_plan(scene), 0
    for fault in faults:
        share = numbers[used : used + len(fault.parameters)]
        plan = fault.apply(plan, scene, tuple(share.tolist()))
        used += share.size
    return plan.law.geodesic


def _findings(search: Search, candidate: Candidate, *, refine: bool) -> list[Finding]:
    """The findings of a candidate, one for each cause, over all rows."""
    scene = search.scene
    faults = candidate.fit.faults
    found = candidate.fit
    whole = np.arange(len(scene))
    flyer = exact_flight if _is_geodesic(scene, faults, found.numbers) else None
    if refine and flyer is not None:
        rows = search.problem.rows
        exact = Problem(scene, rows, flyer)
        again = fit(exact, faults, numbers=found.numbers, iterations=1)
        if again is not None and np.isfinite(again.cost) and again.cost <= 1.5 * found.cost:
            found = again
    spreads = spread_of(search.problem, found)
    parts = shares(search, candidate)
    everything = Problem(scene, whole, flyer)
    findings = []
    before = np.linalg.norm(scene.residual.position, axis=1) * scene.length
    used = 0
    for k, fault in enumerate(faults):
        numbers = found.numbers[used : used + len(fault.parameters)]
        used += numbers.size
        changed = everything.changes(faults[: k + 1], found.numbers[:used])[0]
        after = np.linalg.norm(scene.residual.position - changed, axis=1) * scene.length
        after = np.where(np.isfinite(after), after, before)
        fitted = Fitted(
            scene, tuple(numbers.tolist()), tuple(spreads[k].tolist()), fault.parameters
        )
        values = {p.name: fitted.value(i) for i, p in enumerate(fault.parameters)}
        if fault.numerical:
            values = {}
        if fault.choices and fault.label and not fault.numerical:
            values["which"] = Value(fault.label, None, "1")
        text = fault.say(fitted)
        if candidate.twins and k == len(faults) - 1 and not fault.numerical:
            text += f" (on this arc not to be told from: {'; '.join(candidate.twins[:3])})"
        findings.append(
            Finding(
                cause=fault.cause,
                family=fault.family,
                explains=parts[k],
                parameters=values,
                text=text,
                look_at=fault.look_at,
                before=before,
                after=after,
            )
        )
        before = after
    return findings
