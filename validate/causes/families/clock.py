"""Clocks and time stamps: another clock's time, shifted, scaled, or rows out of step."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from truefall.reference.charts import CHARTS, INGOING
from truefall.validate.causes.families.chart import start_in, told
from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.flight import Sample
from truefall.validate.causes.plan import Plan
from truefall.validate.causes.scene import Scene

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_LOOK = "what the program writes into the column time"


def _swapped(plan: Plan, scene: Scene, column: str) -> Plan:
    """The other clock's readings as time stamps; ``column`` is what the second clock's hold."""
    plan = plan.fly_by(proper=not plan.law.proper)
    if column == "other":
        return plan
    return plan.write_by(
        lambda s, rows: Sample(s.position, s.velocity, scene.elapsed[rows].astype(np.float64))
    )


def _wrong_clock(proper: bool, column: str) -> Fault:
    """``proper``: what the time stamps are declared to be."""
    names = ("proper", "coordinate")
    declared, actual = names if proper else names[::-1]
    return Fault(
        f"{actual}-for-{declared}-time", "clock", look_at=_LOOK, label=column,
        wanted=lambda s: (
            not s.law.light and s.law.proper == proper and (column == "other" or s.has_clock)
        ),
        apply=lambda plan, scene, _: _swapped(plan, scene, column),
        say=lambda _: f"the time stamps are {actual} time, declared as {declared} time",
    )  # fmt: skip


for _proper in (False, True):
    register(_wrong_clock(_proper, "other"), _wrong_clock(_proper, "own"))


def _other_time(plan: Plan, actual: str, per: str) -> Plan:
    """Stamps in another chart's time, positions in the declared one."""
    declared = plan.law.chart
    plan = replace(plan.fly_by(chart=actual), start=start_in(plan.start, declared, actual))

    def output(sample: Sample, _: Rows) -> Sample:
        position, velocity = told(sample, actual, declared)
        if per == "actual":  # d position / d (the stamps' time): the same points, another pace
            pace = np.linalg.norm(velocity, axis=1, keepdims=True)
            radial = np.sum(position * sample.velocity, axis=1) / np.sum(
                position * velocity, axis=1
            )
            velocity = velocity * np.where(pace > 0, radial[:, None], 1.0)
        return Sample(position, velocity, sample.clock)

    return plan.write_by(output)


def _times_differ(scene: Scene, actual: str) -> bool:
    return scene.law.chart != actual and (actual in INGOING or scene.law.chart in INGOING)


def _charts_time(actual: str, per: str) -> Fault:
    return Fault(
        "another-charts-time", "clock", look_at=_LOOK, choices=1, label=f"{actual}, per {per}",
        wanted=lambda s: _times_differ(s, actual) and (s.has_velocity or per == "declared"),
        apply=lambda plan, _, _p: _other_time(plan, actual, per),
        say=lambda f: f"the time stamps are the {actual} time, the positions are "
        f"{f.scene.law.chart}",
    )  # fmt: skip


for _actual in CHARTS:
    register(_charts_time(_actual, "declared"), _charts_time(_actual, "actual"))


def _scaled_time(plan: Plan, change: float) -> Plan:
    if abs(change) > 0.2:
        raise ValueError("such a factor is a unit's")
    return replace(plan, stamps=plan.stamps * (1 + change))


def _spacing(scene: Scene) -> float:
    return float(np.median(np.diff(scene.elapsed)))


def _say_epoch(fitted: Fitted) -> str:
    spacing = _spacing(fitted.scene)
    steps = fitted.numbers[0] / spacing
    close = max(4 * fitted.uncertainty[0] / abs(spacing), 1e-3)
    text = f"the states belong to times later by {fitted.say(0)} than their stamps"
    if fitted.numbers[0] < 0:
        text = f"the states belong to times {fitted.say(0)} from their stamps (earlier)"
    if abs(abs(steps) - 0.5) < close:
        text += ", half the spacing of the rows: the start, or the stamps, are half a step off"
    elif abs(abs(steps) - 1) < close:
        text += ", one row"
    return text


register(
    Fault(
        cause="epoch-shifted",
        family="clock",
        includes=("samples-shifted",),
        parameters=(Parameter("shift", "time"),),
        apply=lambda plan, _, p: replace(plan, stamps=plan.stamps + p[0]),
        guesses=lambda s: ((_spacing(s),), (-_spacing(s),)),
        say=_say_epoch,
        look_at="the epoch at which the program starts, and when in a step a row is written",
    ),
    Fault(
        cause="time-scaled",
        family="clock",
        parameters=(Parameter("relative change of time"),),
        apply=lambda plan, _, p: _scaled_time(plan, p[0]),
        say=lambda f: (
            f"the states run ahead of their stamps by {f.say(0)} of the elapsed time"
            + (
                ": a Julian year of 365.25 d against a tropical one"
                if any(f.near(0, s * (365.25 / 365.24219 - 1), 0.02) for s in (1, -1))
                else ": the rate between TDB and TCB"
                if any(f.near(0, s * 1.550519768e-8, 0.02) for s in (1, -1))
                else ""
            )
        ),
        look_at="the unit and the time scale of the time stamps",
    ),
)


