"""The orbit drawn in its own plane and from the side, with the landmarks of the hole."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.report.style import EXPECTED, GUARD, OBTAINED, length_scale, readable
from truefall.validate.report.text import units_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from truefall.validate.check import CheckResult

__all__ = ["draw_orbit"]

Floats = npt.NDArray[np.float64]
_LINE_POINTS = 4000
_DOTS = 120
_DENSE = 60  # samples from which the expected ones are joined by a line


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
    axes = np.column_stack([first, np.cross(normal, first), normal])
    return np.asarray(points @ axes)


def _circles(result: CheckResult) -> list[tuple[str, float, str]]:
    """Name, chart radius (file's length) and line style of the circles worth drawing."""
    from truefall.reference.charts import chart_radius
    from truefall.reference.units import length_in

    spec, orbit = result.spec, result.orbit
    assert spec is not None
    assert orbit is not None
    length = length_in(spec.system, spec.gm)
    areal = [("photon sphere", 3.0, ":")]
    turns = (("periapsis", orbit.periapsis, "--"), ("apoapsis", orbit.apoapsis, "-."))
    areal += [(name, b.value / length, style) for name, b, style in turns if b is not None]
    return [(name, float(chart_radius(spec.chart, r)) * length, style) for name, r, style in areal]


def _horizon(result: CheckResult) -> float:
    from truefall.reference.charts import chart_radius
    from truefall.reference.units import length_in

    assert result.spec is not None
    spec = result.spec
    return float(chart_radius(spec.chart, 2.0)) * length_in(spec.system, spec.gm)


def _every(n: int, most: int) -> slice:
    return slice(None, None, max(1, -(-n // most)))


def draw_orbit(axes: Axes, side: Axes, result: CheckResult) -> None:
    """Expected and obtained positions, from above and from the side."""
    expected, trajectory, spec = result.expected, result.trajectory, result.spec
    assert expected is not None
    assert trajectory is not None
    assert spec is not None
    true = _plane(result, expected.position)
    seen = _plane(result, trajectory.position)
    size = float(max(np.abs(true).max(), np.abs(seen).max()))
    factor, unit = length_scale(size, units_of(spec.system)["length"])
    true, seen, size = true / factor, seen / factor, size / factor
    dense = len(true) >= _DENSE
    line: dict[str, Any] = {"color": EXPECTED, "lw": 1.2, "label": "expected"}
    if not dense:
        line |= {"ls": "none", "marker": "o", "ms": 6.0, "fillstyle": "none"}
    dots = {"color": OBTAINED, "ls": "none", "marker": ".", "ms": 4.0, "label": "obtained"}
    every, some = _every(len(true), _LINE_POINTS), _every(len(seen), _DOTS)
    for panel, up in ((axes, 1), (side, 2)):
        panel.plot(true[every, 0], true[every, up], **line)
        panel.plot(seen[some, 0], seen[some, up], **dots)  # type: ignore[arg-type]
        panel.set_xlabel(f"along the start's radius / {readable(unit)}")
    axes.plot(*true[0, :2], color=EXPECTED, marker="s", ms=6, fillstyle="none", ls="none",
              label="first row")  # fmt: skip
    _draw_landmarks(axes, side, result, factor, size)
    axes.set_aspect("equal", adjustable="datalim")
    axes.set_ylabel(f"across it / {readable(unit)}")
    axes.set_title("in the orbit's plane")
    width = 1.1 * max(float(np.abs(seen[:, 2]).max()), 1e-3 * size)
    side.set_ylim(-width, width)
    side.set_ylabel(f"out of the plane / {readable(unit)}")
    side.set_title("from the side, out of the plane enlarged")
    handles, labels = axes.get_legend_handles_labels()
    side.legend(handles, labels, loc="upper center", ncols=2, edgecolor="none")


def _draw_landmarks(
    axes: Axes, side: Axes, result: CheckResult, factor: float, size: float
) -> None:
    from matplotlib.patches import Circle

    horizon = _horizon(result) / factor
    if horizon > 5e-3 * size:
        disc = Circle((0, 0), horizon, facecolor="0.8", edgecolor="black", lw=1.0, zorder=0)
        axes.add_patch(disc)
        axes.plot([], [], "o", color="0.8", mec="black", label="horizon")
        side.axvspan(-horizon, horizon, color="0.8", lw=0, zorder=0)
    else:
        axes.plot([0], [0], "k+", ms=8, label="centre")
    for name, radius, style in _circles(result):
        drawn = radius / factor
        if not 5e-3 * size < drawn <= 1.5 * size:
            continue
        axes.add_patch(
            Circle((0, 0), drawn, fill=False, edgecolor=GUARD, ls=style, lw=0.9, zorder=0)
        )
        axes.plot([], [], color=GUARD, ls=style, lw=0.9, label=name)
