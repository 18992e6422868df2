"""What a bench run says to a person with one minute: a page of text, and the same as HTML."""

from __future__ import annotations

import html
import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from truefall.validate.bench.measure import Measured
from truefall.validate.bench.problems import PROBLEMS
from truefall.validate.bench.results import orders_of

if TYPE_CHECKING:
    from truefall.validate.bench.drifts import Drifting

__all__ = ["page", "text"]

_MOST = 5
#: Accuracies at which the cheapest methods are named.
_LEVELS = (1e-6, 1e-9, 1e-12)


def _name(row: Measured) -> str:
    return f"{row.method}, {row.equations} ({row.variable})"


def _time(seconds: float) -> str:
    if seconds < 1e-3:
        return f"{seconds * 1e6:.0f} us"
    return f"{seconds * 1e3:.1f} ms" if seconds < 1 else f"{seconds:.1f} s"


def _cheapest(rows: Sequence[Measured], level: float) -> list[Measured]:
    """The cheapest run of each method that is at least so accurate, in order of time."""
    best: dict[str, Measured] = {}
    for row in rows:
        if row.position <= level and row.status == "finished":
            kept = best.get(row.method)
            if kept is None or row.seconds < kept.seconds:
                best[row.method] = row
    return sorted(best.values(), key=lambda m: m.seconds)[:_MOST]


def _case(problem: str, why: str, rows: Sequence[Measured]) -> list[str]:
    mine = [m for m in rows if m.problem == problem]
    lines = [f"{problem}: {why}"]
    for level in _LEVELS:
        found = _cheapest(mine, level)
        if not found:
            continue
        lines.append(f"  position within {level:.0e} of its size, quickest first")
        for m in found:
            lines.append(
                f"    {_name(m):<58}{_time(m.seconds):>9}{m.evaluations:>9} evaluations  "
                f"{m.position:.0e}"
            )
    best = min((m for m in mine if math.isfinite(m.position)), key=lambda m: m.position,
               default=None)  # fmt: skip
    if best is not None:
        lines.append(f"  most accurate: {_name(best)}, {best.position:.1e}")
    rates = [m.growth for m in mine if math.isfinite(m.growth)]
    rate = next(p.rate for p in PROBLEMS if p.name == problem)
    if rate is not None and rates:
        middle = sorted(rates)[len(rates) // 2]
        lines.append(
            f"  errors grow at the rate {middle:.4f} (median of {len(rates)} runs); exact "
            f"{rate:.4f}"
        )
    failed = sorted({f"{m.method} ({m.equations}): {m.status}" for m in mine
                     if m.status != "finished"})  # fmt: skip
    if failed:
        shown = "; ".join(failed[:4]) + (f"; and {len(failed) - 4} more" if failed[4:] else "")
        lines.append(f"  did not reach the end: {shown}")
    return lines


def _order_lines(rows: Sequence[Measured]) -> list[str]:
    """Methods whose measured order is off the nominal one, and how many are not."""
    from truefall.integrators import METHODS

    off, good = [], 0
    for (problem, equations, variable, method), order in orders_of(rows).items():
        nominal = METHODS[method].order
        if problem != "bound-strong" or nominal is None:
            continue
        if abs(order - nominal) <= 0.3:
            good += 1
        else:
            off.append(f"{method} ({equations}, {variable}): {order:.1f} for {nominal}")
    if not good and not off:
        return []
    lines = [f"order on bound-strong: {good} combinations within 0.3 of their nominal order"]
    lines += [f"  not within 0.3 of nominal: {line}" for line in off[:6]]
    if off[6:]:
        lines.append(f"  and {len(off) - 6} more")
    return lines


def text(
    rows: Sequence[Measured], drifts: Sequence[Drifting], environment: Mapping[str, str]
) -> str:
    """The page for a terminal."""
    methods, cases = {m.method for m in rows}, [p for p in PROBLEMS if any(
        m.problem == p.name for m in rows)]  # fmt: skip
    lines = [
        f"BENCH  {len(rows)} runs: {len(methods)} methods, {len(cases)} cases, "
        f"{environment.get('cores', '?')} cores",
    ]
    for problem in cases:
        lines += ["", *_case(problem.name, problem.why, rows)]
    orders = _order_lines(rows)
    if orders:
        lines += ["", *orders]
    if drifts:
        lines += ["", f"long runs, {drifts[0].time[-1]:.0f} radial periods of p = 10, e = 0.3"]
        for d in drifts:
            lines.append(
                f"  {d.method + ', ' + d.equations:<50} position {d.position[-1]:.0e}  "
                f"energy {d.energy.max():.0e}"
            )
    lines += [
        "",
        "An evaluation is one of the right-hand side; for taylor it is a whole series.  Times are",
        "those of a shared machine: orders of magnitude mean something, factors of two little.",
    ]
    return "\n".join(lines)


_PAGE_STYLE = """
:root { color-scheme: light dark; }
body { font: 16px/1.5 system-ui, sans-serif; max-width: 64rem; margin: 2rem auto; padding: 0 1rem; }
img { max-width: 100%; height: auto; background: white; }
pre { overflow-x: auto; font-size: .85rem; line-height: 1.4; }
"""


def page(summary: str, pictures: Mapping[str, str], files: Sequence[str]) -> str:
    """The same as HTML; ``pictures`` are captions by data URL, ``files`` links beside the page."""
    shown = "\n".join(
        f'<figure><img src="{url}" alt="{html.escape(caption)}">'
        f"<figcaption>{html.escape(caption)}</figcaption></figure>"
        for url, caption in pictures.items()
    )
    links = ", ".join(f'<a href="{html.escape(f)}">{html.escape(f)}</a>' for f in files)
    return f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>truefall bench</title>
<meta http-equiv="Content-Security-Policy"
 content="default-src 'none'; style-src 'unsafe-inline'; img-src data:">
<meta name="viewport" content="width=device-width, initial-scale=1">
<style>{_PAGE_STYLE}</style></head><body>
<h1>The integrators, held to the exact solution</h1>
<p>All figures of this run: {links}.</p>
<pre tabindex="0">{html.escape(summary)}</pre>
{shown}
</body></html>
"""
