"""What the blocks of a long file are held against, worked out once for the whole file."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from truefall.reference.charts import areal_radius
from truefall.reference.invariants_kernel import CHART_NUMBER
from truefall.reference.units import SYSTEM, length_in
from truefall.validate.drift import openness
from truefall.validate.judging import tightest
from truefall.validate.screening import table_azimuth
from truefall.validate.streaming.rows import Rows, first_row, second_clock_name
from truefall.validate.streaming.screen import Plan

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.reference.table import Table
    from truefall.validate.budget import Budget
    from truefall.validate.starts import Start

__all__ = ["plan_of"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

_KINDS = {"position": 0, "velocity": 1, "clock": 2, "energy": 3, "angular_momentum": 4}
_GRID = 2048


def _spread(start: Start, orbit: Orbit, first: float, last: float) -> tuple[Floats, Floats]:
    """What the start's digits leave open on a grid of times: (k,), (3, k)."""
    grid = np.linspace(min(first, last), max(first, last), _GRID)
    grid = grid[orbit.reachable(grid)]
    spread = start.spread(orbit, grid)
    return grid, np.array([spread.position, spread.velocity, spread.clock])


def plan_of(
    rows: Rows, start: Start, orbit: Orbit, table: Table, budget: Budget, ends: tuple[float, float],
    always: Ints,
) -> Plan:  # fmt: skip
    """What the blocks of a file are held against.

    Parameters
    ----------
    ends : (float, float)
        First and last time stamp that are compared.
    always : (k,)
        Rows that are kept in any case.
    """

    spec = start.spec
    usable = _usable(rows, spec.clock, spec.particle)
    tolerances = [(_KINDS[q], t, 0) for q, t in budget.absolute.items()]
    tolerances += [(_KINDS[q], t, 1) for q, t in budget.per_revolution.items()]
    tolerances = [t for t in tolerances if t[0] in usable]
    turns = None
    if any(grows for _, _, grows in tolerances):

        def turns(times: Floats) -> Floats:
            return np.asarray(np.abs(table_azimuth(orbit, table, times)) / (2 * np.pi))

    spread = judged = None
    if start.is_open:
        grid, open_by = _spread(start, orbit, *ends)

        def spread(times: Floats) -> Floats:
            return np.array([np.interp(times, grid, row) for row in open_by])

        judged = _judged(grid, open_by[0], start, orbit, table, budget)
    return Plan(
        table=table,
        clock=second_clock_name(rows, spec.clock, spec.particle),
        shares=_shares(table, abs(ends[1] - ends[0])),
        tolerances=np.array([t for _, t, _ in tolerances], np.float64),
        kinds=np.array([k for k, _, _ in tolerances], np.int64),
        growing=np.array([g for _, _, g in tolerances], np.int64),
        orbit=_constants(rows, start, orbit, 0.5 * (ends[0] + ends[1])),
        chart=CHART_NUMBER[spec.chart],
        light=spec.particle == "light",
        spread=spread,
        judged=judged,
        turns=turns,
        always=always,
    )


def _shares(table: Table, span: float) -> Floats:
    """The table's bounds as the kernel takes them, and 1 by the span of the times."""
    root = float(np.sqrt(3.0))  # a bound for every component, and the length of three of them
    position, velocity, clock = (float(e) for e in table.error)
    slowest, width = table.slow, 2 * table.clock_width()
    inverse = 1.0 / span if span > 0 else 1.0
    return np.array([position * root, velocity * root, slowest, clock, width, inverse])


def _constants(rows: Rows, start: Start, orbit: Orbit, middle: float) -> Floats:
    """The orbit's units and constants as the kernel takes them."""
    spec = start.spec
    length = length_in(spec.system, spec.gm)
    c = float(SYSTEM[spec.system].c_exact)
    normal = np.asarray(orbit.angular_momentum_direction)
    axes = normal
    if not np.any(normal):  # radial motion has no plane: the one nearest to the x-y plane will do
        radial = np.asarray(orbit.position) / np.linalg.norm(orbit.position)
        other = np.array([0.0, 0.0, 1.0]) if abs(radial[2]) < 0.9 else np.eye(3)[0]
        axes = other - radial * float(radial @ other)
        axes = axes / np.linalg.norm(axes)
    unit = length if orbit.particle == "light" else length * c
    loose = np.zeros(2)
    if start.is_open and "velocity" in rows.head.series:
        head = first_row(rows)
        assert head.velocity is not None
        energy_open, momentum_open, _ = openness(head, head.velocity)
        loose = np.array([energy_open[0], momentum_open[0] / unit])
    excess, momentum = orbit.energy_minus_one.value, orbit.angular_momentum.value / unit
    return np.array([length, c, excess, momentum, *normal, *axes, *loose, middle])


def _usable(rows: Rows, clock: str, particle: str) -> set[int]:
    """Quantities the file has columns for; others are refused when the rows are judged."""
    found = {0}
    if "velocity" in rows.head.series:
        found |= {1, 4} if particle == "light" else {1, 3, 4}
    if second_clock_name(rows, clock, particle) is not None:
        found.add(2)
    return found


def _judged(
    grid: Floats, open_by: Floats, start: Start, orbit: Orbit, table: Table, budget: Budget
) -> Callable[[Floats], Bools]:
    """Which times are judged: those before the carried digits exceed the position tolerance."""

    spec = start.spec
    length = length_in(spec.system, spec.gm)
    position, _, _ = table.at(grid)
    radius = areal_radius(spec.chart, np.linalg.norm(position, axis=1) / length) * length
    turns = np.abs(table_azimuth(orbit, table, grid)) / (2 * np.pi)
    beyond = open_by > tightest(budget, turns, radius)
    elapsed = np.abs(grid - spec.start_time)
    until = float(elapsed[beyond].min()) if beyond.any() else np.inf

    def judged(times: Floats) -> Bools:
        return np.asarray(np.abs(times - spec.start_time) < until)

    return judged
