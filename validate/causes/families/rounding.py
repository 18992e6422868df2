"""Numerics: too few digits in what is written, or in the time stamps."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.fault import Fault, Fitted, register
from truefall.validate.causes.flight import Sample
from truefall.validate.causes.plan import Plan
from truefall.validate.causes.scene import Scene

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_MOST = 15


def _columns(scene: Scene) -> list[Floats]:
    """What the file itself holds of positions and velocities."""
    trajectory = scene.result.trajectory
    assert trajectory is not None
    found = [trajectory.position]
    if trajectory.velocity is not None:
        found.append(trajectory.velocity)
    return found


def _decimals(values: Floats) -> int | None:
    """The fewest decimals that hold every number of a column, if float64 has more."""
    size = float(np.abs(values).max())
    for decimals in range(-12, _MOST + 1):
        if size * 10.0**decimals > 2.0**50:
            return None
        if np.array_equal(np.round(values, decimals), values):
            return decimals
    return None


def _significant(values: Floats) -> int | None:
    """The fewest significant digits that hold every number of a column, up to 13."""
    flat = np.unique(values.ravel())[:: max(1, values.size // 300)].tolist()
    for digits in range(2, 14):
        if all(float(f"{v:.{digits - 1}e}") == v for v in flat):
            return digits
    return None


def _unit_of_digits(values: Floats, digits: int) -> Floats:
    """One unit of the last of so many digits of each number."""
    with np.errstate(divide="ignore"):
        power = np.floor(np.log10(np.abs(values)))
    return np.asarray(10.0 ** (np.where(np.isfinite(power), power, -300.0) + 1 - digits))


def _written(plan: Plan, scene: Scene, units: list[Floats | None]) -> Plan:
    """States as near to what was written as rounding to ``units`` allows.

    Rounding explains whatever lies within half a unit, however the program got there.
    """
    obtained = (scene.obtained.position, scene.obtained.velocity)
    scales = (scene.length, scene.speed)

    def cut(values: Floats, k: int, rows: Rows) -> Floats:
        unit = units[k] if k < len(units) else None
        if unit is None:
            return values
        half = 0.5 * unit[rows] / scales[k]
        return np.asarray(values + np.clip(obtained[k][rows] - values, -half, half))

    return plan.write_by(
        lambda s, rows: Sample(cut(s.position, 0, rows), cut(s.velocity, 1, rows), s.clock)
    )


def _fixed(plan: Plan, scene: Scene) -> Plan:
    columns = _columns(scene)
    decimals = [_decimals(c) for c in columns]
    if all(d is None for d in decimals):
        raise ValueError("no column is rounded to decimals")
    return _written(plan, scene, [
        None if d is None else np.full(c.shape, 10.0**-d)
        for c, d in zip(columns, decimals, strict=True)
    ])  # fmt: skip


def _floating(plan: Plan, scene: Scene) -> Plan:
    columns = _columns(scene)
    digits = [_significant(c) for c in columns]
    if all(d is None for d in digits):
        raise ValueError("no column is rounded to significant digits")
    return _written(plan, scene, [
        None if d is None else _unit_of_digits(c, d) for c, d in zip(columns, digits, strict=True)
    ])  # fmt: skip


def _single(plan: Plan, scene: Scene) -> Plan:
    return _written(
        plan, scene, [np.spacing(np.float32(np.abs(c))).astype(np.float64) for c in _columns(scene)]
    )


def _say_fixed(fitted: Fitted) -> str:
    d = [_decimals(c) for c in _columns(fitted.scene)]
    parts = [
        f"{name} to {k} decimals" for name, k in zip(("positions", "velocities"), d, strict=False)
        if k is not None
    ]  # fmt: skip
    return f"the output is rounded: {', '.join(parts)}"


def _say_floating(fitted: Fitted) -> str:
    d = [_significant(c) for c in _columns(fitted.scene)]
    parts = [
        f"{name} to {k} digits" for name, k in zip(("positions", "velocities"), d, strict=False)
        if k is not None
    ]  # fmt: skip
    return f"the output is rounded: {', '.join(parts)}"


def is_single(scene: Scene) -> bool:
    """Whether every number of the file fits in single precision."""
    return all(np.array_equal(np.float32(c).astype(np.float64), c) for c in _columns(scene))


def _stamps_in_single(plan: Plan, scene: Scene, added_up: bool) -> Plan:
    trajectory, spec = scene.result.trajectory, scene.result.spec
    assert trajectory is not None
    assert spec is not None
    time = trajectory.time
    cut: Floats
    if added_up:
        total = np.float32(time[0])
        step = np.float32(time[1] - time[0])
        if not np.allclose(np.diff(time), time[1] - time[0], rtol=1e-6):
            raise ValueError("the time stamps are not even")
        cut = np.empty(time.size)
        for k in range(time.size):
            cut[k] = float(total)
            total = np.float32(total + step)
    else:
        cut = time.astype(np.float32).astype(np.float64)
    return replace(plan, stamps=plan.stamps + (cut - time) / scene.time)


def is_rounded(scene: Scene) -> bool:
    """Whether a column of the file has fewer digits than float64."""
    return any(_decimals(c) is not None or _significant(c) is not None for c in _columns(scene))


_LOOK = "the format of the output and the types of its variables"


def _stamps(added_up: bool) -> Fault:
    return Fault(
        "single-precision-time-stamps",
        "numerics",
        label="added up" if added_up else "each",
        look_at=_LOOK,
        choices=1,
        apply=lambda plan, scene, _: _stamps_in_single(plan, scene, added_up),
        say=lambda _: "the program's time is kept in single precision (24 bits)",
    )


register(
    Fault("output-rounded", "numerics", label="decimals", look_at=_LOOK, choices=1,
          apply=lambda plan, scene, _: _fixed(plan, scene), say=_say_fixed),
    Fault("output-rounded", "numerics", label="significant digits", look_at=_LOOK, choices=1,
          apply=lambda plan, scene, _: _floating(plan, scene), say=_say_floating),
    Fault("single-precision-state", "numerics", label="output", look_at=_LOOK,
          wanted=is_single,
          apply=lambda plan, scene, _: _single(plan, scene),
          say=lambda _: "states are written in single precision (24 bits)"),
    _stamps(False),
    _stamps(True),
)  # fmt: skip
