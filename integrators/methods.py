"""What a method is: facts for people, and the parts the run loop is compiled around."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["Method", "Parts", "Problem"]


@dataclass(frozen=True)
class Problem:
    """What a method is asked to do.

    Attributes
    ----------
    kind, variable, size : int
        Numbers of the equations and of the independent variable; length of the state.
    order : int
        Order asked for, or the method's default.
    adaptive : bool
        Whether the step is left to the method.
    """

    kind: int
    variable: int
    size: int
    order: int
    adaptive: bool


@dataclass(frozen=True)
class Parts:
    """A method made ready for a problem.

    Attributes
    ----------
    name : str
        Of the step kernel: copies of the loop are compiled and kept by it.
    step : kernel
        ``step(kind, variable, par, code, table, tolerance, y, h, memory, change) ->
        (error, evaluations, taken)``: fills ``change`` with y(sigma + taken) - y.  ``error`` is
        the estimated error over the tolerance (0 for fixed steps, not finite if the step
        failed), ``taken`` is h unless the method chooses its step itself.
    memory : (int, int)
        Shape of the array that the step may keep to itself; zeros at the start.
    code : (a, b) int64
    table : (a, b) float64
        The method's integers and coefficients, as it likes.
    keeps : bool
        Whether the memory lasts from step to step.
    exponent : float
        Of the step control: next step = step * error ** -exponent.
    dense : kernel, optional
        Fills the change inside a step; without it shorter steps are taken.
    chooses : bool
        Whether the step finds its own length (an infinite one is proposed first).
    """

    name: str
    step: Any
    memory: tuple[int, int]
    code: npt.NDArray[np.int64] = field(default_factory=lambda: np.zeros((1, 1), np.int64))
    table: npt.NDArray[np.float64] = field(default_factory=lambda: np.zeros((1, 1)))
    keeps: bool = False
    exponent: float = 0.2
    dense: Any = None
    chooses: bool = False


@dataclass(frozen=True)
class Method:
    """A method as the index knows it.

    Attributes
    ----------
    name : str
    order : int or None
        None where the order is free; then ``orders`` are allowed and ``default_order`` is taken.
    family : {"explicit", "adaptive", "implicit", "symplectic"}
    adaptive, symplectic : bool
        Whether it can choose its steps; whether it keeps the symplectic form.
    source : str
        Where the method comes from.
    parts : callable
        From a :class:`Problem` to :class:`Parts`; imports the kernels when called.
    equations : tuple of str
        Names it applies to; empty for all.
    variables : tuple of str
        Independent variables it applies to; empty for all.
    arithmetics : tuple of str
    orders : range
        Orders allowed where ``order`` is None.
    default_order : int
    fixed : bool
        Whether it can be run at a given step.
    """

    name: str
    order: int | None
    family: str
    adaptive: bool
    symplectic: bool
    source: str
    parts: Callable[[Problem], Parts]
    equations: tuple[str, ...] = ()
    variables: tuple[str, ...] = ()
    arithmetics: tuple[str, ...] = ("float64", "compensated")
    orders: range = range(0)
    default_order: int = 0
    fixed: bool = True
