"""Numerics: something that goes wrong at each periapsis."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.flight import Sample, fly
from truefall.validate.causes.plan import Plan
from truefall.validate.causes.scene import Scene

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_PARTS = 60


def _periapses(scene: Scene) -> Floats:
    """Times of closest approach after the start, (k,)."""
    last = float(scene.elapsed.max())
    turns = max(float(scene.revolutions.max()), 1.0)
    times = np.linspace(0.0, last, int(_PARTS * turns) + 2)
    s = fly(scene.law, scene.start[:3], scene.start[3:], times, scene.patience)
    out = np.sum(s.position * s.velocity, axis=1)
    low = np.flatnonzero((out[:-1] < 0) & (out[1:] >= 0))
    share = out[low] / (out[low] - out[low + 1])
    return np.asarray(times[low] + share * (times[low + 1] - times[low]))


@lru_cache(maxsize=2)
def _answers(scene: Scene) -> tuple[Floats, Floats]:
    """Times of periapses, and the change of the start (k, 6, 2) that a unit kick there is like.

    Raises
    ------
    ValueError
        If there is no periapsis, or there are too many.
    """
    times = _periapses(scene)
    if not times.size or times.size > 400:
        raise ValueError("no periapsis, or too many")
    there = fly(scene.law, scene.start[:3], scene.start[3:], times, scene.patience)
    kicks = np.zeros((times.size, 6, 2))
    kicks[:, 3:, 0] = there.position / np.linalg.norm(there.position, axis=1)[:, None]
    kicks[:, 3:, 1] = there.velocity / np.linalg.norm(there.velocity, axis=1)[:, None]
    answers = np.linalg.solve(scene.transition_at(times)[:, :6], kicks)
    return times, np.asarray(answers, dtype=np.float64)


def _kinked(plan: Plan, scene: Scene, p: tuple[float, ...]) -> Plan:
    """Time lost and kicks, radial and along, at each periapsis: to first order."""
    times, answers = _answers(scene)
    back = answers @ np.array(p[1:])
    passed = np.searchsorted(times, scene.elapsed, side="left")
    total = np.vstack([np.zeros(6), np.cumsum(back, axis=0)])[passed]
    change = np.einsum("nij,nj->ni", scene.transition, total)
    plan = replace(plan, stamps=plan.stamps - p[0] * passed)

    def output(s: Sample, rows: Rows) -> Sample:
        return Sample(
            s.position + change[rows, :3], s.velocity + change[rows, 3:6], s.clock + change[rows, 6]
        )

    return plan.write_by(output)


def _say(fitted: Fitted) -> str:
    return (
        f"something happens at each periapsis: time lost {fitted.say(0)}, kicks of "
        f"{fitted.say(1)} outward and {fitted.say(2)} along the motion"
    )


register(
    Fault(
        "periapsis-kinks", "numerics", apply=_kinked, say=_say, soft=True,
        parameters=(Parameter("time lost", "time"), Parameter("radial kick", "speed"),
                    Parameter("along kick", "speed")),
        wanted=lambda s: not s.law.light and not s.law.proper and s.revolutions.max() > 1.2,
        look_at="events and step changes at closest approach: where in a step they take effect",
    )
)  # fmt: skip
