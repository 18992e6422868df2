"""Why a trajectory disagrees: ranked causes of its residual, or the residual in words.

``explain`` tries every fault of ``families/`` (one small file a family, see DEVELOPERS.md,
"Adding a cause").  Nothing heavy is imported before it is called.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from truefall.validate.causes.finding import FAMILIES, Explanation, Finding, Value

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["FAMILIES", "Explanation", "Finding", "Value", "explain"]


def explain(
    result: CheckResult,
    *,
    progress: Callable[[str], None] | None = None,
    second_file: CheckResult | None = None,
) -> Explanation:
    """Ranked causes of the residual of a checked trajectory.

    Parameters
    ----------
    result : CheckResult
    progress : callable, optional
        Told the family that is being tried.
    second_file : CheckResult, optional
        The same run with another step: then the order of its method is told.

    Returns
    -------
    Explanation
    """
    from truefall.validate.causes.explaining import explanation_of
    from truefall.validate.causes.unstable import with_instability

    return with_instability(explanation_of(result, progress, second_file), result)
