"""Charts: coordinates declared as one kind and written in another."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from truefall.reference.charts import CHARTS, INGOING, convert
from truefall.validate.causes.fault import Fault, Fitted, register
from truefall.validate.causes.flight import Sample
from truefall.validate.causes.plan import Plan, spoil_output
from truefall.validate.causes.scene import Scene

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_LOOK = "the declared chart, and the step that turns the program's coordinates into it"


def told(sample: Sample, source: str, target: str) -> tuple[Floats, Floats]:
    """Positions and velocities in another chart; NaN where it has none."""
    position = np.full_like(sample.position, np.nan)
    velocity = position.copy()
    good = np.isfinite(sample.position).all(axis=1) & np.isfinite(sample.velocity).all(axis=1)
    if good.any():
        moved, turned = convert(sample.position[good], sample.velocity[good], source, target)
        position[good] = moved
        velocity[good] = np.nan if turned is None else turned
    return position, velocity


def start_in(start: Floats, source: str, target: str) -> Floats:
    """A start told in another chart."""
    position, velocity = convert(start[:3], start[3:], source, target)
    assert velocity is not None
    return np.concatenate([position, velocity])


def _whole(plan: Plan, actual: str, same_start: bool) -> Plan:
    start = plan.start if same_start else start_in(plan.start, plan.law.chart, actual)
    return replace(plan.fly_by(chart=actual), start=start)


def _half(plan: Plan, scene: Scene, actual: str, which: str) -> Plan:
    declared = plan.law.chart

    def output(sample: Sample, _: Rows) -> Sample:
        position, velocity = told(sample, declared, actual)
        if which == "position":
            return Sample(position, sample.velocity, sample.clock)
        return Sample(sample.position, velocity, sample.clock)

    def undo(start: Floats) -> Floats:
        """The state in the declared chart of which one half is told in the actual one."""
        true = start.copy()
        for _ in range(30):
            there = start_in(true, declared, actual)
            if which == "position":
                true = np.concatenate([true[:3] + start[:3] - there[:3], start[3:]])
            else:
                true = np.concatenate([start[:3], true[3:] + start[3:] - there[3:]])
        return true

    return spoil_output(plan, scene, output, undo)


def _declared(fitted: Fitted, actual: str) -> str:
    declared = fitted.scene.law.chart
    same = declared in INGOING and actual in INGOING
    what = "times and states" if same or (declared in INGOING) != (actual in INGOING) else "states"
    return f"the {what} are {actual}, declared as {declared}"


def _misdeclared(actual: str, start_too: bool) -> Fault:
    words = ", the start among them" if start_too else " (the start was read rightly)"
    return Fault(
        "chart-misdeclared", "chart", look_at=_LOOK, choices=1,
        label=f"{actual}, {'start too' if start_too else 'output'}",
        wanted=lambda s: s.law.chart != actual and (start_too or not s.shared),
        apply=lambda plan, _, _p: _whole(plan, actual, start_too),
        say=lambda f: _declared(f, actual) + words,
    )  # fmt: skip


def _one_told(actual: str, which: str, other: str) -> Fault:
    """Positions or velocities alone turned; positions of the areal radius all look alike."""

    def wanted(scene: Scene) -> bool:
        charts = {actual, scene.law.chart}
        moved = which == "velocity" or bool(charts & {"isotropic", "harmonic"})
        return len(charts) == 2 and scene.has_velocity and moved

    return Fault(
        f"{which}-in-another-chart", "chart", look_at=_LOOK, choices=1, label=actual,
        wanted=wanted,
        apply=lambda plan, scene, _: _half(plan, scene, actual, which),
        say=lambda _: f"the {which} is told in {actual} coordinates, the {other} is not",
    )  # fmt: skip


for _actual in CHARTS:
    register(
        _misdeclared(_actual, True),
        _misdeclared(_actual, False),
        _one_told(_actual, "position", "velocity"),
        _one_told(_actual, "velocity", "position"),
    )
