"""Forces that the problem does not have."""

from __future__ import annotations

from dataclasses import replace

from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.plan import Plan

_LOOK = "the force model: what is switched on besides the point mass"


def _forced(plan: Plan, places: tuple[int, ...], p: tuple[float, ...]) -> Plan:
    forces = list(plan.law.forces)
    for place, value in zip(places, p, strict=True):
        forces[place] += value
    return plan.fly_by(forces=tuple(forces))


def _force(cause: str, places: tuple[int, ...], names: tuple[str, ...], kind: str, words: str,
           label: str = "") -> Fault:  # fmt: skip
    def say(fitted: Fitted) -> str:
        values = ", ".join(fitted.say(k) for k in range(len(places)))
        return words.format(values if len(places) == 1 else f"({values})")

    return Fault(
        cause=cause, family="forces", look_at=_LOOK, say=say, label=label,
        parameters=tuple(Parameter(n, kind) for n in names),
        apply=lambda plan, _, p: _forced(plan, places, p),
    )  # fmt: skip


register(
    _force("radial-acceleration", (0,), ("radial acceleration",), "acceleration",
           "a constant radial acceleration of {} acts besides (outward positive)"),
    _force("along-acceleration", (1,), ("acceleration along the motion",), "acceleration",
           "a constant acceleration of {} acts along the velocity"),
    _force("fixed-acceleration", (3, 4, 5), ("ax", "ay", "az"), "acceleration",
           "a constant acceleration of {} acts in a fixed direction"),
    _force("drag", (6,), ("drag coefficient",), "drag",
           "a drag of {} times v |v| acts against the motion", "quadratic"),
    _force("drag", (7,), ("drag rate",), "rate",
           "a drag of {} times v acts against the motion", "linear"),
    replace(
        _force("energy-dissipation", (7,), ("rate",), "rate",
               "energy is lost as by a drag of {} times v: the method dissipates, or something "
               "damps the velocities"),
        family="numerics",
        look_at="the damping of the integrator, and anything that rescales velocities",
    ),
    _force("inverse-cube-term", (8,), ("strength",), "cube",
           "a radial acceleration of {} / r^3 acts besides (outward positive)", "inverse cube"),
    _force("inverse-cube-term", (9,), ("strength",), "fourth",
           "a radial acceleration of {} / r^4 acts besides (outward positive), such as an "
           "oblate body's on an equatorial orbit", "inverse fourth power"),
)  # fmt: skip
