"""Plans: what a faulty program does, step by step, and the trajectory that it would write.

A fault changes a plan: its start, its law, its time stamps, or what is done to the states on
their way out.  Faults on different steps compose, so two causes together are two changes.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.flight import Law, Sample, fly
from truefall.validate.causes.scene import Scene

__all__ = ["Output", "Plan", "exact_flight", "first_plan", "predicted", "spoil_output"]

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
#: What happens to the states of some rows before they are written.
Output = Callable[[Sample, Rows], Sample]
#: Where states at given times come from.
Flyer = Callable[[Law, Floats, Floats, Floats], Sample]
#: A change of one state, (6,) to (6,).
Undo = Callable[[Floats], Floats]


@dataclass(frozen=True)
class Plan:
    """``start`` (6,), ``law``, ``stamps`` (n,) at which states are taken, outputs in turn."""

    start: Floats
    law: Law
    stamps: Floats
    outputs: tuple[Output, ...] = ()

    def fly_by(self, **changes: object) -> Plan:
        """The plan with another law."""
        return replace(self, law=replace(self.law, **changes))  # type: ignore[arg-type]

    def write_by(self, output: Output) -> Plan:
        """The plan with one more thing done to its states."""
        return replace(self, outputs=(*self.outputs, output))


def first_plan(scene: Scene) -> Plan:
    """The plan of a program without a fault."""
    return Plan(scene.start, scene.law, scene.elapsed)


def spoil_output(plan: Plan, scene: Scene, output: Output, undo: Undo | None) -> Plan:
    """The plan with a spoiled output, of which a start read from the file is part.

    ``undo`` turns the spoiled first state into the one that was flown; None leaves it alone.
    """
    if scene.shared and undo is not None:
        plan = replace(plan, start=undo(plan.start))
    return plan.write_by(output)


def predicted(scene: Scene, plan: Plan, rows: Rows, flyer: Flyer | None = None) -> Sample:
    """The states of some rows that a plan leads to; NaN where it leads nowhere."""
    if flyer is None:
        sample = _remembered(scene, plan, rows)
        # what separates the flight without a fault from the exact solution is not the fault's
        known, base = scene.expected, scene.base
        sample = Sample(
            sample.position + np.nan_to_num(known.position[rows] - base.position[rows]),
            sample.velocity + np.nan_to_num(known.velocity[rows] - base.velocity[rows]),
            sample.clock + np.nan_to_num(known.clock[rows] - base.clock[rows]),
        )
    else:
        sample = flyer(plan.law, plan.start[:3], plan.start[3:], plan.stamps[rows])
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        for output in plan.outputs:
            sample = output(sample, rows)
    return sample


def _remembered(scene: Scene, plan: Plan, rows: Rows) -> Sample:
    """A flight, remembered for faults of the output alone: they share the faultless one."""
    if plan.law != scene.law or not np.array_equal(plan.start, scene.start):
        return fly(plan.law, plan.start[:3], plan.start[3:], plan.stamps[rows], scene.patience)
    if np.array_equal(plan.stamps, scene.elapsed):
        base = scene.base
        return Sample(base.position[rows], base.velocity[rows], base.clock[rows])
    return fly(plan.law, plan.start[:3], plan.start[3:], plan.stamps[rows], scene.patience)


def exact_flight(law: Law, position: Floats, velocity: Floats, times: Floats) -> Sample:
    """The same as :func:`.flight.fly` by the reference itself, for laws that are geodesics."""
    from truefall.reference import Orbit, StartError

    length = law.gm / law.c**2
    nothing = np.full((times.size, 3), np.nan)
    try:
        orbit = Orbit(
            chart=law.chart, position=position / length, velocity=velocity / law.c,
            particle="light" if law.light else "massive",
            clock="proper" if law.proper else "coordinate",
        )  # fmt: skip
    except StartError:
        return Sample(nothing, nothing, nothing[:, 0])
    stamps = times * law.c / length
    inside = orbit.reachable(stamps)
    sample = Sample(nothing.copy(), nothing.copy(), nothing[:, 0].copy())
    if inside.any():
        states = orbit.at(stamps[inside])
        second = states.coordinate_time if law.proper else states.proper_time
        second = states.affine if law.light else second
        assert second is not None
        sample.position[inside] = states.position * length
        sample.velocity[inside] = states.velocity * law.c
        sample.clock[inside] = second * (length if law.light else length / law.c)
    return sample