def _unit(plan: Plan, factor: float, per: bool) -> Plan:
    plan = replace(plan, stamps=plan.stamps * factor)
    if not per:
        return plan
    return plan.write_by(lambda s, _: Sample(s.position, s.velocity * factor, s.clock))


def _time_unit(factor: float, words: str, per: bool) -> Fault:
    too = ", velocities too" if per else ""
    return Fault(
        "time-unit", "clock", look_at="the unit of the time stamps", choices=1,
        label=f"{words}{too}",
        wanted=lambda s: s.has_velocity or not per,
        apply=lambda plan, _, _p: _unit(plan, factor, per),
        say=lambda _: f"the time stamps are in {words}{too.replace(',', ', the')}",
    )  # fmt: skip


for _factor, _words in (
    (1e-3, "milliseconds"), (60.0, "minutes"), (3600.0, "hours"), (86400.0, "days"),
    (1 / 86400.0, "1/86400 of their unit"), (1e3, "1000 times their unit"),
):  # fmt: skip
    register(_time_unit(_factor, _words, False), _time_unit(_factor, _words, True))


def _shifted(plan: Plan, by: int) -> Plan:
    """Each row holds the state of the row so many later; the ends are continued evenly."""
    t = plan.stamps
    n = t.size
    index = np.arange(n) + by
    inside = np.clip(index, 0, n - 1)
    edge = t[1] - t[0] if by < 0 else t[-1] - t[-2]
    return replace(plan, stamps=t[inside] + (index - inside) * edge)


def _from_row(plan: Plan, row: int, by: int) -> Plan:
    late = _shifted(plan, by).stamps
    return replace(plan, stamps=np.where(np.arange(late.size) >= row, late, plan.stamps))


@lru_cache(maxsize=2)
def _onset(scene: Scene) -> list[tuple[float, ...]]:
    """Rows from which on the residual may begin: where it jumps."""
    size = np.linalg.norm(scene.residual.position, axis=1)
    step = np.linalg.norm(np.diff(scene.residual.position, axis=0), axis=1)
    moved = np.linalg.norm(np.diff(scene.expected.position, axis=0), axis=1)
    likely = np.argsort(-step / moved)[:3] + 1
    first = int(np.argmax(size > 0.01 * np.max(size)))
    return [(float(r),) for r in {*likely.tolist(), first}]


def _row_fault(cause: str, by: int, text: str) -> list[Fault]:
    """One variant for each rank of likely rows: rows are chosen, not fitted."""

    def apply(plan: Plan, scene: Scene, _: Sequence[float], rank: int) -> Plan:
        rows = sorted(_onset(scene))
        if rank >= len(rows):
            raise ValueError("there are no more likely rows")
        return _from_row(plan, int(rows[rank][0]), by)

    def say(fitted: Fitted, rank: int) -> str:
        row = int(sorted(_onset(fitted.scene))[rank][0])
        trajectory = fitted.scene.result.trajectory
        assert trajectory is not None
        return text.format(row=row + 1, time=f"{float(trajectory.time[row]):.9g}")

    def variant(rank: int) -> Fault:
        return Fault(
            cause, "clock", look_at="the loop that writes the rows", choices=2, label=f"{rank}",
            wanted=lambda s: len(s) > 8, includes=("samples-shifted",),
            apply=lambda plan, scene, p: apply(plan, scene, p, rank),
            say=lambda f: say(f, rank),
        )  # fmt: skip

    return [variant(rank) for rank in range(4)]


def _out_of_step(by: int, label: str, text: str) -> Fault:
    return Fault(
        "samples-shifted", "clock", look_at="the loop that writes the rows", choices=1,
        label=label, apply=lambda plan, _, _p: _shifted(plan, by), say=lambda _: text,
    )  # fmt: skip


register(
    _out_of_step(1, "one early", "each row holds the state of the next time stamp"),
    _out_of_step(-1, "one late", "each row holds the state of the time stamp before it"),
    *_row_fault("state-repeated", -1, "a state is repeated at row {row} (time {time}): from there "
                "on each row holds the state of the time stamp before it"),
    *_row_fault("state-dropped", 1, "a state is left out at row {row} (time {time}): from there "
                "on each row holds the state of the next time stamp"),
)  # fmt: skip
