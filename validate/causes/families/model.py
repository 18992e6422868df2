"""The law of motion: relativity left out, cut short, or with a wrong factor."""

from __future__ import annotations

from collections.abc import Callable

from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.scene import Scene

_PLAIN = ("areal", "isotropic", "harmonic")
_LOOK = "the relativistic terms of the right-hand side and the flags that switch them"


def _expands(scene: Scene) -> bool:
    return scene.law.chart in _PLAIN


def _say_newton(fitted: Fitted) -> str:
    if fitted.scene.law.light:
        return (
            "light is bent by Newton's half only: it falls like a fast particle without relativity"
        )
    return "the motion is Newtonian: the relativistic terms are missing"


def _law(cause: str, say: Callable[[Fitted], str], wanted: Callable[[Scene], bool],
         **changes: object) -> Fault:  # fmt: skip
    return Fault(
        cause, "model", look_at=_LOOK, say=say, wanted=wanted,
        apply=lambda plan, _, _p: plan.fly_by(exact=0.0, **changes),
    )  # fmt: skip


register(
    _law("newtonian", _say_newton, lambda _: True, launch="own"),
    _law("newtonian", _say_newton, lambda s: s.law.light, launch="given"),
    _law("first-post-newtonian",
         lambda _: "the motion is first post-Newtonian: terms beyond 1/c^2 are missing",
         _expands, first=1.0, launch="given"),
    _law("second-post-newtonian",
         lambda _: "the motion is second post-Newtonian: terms beyond 1/c^4 are missing",
         _expands, first=1.0, second=1.0, launch="given"),
)  # fmt: skip

_KNOWN_WEIGHTS = {
    -1.0: "its sign is reversed", 0.5: "it is halved", 2.0: "it is doubled", 0.0: "it is missing",
}  # fmt: skip


def _say_weight(fitted: Fitted) -> str:
    text = f"the relativistic part of the acceleration has the weight {fitted.say(0)} in place of 1"
    for known, words in _KNOWN_WEIGHTS.items():
        if abs(fitted.numbers[0] - known) < max(4 * fitted.uncertainty[0], 0.01):
            text += f": {words}"
    return text


_WEIGHT = (Parameter("weight of the relativistic part", step=1e-4),)
register(
    Fault("schwarzschild-term-scaled", "model", parameters=_WEIGHT, look_at=_LOOK,
          includes=("newtonian", "first-post-newtonian"),
          label="of the whole", say=_say_weight, guesses=lambda _: ((1.0,),),
          apply=lambda plan, _, p: plan.fly_by(exact=p[0], launch="given")),
    Fault("schwarzschild-term-scaled", "model", parameters=_WEIGHT, look_at=_LOOK,
          includes=("newtonian", "first-post-newtonian"),
          label="of the first order", say=_say_weight, wanted=_expands,
          guesses=lambda _: ((1.0,),),
          apply=lambda plan, _, p: plan.fly_by(exact=0.0, first=p[0], launch="given")),
)  # fmt: skip


def _known_weight(weight: float, words: str, first_order: bool) -> Fault:
    changes = {"exact": 0.0, "first": weight} if first_order else {"exact": weight}
    return Fault(
        "schwarzschild-term-scaled", "model", look_at=_LOOK, choices=1, wanted=_expands,
        label=f"{words} ({'first order' if first_order else 'all orders'})",
        apply=lambda plan, _, _p: plan.fly_by(**changes, launch="given"),
        say=lambda _: f"the Schwarzschild term of the acceleration is wrong: {words}",
    )  # fmt: skip


for _weight, _words in _KNOWN_WEIGHTS.items():
    if _weight:
        register(_known_weight(_weight, _words, False), _known_weight(_weight, _words, True))


def _tells_clock(scene: Scene) -> bool:
    return not scene.law.light and (scene.has_clock or scene.law.proper)


def _clock(cause: str, kind: int, words: str) -> Fault:
    return Fault(
        cause, "model", wanted=_tells_clock,
        apply=lambda plan, _, _p: plan.fly_by(clock=kind),
        say=lambda _: f"the proper time is computed {words}",
        look_at="the rate dtau/dt = sqrt(f - ...) of the moving clock",
    )  # fmt: skip


register(
    _clock("clock-without-field", 1, "without the static field's factor: only motion slows it"),
    _clock("clock-without-motion", 2, "without motion: only the field slows it"),
    _clock("clock-first-order", 3, "to first order in 1/c^2 only"),
)
