"""A fault: a prediction, its parameters, its sentence; and the list of all that are known.

Every module in ``truefall.validate.causes.families`` is imported when an explanation is asked
for; what it registers is tried.  Adding a cause is adding ten lines there (DEVELOPERS.md).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache
from importlib import import_module
from pkgutil import iter_modules
from typing import TYPE_CHECKING

import numpy as np

from truefall.validate.causes.finding import Value
from truefall.validate.causes.plan import Plan

if TYPE_CHECKING:
    from truefall.validate.causes.scene import Scene

__all__ = ["Fault", "Fitted", "Parameter", "all_faults", "number", "register", "with_unit"]

Numbers = tuple[float, ...]


@dataclass(frozen=True)
class Parameter:
    """A number to be fitted.

    Attributes
    ----------
    name : str
    kind : str
        relative, angle, length, time, speed, acceleration, rate, drag, cube or fourth: what it is
        measured in.
    step : float
        Of its differences, relative to what is natural for the orbit.
    """

    name: str
    kind: str = "relative"
    step: float = 1e-7


@dataclass(frozen=True)
class Fitted:
    """Fitted numbers with one standard deviation, in GM = c = 1, and the scene they are of."""

    scene: Scene
    numbers: Numbers
    uncertainty: Numbers
    parameters: tuple[Parameter, ...]

    def value(self, k: int) -> Value:
        """The k-th number in the file's units."""
        factor, unit = _unit(self.scene, self.parameters[k].kind)
        return Value(self.numbers[k] * factor, self.uncertainty[k] * factor, unit)

    def say(self, k: int) -> str:
        """The k-th number as people write it: value, uncertainty, unit."""
        v = self.value(k)
        assert isinstance(v.value, float)
        return with_unit(number(v.value, v.uncertainty or 0.0), v.unit)

    def near(self, k: int, known: float, share: float = 1e-3) -> bool:
        """Whether the k-th number is a known one: to the share given and its uncertainty."""
        off = abs(self.numbers[k] - known)
        within = off <= max(4 * self.uncertainty[k], 1e-12) and off <= 0.05 * abs(known)
        return within or off <= share * abs(known)


@dataclass(frozen=True)
class Fault:
    """Something that a program, or who declared its output, may have done wrong.

    Attributes
    ----------
    cause, family : str
        Several faults may share a cause: variants of it, of which the best counts.
    apply : callable
        ``apply(plan, scene, numbers) -> Plan``; may raise ValueError where it makes no sense.
    say : callable
        ``say(fitted) -> str``: the finding in one sentence.
    look_at : str
        Where to look.
    parameters : tuple of Parameter
    guesses : callable
        ``guesses(scene)``: numbers to start from, besides zeros.
    wanted : callable
        ``wanted(scene) -> bool``: whether to try it at all.
    choices : int
        Numbers chosen from a list rather than fitted: charged like fitted ones.
    label : str
        Tells variants apart; also what is reported for a choice.
    numerical : bool
        Whether it is a weakness of the method rather than a mistake.
    soft : bool
        Whether it follows a method's errors so well that it must beat them outright.
    includes : tuple of str
        Causes that are this one with particular numbers: named in its place where they fit.
    """

    cause: str
    family: str
    apply: Callable[[Plan, Scene, Numbers], Plan]
    say: Callable[[Fitted], str]
    look_at: str
    parameters: tuple[Parameter, ...] = ()
    guesses: Callable[[Scene], Sequence[Numbers]] = lambda _: ()
    wanted: Callable[[Scene], bool] = lambda _: True
    choices: int = 0
    label: str = ""
    numerical: bool = False
    soft: bool = False
    includes: tuple[str, ...] = ()


_KNOWN: list[Fault] = []


def register(*faults: Fault) -> None:
    """Add faults to those that are tried."""
    _KNOWN.extend(faults)


@cache
def all_faults() -> tuple[Fault, ...]:
    """Every fault of every family, in the order of the modules' names."""
    from truefall.validate.causes import families

    for module in sorted(m.name for m in iter_modules(families.__path__)):
        import_module(f"{families.__name__}.{module}")
    return tuple(_KNOWN)


def _unit(scene: Scene, kind: str) -> tuple[float, str]:
    from truefall.validate.report.text import units_of

    assert scene.result.spec is not None
    units = units_of(scene.result.spec.system)
    length, time, speed = units["length"], units["time"], units["speed"]
    if kind == "length":
        return scene.length, length
    if kind == "time":
        return scene.time, time
    if kind == "speed":
        return scene.speed, speed
    if kind == "acceleration":
        name = "c^4/GM" if "GM" in length else f"{length} {time}-2"
        return scene.length / scene.time**2, name
    if kind == "angle":
        return 1.0, "rad"
    if kind in ("rate", "drag"):
        per = "c^3/GM" if "GM" in time else f"1/{time if kind == 'rate' else length}"
        return 1 / (scene.time if kind == "rate" else scene.length), per
    if kind in ("cube", "fourth"):
        power = {"cube": 4, "fourth": 5}[kind]
        name = "1" if "GM" in length else f"{length}^{power}/{time}^2"
        return scene.length**power / scene.time**2, name
    return 1.0, "1"


def number(value: float, uncertainty: float) -> str:
    """``1.5505(3)e-08``: a value with the uncertainty of its last digits in brackets."""
    if not np.isfinite(value) or not np.isfinite(uncertainty):
        return f"{value:.6g}"
    if uncertainty <= 0 or abs(value) > 1e9 * uncertainty:
        return f"{value:.10g}"
    if abs(value) < uncertainty:
        return f"{value:.2g} +- {uncertainty:.1g}"
    digits = min(max(int(np.floor(np.log10(abs(value)) - np.log10(uncertainty))) + 1, 1), 10)
    text = f"{value:.{digits}e}"
    mantissa, exponent = text.split("e")
    last = uncertainty / 10.0 ** (int(exponent) - digits)
    shown = f"{mantissa}({max(round(last), 1)})"
    power = int(exponent)
    return shown if power == 0 else f"{shown}e{exponent}"


def with_unit(text: str, unit: str) -> str:
    return text if unit == "1" else f"{text} {unit}"
