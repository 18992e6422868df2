"""Causes as people see them: lines of text, and a picture of the residual without each."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.report.style import GUARD, OBTAINED, POSITION, log_axis, readable, time_scale

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["findings_json", "findings_lines", "write_findings_figures"]

_WIDTH = 80
#: A share of less than this below 1 is shown by what is left.
_NEARLY = 1e-3


def _share(explains: float) -> str:
    """How much of the squared residual a cause removes, in words."""
    if explains >= 1.0:
        return "removes all of the squared residual"
    if explains > 1.0 - _NEARLY:
        return f"removes all but {1 - explains:.1e} of the squared residual"
    if explains < _NEARLY:
        return f"removes {explains:.1e} of the squared residual"
    return f"removes {100 * explains:.1f} % of the squared residual"


def _block(label: str, text: str) -> list[str]:
    return textwrap.wrap(
        text, _WIDTH, initial_indent=f"  {label:<10}", subsequent_indent=" " * 12,
        break_long_words=False,
    )  # fmt: skip


def findings_lines(result: CheckResult, *, quiet: bool = True) -> list[str]:
    """The causes of a residual, or the residual in words; at most 80 columns.

    ``quiet`` leaves out that there was nothing to explain.
    """
    explanation = result.explanation
    if explanation is None:
        return []
    lines: list[str] = []
    for k, finding in enumerate(explanation.findings):
        lines += _block("cause" if k == 0 else "", finding.text)
        lines += _block("", f"({finding.cause}, {finding.family}; {_share(finding.explains)})")
        lines += _block("", f"look at: {finding.look_at}")
    for group in explanation.ambiguous:
        names = ", ".join(sorted(group))
        lines += _block("", f"this arc cannot tell these causes apart: {names}")
    if explanation.description and not (quiet and not explanation.unexplained):
        lines += _block("" if explanation.findings else "cause", explanation.description)
    return lines


def findings_json(result: CheckResult) -> dict[str, Any]:
    """``findings``, and beside them what the explanation says as a whole."""
    explanation = result.explanation
    if explanation is None:
        return {"findings": [], "explanation": None}
    return {
        "findings": [f.as_json() for f in explanation.findings],
        "explanation": {
            "description": explanation.description or None,
            "ambiguous": [sorted(group) for group in explanation.ambiguous],
        },
    }


def _rows(result: CheckResult, explained: int) -> npt.NDArray[np.int64]:
    """The rows that were explained: all, or of a long file evenly chosen ones."""
    assert result.comparison is not None
    total = result.comparison.time.size
    return np.unique(np.linspace(0, total - 1, explained).astype(np.int64))


def write_findings_figures(result: CheckResult, directory: Path, stem: str) -> list[Path]:
    """Write ``<stem>-cause-<k>-<name>.png`` for each finding: the residual before and after."""
    explanation = result.explanation
    if explanation is None or result.comparison is None or result.spec is None:
        return []
    import matplotlib as mpl
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    from truefall.validate.report.text import units_of

    units = units_of(result.spec.system)
    everything = result.comparison.time
    factor, unit = time_scale(float(np.ptp(everything)), units["time"])
    guards = result.comparison.position_guard.total
    written = []
    style: Any = {"font.size": 9.5, "axes.titlesize": 10.5, "legend.fontsize": 9,
                  "axes.spines.top": False, "axes.spines.right": False}  # fmt: skip
    with mpl.rc_context(style):
        for k, finding in enumerate(explanation.findings, 1):
            rows = _rows(result, finding.before.size)
            time, guard = everything[rows], guards[rows]
            figure = Figure(figsize=(7.6, 3.9), layout="constrained")
            FigureCanvasAgg(figure)
            axes = figure.subplots()
            for values, colour, label in (
                (finding.before, POSITION, "residual before"),
                (finding.after, OBTAINED, "residual after"),
            ):
                shown = np.where(values > 0, values, np.nan)
                marker = "." if time.size < 100 else None
                axes.plot(time / factor, shown, color=colour, lw=1.2, label=label, marker=marker)
            if np.any(guard > 0) and guard.max() > 1e-4 * np.nanmax(finding.after):
                axes.plot(
                    time / factor, np.where(guard > 0, guard, np.nan), color=GUARD, lw=1.0, ls="--",
                    label="guard w",
                )  # fmt: skip
            log_axis(axes, np.concatenate([finding.before, finding.after]), None, None)
            axes.set_xlabel(f"{result.spec.clock} time / {readable(unit)}")
            axes.set_ylabel(f"position / {readable(units['length'])}")
            title = "\n".join(textwrap.wrap(finding.text, 88)[:3]).replace("$", r"\$")
            axes.set_title(title, loc="left")
            axes.legend(ncols=3, loc="upper center", bbox_to_anchor=(0.5, -0.2), frameon=False)
            path = directory / f"{stem}-cause-{k}-{finding.cause}.png"
            figure.savefig(path, dpi=140, metadata={"Software": "truefall"})
            written.append(path)
    return written
