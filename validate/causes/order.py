"""The order of a method, from two runs whose steps differ."""

from __future__ import annotations

from dataclasses import replace
from math import log
from typing import TYPE_CHECKING

import numpy as np

from truefall.validate.causes.finding import Explanation, Finding, Value

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["with_order"]


def _ratio(first: CheckResult, second: CheckResult) -> float | None:
    """Median ratio of the errors at time stamps that both runs have."""
    if first.comparison is None or second.comparison is None:
        return None
    a, b = first.comparison, second.comparison
    _, here, there = np.intersect1d(a.time, b.time, return_indices=True)
    one, two = a.distance[here], b.distance[there]
    good = (one > 10 * a.position_guard.total[here]) & (two > 10 * b.position_guard.total[there])
    if good.sum() < 4:
        return None
    return float(np.median(one[good] / two[good]))


def with_order(found: Explanation, result: CheckResult, second: CheckResult) -> Explanation:
    """The explanation with the error's order, where a too long step is its first finding.

    The second run's step is taken to be half of the first one's, or twice it: which, the errors
    tell.
    """
    ratio = _ratio(result, second)
    if not found.findings or found.findings[0].cause != "step-too-large" or ratio is None:
        return found
    order = abs(log(ratio)) / log(2)
    first: Finding = replace(
        found.findings[0],
        parameters={**found.findings[0].parameters, "order": Value(order, None, "1")},
        text=found.findings[0].text
        + f"; errors differ {max(ratio, 1 / ratio):.3g} times between the two runs: order "
        f"{order:.1f} if one step is half of the other",
    )
    return replace(found, findings=(first, *found.findings[1:]))
