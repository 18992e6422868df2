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

#: Width, height, margins left and on the other sides: in the table, and beside the worst cases.
_SMALL, _LARGE = (132, 36, 3, 3), (300, 116, 48, 6)
#: Decades below the largest error that are shown.
_DEPTH = 8


def _logs(values: Sequence[float]) -> list[float | None]:
    """Logarithms of what is positive and finite."""
    return [math.log10(v) if v > 0 and math.isfinite(v) else None for v in values]


class _Box:
    """From numbers to the coordinates of a picture."""

    def __init__(
        self, size: tuple[int, int, int, int], across: tuple[float, float],
        up: tuple[float, float],
    ) -> None:  # fmt: skip
        self.width, self.height, self.margin, self.edge = size
        (self.left, right), (self.low, self.high) = across, up
        self.across = (self.width - self.margin - self.edge) / (right - self.left or 1.0)
        self.up = (self.height - 2 * self.edge) / (self.high - self.low or 1.0)

    def x(self, value: float) -> str:
        return _short(self.margin + (value - self.left) * self.across)

    def y(self, value: float) -> str:
        return _short(self.height - self.edge - (value - self.low) * self.up)

    def level(self, value: float, kind: str) -> str:
        """A line from side to side."""
        start = 0 if self.margin == self.edge else self.margin
        y = self.y(value)
        return f'<line class="{kind}" x1="{start}" x2="{self.width}" y1="{y}" y2="{y}"/>'

    def decades(self) -> str:
        """Lines and figures at powers of ten, five at most."""
        first, last = math.ceil(self.low), math.floor(self.high)
        parts = []
        for power in range(first, last + 1, max(1, math.ceil((last - first + 1) / 5))):
            y = float(self.y(power)) + 3.5
            parts.append(self.level(power, "decade"))
            parts.append(
                f'<text x="{self.margin - 5}" y="{_short(y)}" text-anchor="end">1e{power}</text>'
            )
        return "".join(parts)

    def framed(self, inside: str, words: str) -> str:
        label = html.escape(words, quote=True)
        return (
            f'<svg class="picture" role="img" aria-label="{label}" width="{self.width}" '
            f'height="{self.height}" viewBox="0 0 {self.width} {self.height}">'
            f"<title>{label}</title>{inside}</svg>"
        )


def _short(value: float) -> str:
    return f"{value:.1f}".removesuffix(".0")


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


def _spread(times: Sequence[float]) -> tuple[Sequence[float], str]:
    """Where samples stand: at their times, or one after the other where a gap takes most."""
    span = abs(times[-1] - times[0])
    widest = max((abs(b - a) for a, b in pairwise(times)), default=0.0)
    if len(times) > 3 and widest > 0.8 * span:
        return [float(k) for k in range(len(times))], "sample by sample"
    return times, "over time"


def error_picture(case: CaseRecord, *, large: bool = False) -> str:
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
    low = max(min(seen), max(seen) - _DEPTH)
    if limit is not None:
        low = min(low, limit)
    if large and high - low < 1.2:  # two powers of ten at least
        low, high = math.floor(low), math.floor(low) + max(1.2, high - math.floor(low))
    places, along = _spread(times)
    box = _Box(_LARGE if large else _SMALL, (min(places), max(places)), (low, high))
    shown = [None if v is None else max(v, low) for v in logs]
    words = f"position error {along}"
    inside = box.decades() if large else ""
    if limit is not None:
        inside += box.level(limit, "limit")
        words += ", dashed: the budget"
    words += f"; largest {max(errors):.1e}"
    return box.framed(inside + _lines(box, places, shown), words)


def trend_picture(case: CaseRecord, trend: Trend | None) -> str:
    """Largest position error over the nights; gap and dots at each segment, ticks at bad nights."""
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
    box = _Box(_SMALL, (nights[0], nights[-1]), (low, high))
    marks = ""
    segments = [int(s) for s in trend.segments]
    xs: list[float] = []
    ys: list[float | None] = []
    for k, (night, value) in enumerate(zip(nights, logs, strict=True)):
        if k and segments[k] != segments[k - 1]:
            x = box.x(night)
            marks += f'<line class="break" x1="{x}" x2="{x}" y1="0" y2="{box.height}"/>'
            xs.append(night)
            ys.append(None)
        xs.append(night)
        ys.append(value)
    bad = [n for n, verdict in zip(nights, trend.verdicts, strict=True) if verdict != "pass"]
    if bad:
        ticks = "".join(f"M{x} {box.height}v-4" for x in dict.fromkeys(map(box.x, bad)))
        marks += f'<path class="bad" d="{ticks}"/>'
    if budget and low <= math.log10(budget) <= high:
        marks += box.level(math.log10(budget), "limit")
    breaks = sum(a != b for a, b in pairwise(segments))
    words = (
        f"largest position error in nights {nights[0]:.0f} to {nights[-1]:.0f}, from "
        f"{10 ** min(seen):.1e} to {10 ** max(seen):.1e}"
    )
    if bad:
        words += f"; no pass in {len(bad)} of {len(nights)}, marked by ticks at the bottom"
    if breaks:
        words += f"; {breaks} new segment{'s' if breaks > 1 else ''}, marked by dotted lines"
    return box.framed(marks + _lines(box, xs, ys), words)
