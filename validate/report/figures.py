"""Pictures of a check: the orbit from above and from the side, errors and invariants over time."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.report.text import VERDICTS, units_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from truefall.validate.check import CheckResult

__all__ = ["write_figures"]

Floats = npt.NDArray[np.float64]

# Okabe & Ito's palette, told apart with every common kind of colour vision.
_EXPECTED, _OBTAINED, _ERROR, _ALONG, _GUARD, _LIMIT = (
    "#0072B2", "#D55E00", "#000000", "#009E73", "#999999", "#CC79A7",
)  # fmt: skip
_MOST_POINTS = 4000


def _plane(result: CheckResult, points: Floats) -> Floats:
    """Components along the start's radius, across it in the orbit's plane, and out of it."""
    orbit = result.orbit
    assert orbit is not None
    first = np.array(orbit.position)
    first = first / np.linalg.norm(first)
    normal = np.array(orbit.angular_momentum_direction)
    if not normal.any():
        normal = np.cross(first, np.eye(3)[int(np.argmin(np.abs(first)))])
        normal /= np.linalg.norm(normal)
    turned: Floats = points @ np.column_stack([first, np.cross(normal, first), normal])
    return turned


def _horizon_radius(result: CheckResult) -> float:
    from truefall.reference.charts import chart_radius
    from truefall.reference.units import length_in

    spec = result.spec
    assert spec is not None
    return float(chart_radius(spec.chart, 2.0)) * length_in(spec.system, spec.gm)


def _scale(size: float, unit: str) -> tuple[float, str]:
    """A factor of a thousand that keeps the labels short."""
    if unit not in ("m", "km"):
        return 1.0, unit
    metres = size * (1000.0 if unit == "km" else 1.0)
    base = 1000.0 if unit == "km" else 1.0
    for factor, name in ((1e12, "10$^9$ km"), (1e9, "10$^6$ km"), (1e6, "10$^3$ km"), (1e3, "km")):
        if metres >= 3 * factor:
            return factor / base, name
    return 1.0 / base, "m"


def _draw_orbit(axes: Axes, side: Axes, result: CheckResult) -> None:
    from matplotlib.patches import Circle

    expected, trajectory, spec = result.expected, result.trajectory, result.spec
    assert expected is not None
    assert trajectory is not None
    assert spec is not None
    true = _plane(result, expected.position)
    seen = _plane(result, trajectory.position)
    size = float(np.abs(true).max())
    factor, unit = _scale(size, units_of(spec.system)["length"])
    true, seen = true / factor, seen / factor
    thin = slice(None, None, max(1, len(seen) // _MOST_POINTS))
    line = {"color": _EXPECTED, "lw": 1.0, "label": "expected"}
    dots = {"color": _OBTAINED, "ls": "none", "marker": ".", "ms": 3.0, "label": "obtained"}
    dense = len(true) >= 60
    if not dense:
        line |= {"ls": "none", "marker": "o", "ms": 5.0, "fillstyle": "none"}
    axes.plot(true[thin, 0], true[thin, 1], **line)  # type: ignore[arg-type]
    axes.plot(seen[thin, 0], seen[thin, 1], **dots)  # type: ignore[arg-type]
    horizon = _horizon_radius(result) / factor
    if horizon > 2e-3 * size / factor:
        axes.add_patch(Circle((0, 0), horizon, color="black", zorder=0))
    else:
        axes.plot([0], [0], "k+", ms=7)
    axes.set_aspect("equal", adjustable="datalim")
    axes.set_xlabel(f"along the start's radius / {unit}")
    axes.set_ylabel(f"across it / {unit}")
    axes.set_title("in the orbit's plane", fontsize=10)
    side.plot(true[thin, 0], true[thin, 2], **line)  # type: ignore[arg-type]
    side.plot(seen[thin, 0], seen[thin, 2], **dots)  # type: ignore[arg-type]
    width = max(float(np.abs(seen[:, 2]).max()), 1e-3 * float(np.abs(seen[:, :2]).max()))
    side.set_ylim(-1.1 * width, 1.1 * width)
    side.set_xlabel(f"along the start's radius / {unit}")
    side.set_ylabel(f"out of the plane / {unit}")
    side.set_title("from the side", fontsize=10)
    handles, labels = axes.get_legend_handles_labels()
    side.legend(handles, labels, fontsize=8, loc="upper right")


def _positive(values: Floats) -> Floats:
    """Zeros would vanish from a logarithmic axis without a word: they become gaps."""
    return np.where(values > 0, values, np.nan)


def _draw_errors(axes: Axes, result: CheckResult) -> None:
    comparison, spec = result.comparison, result.spec
    assert comparison is not None
    assert spec is not None
    unit = units_of(spec.system)
    time = comparison.time
    guard = comparison.position_guard.total
    for values, colour, label, width in (
        (comparison.distance, _ERROR, "position", 1.4),
        (np.abs(comparison.radial), _EXPECTED, "radial", 0.8),
        (np.abs(comparison.along), _ALONG, "along", 0.8),
        (np.abs(comparison.cross), _OBTAINED, "cross", 0.8),
    ):
        shown = _positive(values)
        if np.isfinite(shown).any():
            style = {"marker": ".", "ms": 3.0} if time.size < 200 else {}
            axes.plot(time, shown, color=colour, lw=width, label=label, **style)  # type: ignore[arg-type]
    if np.any(guard > 0):
        axes.plot(time, _positive(guard), color=_GUARD, lw=1.0, ls="--", label="guard w")
    for j in result.judgements:
        if j.quantity == "position":
            axes.axhline(j.tolerance, color=_LIMIT, lw=1.2, ls="-.", label="tolerance T")
    _log_axis(axes, comparison.distance)
    axes.set_ylabel(f"position error / {unit['length']}")
    axes.set_xlabel(f"{spec.clock} time / {unit['time']}")
    axes.set_title("errors over time", fontsize=10)
    axes.legend(fontsize=8, ncol=2)


def _log_axis(axes: Axes, values: Floats) -> None:
    if np.any(values > 0):
        axes.set_yscale("log")
    else:
        axes.text(0.5, 0.5, "all zero", transform=axes.transAxes, ha="center", va="center")
    axes.grid(True, which="major", color="0.9", lw=0.6)


def _draw_invariants(axes: Axes, result: CheckResult) -> None:
    comparison, spec = result.comparison, result.spec
    assert comparison is not None
    assert spec is not None
    drawn = np.zeros(1)
    for drift, colour, label in (
        (comparison.drifts.energy, _EXPECTED, "energy"),
        (comparison.drifts.angular_momentum, _OBTAINED, "angular momentum"),
        (comparison.drifts.norm, _ALONG, "norm"),
    ):
        if drift is None:
            continue
        values = np.abs(drift.values)
        drawn = np.append(drawn, values)
        axes.plot(comparison.time, _positive(values), color=colour, lw=1.0, label=label)
        axes.plot(comparison.time, _positive(drift.guard), color=colour, lw=0.8, ls=":")
    if drawn.size == 1:
        axes.text(0.5, 0.5, "no velocities in the file", transform=axes.transAxes, ha="center")
    else:
        _log_axis(axes, drawn)
        axes.legend(fontsize=8)
    axes.set_ylabel("relative drift")
    axes.set_xlabel(f"{spec.clock} time / {units_of(spec.system)['time']}")
    axes.set_title("invariants over time (dotted: what the digits allow)", fontsize=10)


def write_figures(result: CheckResult, directory: Path, stem: str) -> list[Path]:
    """Write ``<stem>.png``; nothing for a result without a comparison.

    Returns
    -------
    list of Path
        The pictures written.
    """
    if result.comparison is None:
        return []
    import matplotlib as mpl

    mpl.use("Agg")
    from matplotlib.figure import Figure

    with mpl.rc_context({"font.size": 9, "axes.spines.top": False, "axes.spines.right": False}):
        figure: Any = Figure(figsize=(11, 8), layout="constrained")
        grid = figure.subplots(2, 2, width_ratios=[1, 1.1])
        _draw_orbit(grid[0, 0], grid[1, 0], result)
        _draw_errors(grid[0, 1], result)
        _draw_invariants(grid[1, 1], result)
        word = VERDICTS[result.verdict][0]
        assert result.orbit is not None
        figure.suptitle(f"{result.name}: {word}   ({result.orbit.orbit_class})", fontsize=12)
        path = directory / f"{stem}.png"
        figure.savefig(path, dpi=110, metadata={"Software": "truefall"})
    return [path]
