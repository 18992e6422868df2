"""The JSON document of a check: plain numbers in the file's own units, null where none."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.budget import RULE
from truefall.validate.report.findings import findings_json

if TYPE_CHECKING:
    from collections.abc import Sequence

    from truefall.validate.check import CheckResult
    from truefall.validate.compare import Comparison
    from truefall.validate.drift import Drift

__all__ = ["document", "error_summary", "file_object", "summary_of"]

Floats = npt.NDArray[np.float64]
_STRETCHES = 24


def _plain(value: Any) -> Any:
    """Numbers JSON can hold: no NaN, no infinity."""
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    return value


def _largest(values: Floats) -> float:
    """Largest size; rows without a value (a state faster than light) are left out."""
    return float(np.max(np.abs(values), where=np.isfinite(values), initial=0.0))


def error_summary(values: Floats | None, time: Floats) -> dict[str, float] | None:
    """Largest size, root mean square, and the time of the largest."""
    if values is None or not values.size:
        return None
    size = np.abs(values)
    size = size[np.isfinite(size)]
    if not size.size:
        return None
    worst = int(np.nanargmax(np.abs(values)))
    largest = float(np.abs(values[worst]))
    # scaled, so that squares of tiny or huge errors neither vanish nor overflow
    rms = largest * float(np.sqrt(np.mean((size / largest) ** 2))) if largest > 0 else 0.0
    return {"max": largest, "rms": rms, "at_time": float(time[worst])}


def summary_of(
    result: CheckResult, quantity: str, values: Floats | None
) -> dict[str, float] | None:
    """:func:`error_summary` of one quantity; of all rows, also where only some are in memory."""
    assert result.comparison is not None
    summary = error_summary(values, result.comparison.time)
    if summary is not None and result.totals is not None and quantity in result.totals.errors:
        summary["rms"] = result.totals.errors[quantity][1]
    return summary


def _floor_over_time(comparison: Comparison) -> list[dict[str, Any]]:
    """The largest position guard in a few dozen stretches of rows, and what most of it is."""
    guard = comparison.position_guard
    total = guard.total
    cuts = np.unique(np.linspace(0, total.size, _STRETCHES + 1).astype(int))
    found = []
    for first, last in pairwise(cuts.tolist()):
        row = first + int(np.argmax(total[first:last]))
        found.append(
            {
                "time": float(comparison.time[row]),
                "position": float(total[row]),
                "from": guard.source(row),
            }
        )
    return found


def _certified(result: CheckResult) -> str:
    """Which rows were held against enclosed values, in words."""
    if result.reference != "exact":
        return "none: the stored set's own bounds count"
    if result.totals is None:
        return "every row"
    return (
        f"{result.certified} of {result.samples} rows, among them the largest errors, the rows "
        f"that the table leaves open and {result.totals.random} at random; the others by the table"
    )


def _orbit(result: CheckResult) -> dict[str, Any] | None:
    orbit = result.orbit
    if orbit is None:
        return None

    def value(name: str) -> float | None:
        bounded = getattr(orbit, name)
        return None if bounded is None else float(bounded.value)

    return {
        "class": orbit.orbit_class,
        "energy": value("energy"),
        "energy_minus_one": value("energy_minus_one"),
        "angular_momentum": value("angular_momentum"),
        "periapsis": value("periapsis"),
        "apoapsis": value("apoapsis"),
        "radial_period": value("radial_period"),
        "azimuth_per_radial_period": value("azimuth_per_radial_period"),
    }


def _drift(drift: Drift | None) -> dict[str, float] | None:
    if drift is None:
        return None
    return {
        "max_drift": _largest(drift.values),
        "slope": drift.slope,
        "guard": _largest(drift.guard),
    }


def _invariants(result: CheckResult) -> dict[str, Any]:
    comparison = result.comparison
    if comparison is None:
        return {"energy": None, "angular_momentum": None, "norm": None}
    drifts = comparison.drifts
    momentum = _drift(drifts.angular_momentum)
    if momentum is not None and drifts.direction is not None:
        momentum["max_tilt"] = _largest(drifts.direction)
    return {
        "energy": _drift(drifts.energy),
        "angular_momentum": momentum,
        "norm": _drift(drifts.norm),
    }


def _judged(result: CheckResult) -> list[dict[str, Any]]:
    return [
        {
            "quantity": j.quantity,
            "outcome": j.outcome,
            "tolerance": j.tolerance,
            "deviation": j.deviation,
            "guard": j.guard,
            "margin": j.margin,
            "adequacy": j.adequacy,
            "bound": j.bound,
            "quantisation": j.quantisation,
            "row": j.row + 1,
            "time": j.time,
            "undecided_rows": j.undecided_rows,
            "failing_rows": j.failing_rows,
            "unjudged_rows": j.unjudged_rows,
        }
        for j in result.judgements
    ]


def _ends(result: CheckResult) -> dict[str, Any]:
    ends: dict[str, Any] = {"before": None, "after": None}
    if result.orbit is not None:
        for key, end in (("before", result.orbit.ends_before), ("after", result.orbit.ends_after)):
            if end is not None:
                ends[key] = {"time": end.time, "reason": end.reason}
    return ends


def file_object(result: CheckResult) -> dict[str, Any]:
    """The object of the documentation for one trajectory."""
    comparison = result.comparison
    found: dict[str, Any] = {
        "file": result.file,
        "name": result.name,
        "verdict": result.verdict,
        "reason": result.reason or None,
        "samples": result.samples,
        "orbit": _orbit(result),
        "start_from": result.start_from or None,
        "start": None,
    }
    if result.orbit is not None:
        found["start"] = {
            "time": result.orbit.start_time,
            "position": list(result.orbit.position),
            "velocity": list(result.orbit.velocity_used),
        }
    if comparison is None:
        found |= {"error": None, "floor": None, "reference": None, "growth": None}
    else:
        floor = result.floor
        found["error"] = {
            name: summary_of(result, name, values)
            for name, values in (
                ("position", comparison.distance),
                ("radial", comparison.radial),
                ("along", comparison.along),
                ("cross", comparison.cross),
                ("velocity", comparison.velocity_error),
                ("clock", comparison.clock_error),
            )
        }
        found["floor"] = {
            "position": floor.position if floor else None,
            "from": floor.source if floor else None,
            "predictable_until": floor.predictable_until if floor else None,
            "over_time": _floor_over_time(comparison),
        }
        found["reference"] = {
            "kind": result.reference,
            "bound": float(np.max(comparison.position_guard.bound)),
            "certified_samples": result.certified,
            "certified": _certified(result),
            "table_error_by_bound": result.totals.table_share if result.totals else None,
        }
        growth = result.growth
        found["growth"] = {
            "exponent": growth.exponent if growth else None,
            "kind": growth.kind if growth else "none",
        }
    found["invariants"] = _invariants(result)
    found |= {"rule": RULE, "judged": _judged(result), "ends": _ends(result)}
    found |= findings_json(result)
    plain: dict[str, Any] = _plain(found)
    return plain


def document(results: Sequence[CheckResult]) -> dict[str, Any]:
    """One document for all files: the worst verdict, and an object each."""
    from truefall.validate.check import worst_verdict

    return {"verdict": worst_verdict(results), "files": [file_object(r) for r in results]}
