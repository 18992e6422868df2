"""Constants: gm, the speed of light, the gravitational radius."""

from __future__ import annotations

import numpy as np

from truefall.reference.units import CONSTANTS
from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.plan import Plan
from truefall.validate.causes.scene import Scene

#: What gm may have been multiplied with, and how people say so.
_TIME_SCALES = (
    (1 / (1 - CONSTANTS["L_B"].value) - 1, "the TCB value where the TDB value was meant"),
    (-CONSTANTS["L_B"].value, "the TDB value where the TCB value was meant"),
    (1 / (1 - CONSTANTS["L_G"].value) - 1, "the TCG value where the TT value was meant"),
    (-CONSTANTS["L_G"].value, "the TT value where the TCG value was meant"),
)
#: Masses as they stand in tables, in kg (from memory), for products with G.
_MASSES = {
    "Sun": (1.989e30, 1.9885e30, 1.98847e30, 1.9891e30, 1.98892e30, 2e30, 1.98841e30),
    "Earth": (5.972e24, 5.9722e24, 5.97219e24, 5.9736e24, 5.974e24, 5.98e24, 6e24, 5.97e24),
}
_GRAVITY = (6.6743e-11, 6.67408e-11, 6.67384e-11, 6.674e-11, 6.67e-11, 6.673e-11, 6.67428e-11,
            6.67259e-11)  # fmt: skip


def _gm(scene: Scene) -> float:
    """The declared gm in SI units; NaN in the geometric system."""
    spec = scene.result.spec
    assert spec is not None
    return {"SI": spec.gm, "astronomical": spec.gm * 1e9}.get(spec.system, np.nan)


def _other_values(scene: Scene) -> list[tuple[float, str]]:
    """Relative differences of other published values, and of products with G, from the declared."""
    gm = _gm(scene)
    if not np.isfinite(gm):
        return []
    found = []
    for key, constant in CONSTANTS.items():
        if key.startswith("gm_") and 0 < abs(constant.value / gm - 1) < 1e-3:
            body, _, kind = key[3:].partition("_")
            found.append(
                (constant.value / gm - 1, f"the {kind.upper()} value of the {body.title()}'s")
            )
    for body, masses in _MASSES.items():
        for mass in masses:
            for g in _GRAVITY:
                off = g * mass / gm - 1
                if 0 < abs(off) < 0.02:
                    found.append((off, f"G times a rounded mass of the {body}, {g:g} x {mass:g}"))
    return found


def _say_gm(fitted: Fitted) -> str:
    value = fitted.numbers[0]
    word = "large" if value > 0 else "small"
    shown = Fitted(fitted.scene, (abs(value),), fitted.uncertainty, fitted.parameters).say(0)
    text = f"gm is too {word} by {shown} of itself"
    known = [*_TIME_SCALES, *sorted(_other_values(fitted.scene), key=lambda k: "x" in k[1])]
    near = [(abs(value - k), name) for k, name in known if fitted.near(0, k)]
    if near:
        distance = min(near)[0]
        names = dict.fromkeys(n for d, n in near if d <= max(2 * fitted.uncertainty[0], distance))
        text += ": " + ", or ".join(list(names)[:3])
    return text


def _gm_scaled(launch: str) -> Fault:
    """Light starts as fast as the program's own metric says, or as the file says."""
    return Fault(
        cause="gm-scaled",
        family="constants",
        label=launch,
        includes=("schwarzschild-radius", "gm-in-wrong-unit", "constants-in-single-precision"),
        parameters=(Parameter("relative change of gm"),),
        apply=lambda plan, _, p: plan.fly_by(gm=plan.law.gm * (1 + p[0]), launch=launch),
        wanted=lambda scene: launch == "own" or scene.law.light,
        say=_say_gm,
        look_at="the constant gm in the program's configuration, and which time scale it belongs "
        "to",
    )


register(
    _gm_scaled("own"),
    _gm_scaled("given"),
    Fault(
        cause="light-speed-scaled",
        includes=("schwarzschild-radius", "newtonian"),
        family="constants",
        parameters=(Parameter("relative change of c", step=1e-4),),
        guesses=lambda _: ((3e8 / 299792458 - 1,),),
        apply=lambda plan, _, p: plan.fly_by(c=plan.law.c * (1 + p[0])),
        wanted=lambda scene: scene.law.exact == 1.0,
        say=lambda f: (
            f"the speed of light is off by {f.say(0)} of itself"
            + (
                ": 3e8 m/s where 299792458 m/s was meant"
                if f.near(0, 3e8 / 299792458 - 1, 0.02)
                else ""
            )
        ),
        look_at="the constant c",
    ),
)


def _radius(factor: float, text: str) -> tuple[Fault, ...]:
    """The gravitational radius off by a factor: in the relativistic terms, or in all of gm."""
    label = f"r_s times {factor:g}"
    shown = f"the gravitational radius is {text}: r_s is 2GM/c^2"
    look = "the factor 2 in r_s = 2GM/c^2"
    return (
        Fault("schwarzschild-radius", "constants", label=label, choices=1, look_at=look,
              apply=lambda plan, _, _p: plan.fly_by(c=plan.law.c / factor**0.5),
              say=lambda _: shown),
        Fault("schwarzschild-radius", "constants", label=label, choices=1, look_at=look,
              apply=lambda plan, _, _p: plan.fly_by(gm=plan.law.gm * factor),
              say=lambda _: shown),
    )  # fmt: skip


register(*_radius(0.5, "taken as GM/c^2"), *_radius(2.0, "taken as 4GM/c^2"))


def _wrong_unit(factor: float, text: str) -> Fault:
    return Fault(
        cause="gm-in-wrong-unit",
        family="constants",
        label=text,
        choices=1,
        apply=lambda plan, _, _p: plan.fly_by(gm=plan.law.gm * factor),
        say=lambda _: f"gm is in the wrong unit: {text}",
        look_at="the units of gm, or of the mass that it is made from",
    )


register(
    _wrong_unit(1e9, "m^3/s^2 where km^3/s^2 was meant"),
    _wrong_unit(1e-9, "km^3/s^2 where m^3/s^2 was meant"),
    _wrong_unit(1e3, "it is 1000 times too large (g for kg, or m for km)"),
    _wrong_unit(1e-3, "it is 1000 times too small (kg for g, or km for m)"),
)


def _single(plan: Plan, scene: Scene, _: tuple[float, ...]) -> Plan:
    spec = scene.result.spec
    assert spec is not None
    gm = float(np.float32(spec.gm)) / spec.gm
    c = float(np.float32(scene.speed)) / scene.speed
    return plan.fly_by(gm=plan.law.gm * gm, c=plan.law.c * c)


def _single_matters(scene: Scene) -> bool:
    spec = scene.result.spec
    return spec is not None and float(np.float32(spec.gm)) != spec.gm


register(
    Fault(
        cause="constants-in-single-precision",
        family="numerics",
        apply=_single,
        wanted=_single_matters,
        say=lambda _: "gm and c are kept in single precision (24 bits)",
        look_at="the types of the program's constants",
    )
)
