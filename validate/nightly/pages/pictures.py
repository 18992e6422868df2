"""Small pictures as SVG inside the page: an error over time, and over the nights.

Plain geometry in a fixed box; colours come from the page's style, so that they follow light and
dark.  Every picture carries its words for those who cannot see it.
"""

from __future__ import annotations

import html
import math
from collections.abc import Sequence
from itertools import pairwise
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from truefall.validate.nightly.record import CaseRecord, Trend

__all__ = ["error_picture", "trend_picture"]

_WIDTH, _HEIGHT, _EDGE = 132, 36, 3


def _logs(values: Sequence[float]) -> list[float | None]:
    """Logarithms of what is positive and finite."""
    return [math.log10(v) if v > 0 and math.isfinite(v) else None for v in values]


class _Box:
    """From numbers to the box's coordinates."""

    def __init__(self, left: float, right: float, low: float, high: float) -> None:
        self.left, self.low = left, low
        self.across = (_WIDTH - 2 * _EDGE) / (right - left if right > left else 1.0)
        self.up = (_HEIGHT - 2 * _EDGE) / (high - low if high > low else 1.0)

    def x(self, value: float) -> str:
        return f"{_EDGE + (value - self.left) * self.across:.1f}".removesuffix(".0")

    def y(self, value: float) -> str:
        return f"{_HEIGHT - _EDGE - (value - self.low) * self.up:.1f}".removesuffix(".0")


def _lines(box: _Box, xs: Sequence[float], ys: Sequence[float | None]) -> str:
    """Polylines with gaps where there is no value; a single value becomes a dot."""
    parts: list[str] = []
    run: list[str] = []
    for x, y in [*zip(xs, ys, strict=True), (0.0, None)]:
        if y is not None:
            run.append(f"{box.x(x)},{box.y(y)}")
            continue
        if len(run) > 1:
            parts.append(f'<polyline class="line" points="{" ".join(run)}"/>')
        elif run:
            cx, cy = run[0].split(",")
            parts.append(f'<circle class="dot" cx="{cx}" cy="{cy}" r="1.6"/>')
        run = []
    return "".join(parts)


def _frame(inside: str, words: str) -> str:
    label = html.escape(words, quote=True)
    return (
        f'<svg class="picture" role="img" aria-label="{label}" width="{_WIDTH}" height="{_HEIGHT}" '
        f'viewBox="0 0 {_WIDTH} {_HEIGHT}"><title>{label}</title>{inside}</svg>'
    )


def error_picture(case: CaseRecord) -> str:
    """Position error over time on a logarithmic scale, with the budget as a line; "" for none."""
    times, errors = case.curve
    logs = _logs(errors)
    seen = [v for v in logs if v is not None]
    if not seen:
        return ""
    budget = case.budget.get("position")
    limit = math.log10(budget) if budget and budget > 0 else None
    # what lies many decades under the largest error would squeeze the rest
    high = max([*seen, limit] if limit is not None else seen)
    low = max(min(seen), max(seen) - 8)
    if limit is not None:
        low = min(low, limit)
    box = _Box(min(times), max(times), low, high)
    shown = [None if v is None else max(v, low) for v in logs]
    line = ""
    words = "position error over time"
    if limit is not None:
        y = box.y(limit)
        line = f'<line class="limit" x1="0" x2="{_WIDTH}" y1="{y}" y2="{y}"/>'
        words += ", dashed: the budget"
    words += f"; largest {max(errors):.1e}"
    return _frame(line + _lines(box, times, shown), words)


def trend_picture(case: CaseRecord, trend: Trend | None) -> str:
    """Largest position error over the nights, a gap and a mark at each new segment."""
    if trend is None or not len(trend.nights):
        return ""
    nights = [float(n) for n in trend.nights]
    logs = _logs([float(v) for v in trend.error])
    seen = [v for v in logs if v is not None]
    if not seen:
        return ""
    budget = case.budget.get("position")
    low, high = min(seen), max(seen)
    if high - low < 1:  # a decade at least, or noise would look like a trend
        middle = 0.5 * (low + high)
        low, high = middle - 0.5, middle + 0.5
    box = _Box(nights[0], nights[-1], low, high)
    marks = ""
    segments = [int(s) for s in trend.segments]
    xs: list[float] = []
    ys: list[float | None] = []
    for k, (night, value) in enumerate(zip(nights, logs, strict=True)):
        if k and segments[k] != segments[k - 1]:
            x = box.x(night)
            marks += f'<line class="break" x1="{x}" x2="{x}" y1="0" y2="{_HEIGHT}"/>'
            xs.append(night)
            ys.append(None)
        xs.append(night)
        ys.append(value)
    line = ""
    if budget and low <= math.log10(budget) <= high:
        y = box.y(math.log10(budget))
        line = f'<line class="limit" x1="0" x2="{_WIDTH}" y1="{y}" y2="{y}"/>'
    breaks = sum(a != b for a, b in pairwise(segments))
    words = (
        f"largest position error over {len(nights)} nights, from {min(10**v for v in seen):.1e} to "
        f"{max(10**v for v in seen):.1e}"
    )
    if breaks:
        words += f"; {breaks} new segment{'s' if breaks > 1 else ''}, marked by dotted lines"
    return _frame(marks + line + _lines(box, xs, ys), words)
