"""The start: slightly another one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.flight import fly
from truefall.validate.causes.plan import Plan
from truefall.validate.causes.scene import Scene


def _moved(plan: Plan, _: Scene, p: tuple[float, ...]) -> Plan:
    return replace(plan, start=plan.start + np.array(p))


def _say(fitted: Fitted) -> str:
    place = ", ".join(fitted.say(k) for k in range(3))
    pace = ", ".join(fitted.say(k) for k in range(3, 6))
    return f"the start is another one: position off by ({place}), velocity by ({pace})"


register(
    Fault(
        cause="start-perturbed",
        family="start",
        parameters=(
            *(Parameter(f"start {a}", "length") for a in "xyz"),
            *(Parameter(f"start v{a}", "speed") for a in "xyz"),
        ),
        wanted=lambda s: not s.fitted,
        apply=_moved,
        say=_say,
        look_at="the numbers of the start as the program reads them (digits, frame, epoch)",
    )
)


def _kicked(plan: Plan, p: tuple[float, ...]) -> Plan:
    """The velocity of the start taken later than its position."""
    ends = [
        fly(plan.law, plan.start[:3], plan.start[3:], np.array([sign * 1e-3])).velocity[0]
        for sign in (1.0, -1.0)
    ]
    change = (ends[0] - ends[1]) / 2e-3
    start = plan.start.copy()
    start[3:] += change * p[0]
    return replace(plan, start=start)


def _say_kick(fitted: Fitted) -> str:
    spacing = abs(float(np.median(np.diff(fitted.scene.elapsed))))
    text = f"the start's velocity belongs to a time later by {fitted.say(0)} than its position"
    if abs(abs(fitted.numbers[0]) / spacing - 0.5) < 0.01:
        text += ", half the spacing of the rows"
    return text


register(
    Fault(
        cause="start-half-step-late",
        family="start",
        parameters=(Parameter("delay of the velocity", "time"),),
        wanted=lambda s: not s.law.light and not s.fitted,
        apply=lambda plan, _, p: _kicked(plan, p),
        say=_say_kick,
        look_at="the first half step of a leapfrog: velocities there are half a step off",
    )
)
