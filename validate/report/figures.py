"""The picture of a check: the orbit from above and from the side, errors and drifts over time."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.report.orbit_view import draw_orbit
from truefall.validate.report.style import (
    ALONG,
    CROSS,
    GUARD,
    LIMIT,
    POSITION,
    RADIAL,
    log_axis,
    readable,
    time_scale,
)
from truefall.validate.report.text import VERDICTS, units_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from truefall.validate.check import CheckResult
    from truefall.validate.compare import Comparison

__all__ = ["write_figures"]

Floats = npt.NDArray[np.float64]
#: Decades below the errors down to which a guard is drawn; deeper ones are told in words.
_NEAR = 1e-4


class _Clock:
    """The time axis of a result: factor, unit, label."""

    def __init__(self, result: CheckResult) -> None:
        assert result.comparison is not None
        assert result.spec is not None
        time = result.comparison.time
        unit = units_of(result.spec.system)["time"]
        self.factor, self.unit = time_scale(float(np.ptp(time)), unit)
        self.time = time / self.factor
        self.label = f"{result.spec.clock} time / {readable(self.unit)}"


def _tolerances(result: CheckResult, quantity: str) -> Floats | None:
    """The tightest tolerance at each row, (n,), or None."""
    comparison = result.comparison
    assert comparison is not None
    lines = [
        np.full(comparison.time.size, value)
        for name, value in result.tolerances.items()
        if name == quantity
    ] + [
        value * np.maximum(comparison.revolutions, 1.0)
        for name, value in result.tolerances.items()
        if name == f"per_revolution.{quantity}"
    ]
    return np.min(lines, axis=0) if lines else None


def _line(axes: Axes, time: Floats, values: Floats, **style: Any) -> None:
    """A curve on a logarithmic axis; zeros become gaps, few samples get dots."""
    shown = np.where(values > 0, values, np.nan)
    if not np.isfinite(shown).any():
        return
    if time.size < 100 and style.get("ls", "-") == "-":
        style |= {"marker": ".", "ms": 4.0}
    axes.plot(time, shown, **style)


def _guard_and_limit(
    axes: Axes, clock: _Clock, errors: Floats, guard: Floats, limit: Floats | None, unit: str
) -> None:
    """Guard band and tolerance; a guard far below the errors is told, not drawn."""
    positive = errors[errors > 0]
    near = not positive.size or guard.max() >= _NEAR * np.percentile(positive, 10)
    if near and np.any(guard > 0):
        axes.fill_between(clock.time, np.where(guard > 0, guard, np.nan), 0, color=GUARD, alpha=0.3)
        _line(axes, clock.time, guard, color=GUARD, lw=1.0, ls="--", label="guard w")
    elif np.any(guard > 0):
        far = f"guard w: {guard.max():.1e} {readable(unit)} at most, far below"
        axes.plot([], [], " ", label=far)
    if limit is not None:
        axes.plot(clock.time, limit, color=LIMIT, lw=1.4, ls="-.", label="tolerance T")


def _legend_below(axes: Axes, columns: int) -> None:
    """The legend under the axes, where it hides no curve."""
    axes.legend(
        ncols=columns, loc="upper center", bbox_to_anchor=(0.5, -0.2), frameon=False,
        columnspacing=1.2, handlelength=1.6,
    )  # fmt: skip


def _draw_errors(axes: Axes, result: CheckResult, clock: _Clock) -> None:
    comparison = result.comparison
    assert comparison is not None
    assert result.spec is not None
    unit = units_of(result.spec.system)["length"]
    guard = comparison.position_guard.total
    _line(axes, clock.time, comparison.distance, color=POSITION, lw=3.0, alpha=0.35, label="total")
    for values, colour, label in (
        (comparison.radial, RADIAL, "radial"),
        (comparison.along, ALONG, "along"),
        (comparison.cross, CROSS, "cross"),
    ):
        _line(axes, clock.time, np.abs(values), color=colour, lw=1.0, label=label)
    limit = _tolerances(result, "position")
    _guard_and_limit(axes, clock, comparison.distance, guard, limit, unit)
    until = result.floor.predictable_until if result.floor is not None else None
    if until is not None:
        axes.axvline(until / clock.factor, color=POSITION, lw=1.0, ls=":", label="digits end")
    log_axis(axes, comparison.distance, guard if result.judgements else None, limit)
    axes.set_ylabel(f"position error / {readable(unit)}")
    axes.set_xlabel(clock.label)
    axes.set_title("position error over time")
    _legend_below(axes, 7)


def _draw_rates(axes: Axes, result: CheckResult, clock: _Clock) -> None:
    """Velocity error on the left axis, the second clock's on the right one."""
    comparison = result.comparison
    assert comparison is not None
    assert result.spec is not None
    units = units_of(result.spec.system)
    axis: Any = axes
    named: list[str] = []
    for quantity, values, unit, colour in (
        ("velocity", comparison.velocity_error, units["speed"], RADIAL),
        ("clock", comparison.clock_error, _clock_unit(result, units), CROSS),
    ):
        if values is None:
            continue
        if named:
            axis = axes.twinx()
            axis.spines["right"].set_visible(True)
        light = quantity == "clock" and result.spec.particle == "light"
        shown = "affine parameter" if light else quantity
        size = np.abs(values)
        _line(axis, clock.time, size, color=colour, lw=1.0)
        limit = _tolerances(result, quantity)
        if limit is not None:
            axis.plot(clock.time, limit, color=colour, lw=1.4, ls="-.")
        log_axis(axis, size, None, limit, grid=not named)
        axis.set_ylabel(f"{shown} error / {readable(unit)}", color=colour)
        axis.tick_params(axis="y", colors=colour)
        named.append(shown)
    axes.set_xlabel(clock.label)
    axes.set_title(" and ".join(named) + " error")


