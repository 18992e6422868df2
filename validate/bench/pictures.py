"""Work-precision pictures of each case, and drifts over long runs."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from truefall.validate.bench.measure import Measured

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from truefall.validate.bench.drifts import Drifting

__all__ = ["draw_drifts", "draw_work"]

#: Okabe & Ito's palette; kinds are told by their dashes and markers as well.
_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
_MARKERS = "osD^vP*X<>"
_DASHES: tuple[Any, ...] = ("-", "--", "-.", ":", (0, (5, 1, 1, 1, 1, 1)))
_MOST_CURVES = 16
_STYLE: Any = {
    "font.size": 10, "axes.titlesize": 11, "legend.fontsize": 9, "axes.spines.top": False,
    "axes.spines.right": False,
}  # fmt: skip


def _curves(rows: Sequence[Measured]) -> dict[tuple[str, str, str], list[Measured]]:
    """Runs by method, equations and variable; of many, the best for their work."""
    curves: dict[tuple[str, str, str], list[Measured]] = {}
    for row in rows:
        if 0 < row.position < 1:
            curves.setdefault((row.method, row.equations, row.variable), []).append(row)

    def cost(key: tuple[str, str, str]) -> float:
        """Log of evaluations times error at the best run: small is good."""
        return float(min(np.log(m.evaluations) * 6 + np.log(m.position) for m in curves[key]))

    # the best of each kind of method first, then whatever is good
    kinds: dict[str, tuple[str, str, str]] = {}
    for key in sorted(curves, key=cost):
        kinds.setdefault(_kind(key[0]), key)
    chosen = list(kinds.values())[:_MOST_CURVES]
    for key in sorted(curves, key=cost):
        if len(chosen) < _MOST_CURVES and key not in chosen and len(curves) <= _MOST_CURVES:
            chosen.append(key)
    return {key: curves[key] for key in chosen}


def _kind(method: str) -> str:
    """The kind of a method: its name without order and composition."""
    words = method.split("-")
    if words[0] in ("four", "three", "extended", "time", "mino", "gauss"):
        return "-".join(words[:2])
    return method


def _label(key: tuple[str, str, str]) -> str:
    method, equations, variable = key
    return f"{method} ({equations}, {variable})"


def _one(axes: Axes, curves: dict[tuple[str, str, str], list[Measured]], cost: str) -> None:
    for k, (key, several) in enumerate(curves.items()):
        runs = sorted(several, key=lambda m: m.control)
        axes.plot(
            [getattr(m, cost) for m in runs], [m.position for m in runs],
            color=_COLOURS[k % len(_COLOURS)], ls=_DASHES[k // len(_COLOURS) % len(_DASHES)],
            marker=_MARKERS[k % len(_MARKERS)], ms=5, lw=1.3, label=_label(key),
        )  # fmt: skip
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.grid(True, which="major", color="0.9", lw=0.6)
    axes.set_xlabel("evaluations (taylor: series)" if cost == "evaluations" else "time / s")


def _figure(width: float, height: float) -> Any:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def draw_work(problem: str, why: str, rows: Sequence[Measured], path: Path) -> bool:
    """Error against evaluations and against time for one case; False if there is nothing."""
    curves = _curves([m for m in rows if m.problem == problem])
    if not curves:
        return False
    import matplotlib as mpl

    with mpl.rc_context(_STYLE):
        figure = _figure(9.2, 4.2 + 0.24 * ((len(curves) + 1) // 2))
        left, right = figure.subplots(1, 2, sharey=True)
        _one(left, curves, "evaluations")
        _one(right, curves, "seconds")
        left.set_ylabel("largest position error / size")
        handles, labels = left.get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=2, frameon=False)
        figure.suptitle(f"{problem}: {why}", fontsize=11, fontweight="bold")
        figure.savefig(path, dpi=110)
    return True


def draw_drifts(drifts: Sequence[Drifting], path: Path) -> bool:
    """Position error and energy drift over long runs."""
    if not drifts:
        return False
    import matplotlib as mpl

    with mpl.rc_context(_STYLE):
        figure = _figure(9.2, 4.8)
        left, right = figure.subplots(1, 2)
        for axes, name, title in (
            (left, "position", "position error / size"), (right, "energy", "energy drift"),
        ):  # fmt: skip
            for k, drift in enumerate(drifts):
                values = getattr(drift, name)
                style: dict[str, Any] = {
                    "color": _COLOURS[k % len(_COLOURS)],
                    "ls": _DASHES[k % len(_DASHES)],
                    "lw": 1.2,
                }
                label = f"{drift.method} ({drift.equations})"
                axes.plot(drift.time, np.where(values > 0, values, np.nan), label=label, **style)
            axes.set_xscale("log")
            axes.set_yscale("log")
            axes.grid(True, which="major", color="0.9", lw=0.6)
            axes.set_xlabel("radial periods")
            axes.set_title(title)
        handles, labels = left.get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=2, frameon=False)
        figure.suptitle("long runs on p = 10, e = 0.3", fontsize=11, fontweight="bold")
        figure.savefig(path, dpi=110)
    return True
