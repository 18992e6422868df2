"""Orbits on which every small disturbance grows in the same way: no cause alone can be blamed."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from truefall.validate.causes.finding import Explanation

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["with_instability"]

_CLASSES = frozenset({"circular-unstable", "asymptotic", "critical"})
#: Families whose causes disturb an orbit a little, and so only set its instability off.
_FAMILIES = frozenset({"constants", "forces", "start", "clock"})
#: What sets it off in any program.
_ALWAYS = frozenset({"round-off", "start-perturbed", "step-too-large"})
#: Share of the distance from the mass up to which a residual is a small disturbance grown.
_SMALL = 0.05


def with_instability(explanation: Explanation, result: CheckResult) -> Explanation:
    """The explanation, with a warning where the orbit's own instability is what is seen.

    Along such an orbit a residual soon has the shape of its growing mode, whatever set it off: a
    constant, a force, the start, truncation, rounding.  The findings stay, ranked; they are told
    together with the others that this arc cannot tell from them.
    """
    orbit, comparison = result.orbit, result.comparison
    if orbit is None or comparison is None or orbit.orbit_class not in _CLASSES:
        return explanation
    first = explanation.findings[0] if explanation.findings else None
    fitted = first is not None and any(
        isinstance(v.value, float) for v in first.parameters.values()
    )
    if first is None or first.family not in _FAMILIES or not fitted:
        return explanation
    assert result.expected is not None
    radius = np.linalg.norm(result.expected.position, axis=1)
    if not np.nanmax(comparison.distance / radius) < _SMALL:
        return explanation
    alike = frozenset(f.cause for f in explanation.findings) | _ALWAYS
    told = replace(
        first,
        text=first.text + "; but on this unstable orbit truncation, rounding and any other small "
        "disturbance grow in the same way, and this arc cannot tell them apart",
    )
    return replace(
        explanation,
        findings=(told, *explanation.findings[1:]),
        ambiguous=(*explanation.ambiguous, alike),
    )