def _clock_unit(result: CheckResult, units: dict[str, str]) -> str:
    assert result.spec is not None
    return units["length"] if result.spec.particle == "light" else units["time"]


def _draw_invariants(axes: Axes, result: CheckResult, clock: _Clock) -> None:
    comparison = result.comparison
    assert comparison is not None
    drifts, drawn, floors = comparison.drifts, [], []
    for drift, colour, label in (
        (drifts.energy, RADIAL, "energy"),
        (drifts.angular_momentum, CROSS, "angular momentum"),
        (drifts.norm, ALONG, "norm"),
    ):
        if drift is None:
            continue
        values = np.abs(drift.values)
        drawn.append(values)
        floors.append(drift.guard)
        _line(axes, clock.time, values, color=colour, lw=1.0, label=label)
        _line(axes, clock.time, drift.guard, color=colour, lw=0.9, ls=":")
    log_axis(axes, np.concatenate(drawn), np.concatenate(floors), None)
    axes.set_ylabel("relative drift")
    axes.set_xlabel(clock.label)
    axes.set_title("invariants (dotted: what digits allow)")
    _legend_below(axes, 3)


def _panels(comparison: Comparison) -> list[list[str]]:
    last = []
    if comparison.velocity_error is not None or comparison.clock_error is not None:
        last.append("rates")
    if comparison.drifts.angular_momentum is not None:
        last.append("invariants")
    rows = [["plane", "side"], ["errors", "errors"]]
    return [*rows, (last * 2)[:2]] if last else rows


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
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    style: Any = {
        "font.size": 9.5, "axes.titlesize": 10.5, "legend.fontsize": 9,
        "axes.spines.top": False, "axes.spines.right": False,
    }  # fmt: skip
    with mpl.rc_context(style):
        rows: Any = _panels(result.comparison)
        figure = Figure(figsize=(8.6, 3.4 * len(rows) + 0.4), layout="constrained")
        FigureCanvasAgg(figure)
        axes = figure.subplot_mosaic(rows, height_ratios=[1.25, *([1.0] * (len(rows) - 1))])
        clock = _Clock(result)
        draw_orbit(axes["plane"], axes["side"], result)
        _draw_errors(axes["errors"], result, clock)
        if "rates" in axes:
            _draw_rates(axes["rates"], result, clock)
        if "invariants" in axes:
            _draw_invariants(axes["invariants"], result, clock)
        assert result.orbit is not None
        word = VERDICTS[result.verdict][0]
        title = (
            f"{_plain(result.name)}: {word}  ({result.orbit.orbit_class}, {result.orbit.particle})"
        )
        figure.suptitle(title, fontsize=12, fontweight="bold")
        path = directory / f"{stem}.png"
        figure.savefig(path, dpi=140, metadata={"Software": "truefall"})
    return [path]


def _plain(name: str) -> str:
    """A name that the text layout takes literally: no mathematics, no control characters."""
    return "".join(c if c.isprintable() else "?" for c in name).replace("$", r"\$")
