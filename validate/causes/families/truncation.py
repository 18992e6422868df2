"""Numerics: what the step of a method does to the motion."""

from __future__ import annotations

from truefall.validate.causes.fault import Fault, Parameter, register
from truefall.validate.causes.plan import Plan

_TERMS = 10


def _spoiled(plan: Plan, p: tuple[float, ...], power: float) -> Plan:
    return plan.fly_by(method=(*p, power))


#: Powers of 1/r: 3p/2 for a fixed step and order p; lower where the step follows the orbit.
_POWERS = (0.75, 3.0, 7.5)


def _method(power: float) -> Fault:
    return Fault(
        cause="step-too-large",
        family="numerics",
        label=f"{power:g}",
        parameters=tuple(Parameter(f"term {k + 1}", f"method {power}") for k in range(_TERMS)),
        apply=lambda plan, _, p: _spoiled(plan, p, power),
        say=lambda _: "the step is too long for the method",
        look_at="the step or the tolerance of the integrator: halve it and compare",
        choices=1,
        numerical=True,
    )


register(*(_method(power) for power in _POWERS))
