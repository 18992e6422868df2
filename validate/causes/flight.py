"""Flights: trajectories as a faulty program would make them, in units of the declared GM and c.

A flight is used for differences only: faulty minus faultless, integrated alike, is added to the
exact solution.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["CHART_CODES", "MOST_STEPS", "Law", "Sample", "fly", "light_velocity", "steps_of"]

Floats = npt.NDArray[np.float64]
CHART_CODES = {
    "areal": 0, "isotropic": 1, "harmonic": 2, "kerr-schild": 3, "painleve-gullstrand": 4,
    "eddington-finkelstein": 5,
}  # fmt: skip
_INNER = {0: 2.0 + 1e-4, 1: 0.5 + 1e-4, 2: 1.0 + 1e-4, 3: 1e-3, 4: 1e-3, 5: 1e-3}
_TOLERANCE = 3e-15
MOST_STEPS = 20_000


@dataclass(frozen=True)
class Law:
    """What a program takes for the law of motion.

    Attributes
    ----------
    chart : str
        Chart of its states.
    light, proper : bool
        Whether light moves; whether times are proper times.
    gm, c : float
        In units of the declared ones.
    exact, first, second : float
        Weights of (exact minus Newton) and of the post-Newtonian terms beside Newton's.
    clock : int
        0 right; 1 without the static field's factor; 2 without motion; 3 first order.
    launch : str
        How fast light starts: at its "own" speed under this law (c, if it is Newton's), or as
        "given".
    forces : (10,)
        Radial, along, cross; fixed x, y, z; drag on v |v|, on v; inverse cube, inverse fourth.
    method : (11,)
        Errors of a numerical method, and the power of 1/r that they grow with.
    """

    chart: str
    light: bool = False
    proper: bool = False
    gm: float = 1.0
    c: float = 1.0
    exact: float = 1.0
    first: float = 0.0
    second: float = 0.0
    clock: int = 0
    forces: tuple[float, ...] = (0.0,) * 10
    method: tuple[float, ...] = (0.0,) * 11
    launch: str = "own"

    @property
    def geodesic(self) -> bool:
        """Whether the exact engine can follow it."""
        plain = (self.exact, self.first, self.second, self.clock) == (1.0, 0.0, 0.0, 0)
        plain = plain and (self.launch == "own" or not self.light)
        return plain and not any(self.forces) and not any(self.method[:10])

    def numbers(self) -> Floats:
        """The law as the kernel reads it."""
        head = [CHART_CODES[self.chart], self.exact, self.first, self.second, self.clock,
                self.light, self.proper]  # fmt: skip
        return np.array([*head, *self.forces, *self.method], dtype=np.float64)


@dataclass(frozen=True)
class Sample:
    """States of rows: position (n, 3), velocity (n, 3), second clock (n,); NaN: not reached."""

    position: Floats
    velocity: Floats
    clock: Floats

    def minus(self, other: Sample) -> Sample:
        return Sample(
            self.position - other.position, self.velocity - other.velocity, self.clock - other.clock
        )

    def plus(self, other: Sample) -> Sample:
        return Sample(
            self.position + other.position, self.velocity + other.velocity, self.clock + other.clock
        )


def light_velocity(chart: str, position: Floats, direction: Floats) -> Floats:
    """The velocity of light in a direction (GM = c = 1); the larger root inside the horizon."""
    from truefall.validate.causes.flight_kernel import _metric

    rho = float(np.linalg.norm(position))
    unit = direction / np.linalg.norm(direction)
    radial = float(unit @ position) / rho
    a, _, b, _, c, _, q, _ = _metric(CHART_CODES[chart], rho)
    square = c * radial**2 + q / rho**2 * (1 - radial**2)
    half = b * radial
    root = np.sqrt(max(half * half - square * a, 0.0))
    # the stable form of (-half + root) / square
    size = (root - half) / square if half <= 0 and square != 0 else -a / (half + root)
    return np.asarray(unit * size)


def fly(
    law: Law, position: Floats, velocity: Floats, times: Floats, limit: int = MOST_STEPS
) -> Sample:
    """States under a law at times counted from the start (any order), in declared units.

    Rows past ``limit`` steps, or past the horizon of a chart that ends there, are NaN.
    """
    return _fly(law, position, velocity, times, limit)[0]


def steps_of(law: Law, position: Floats, velocity: Floats, times: Floats) -> int:
    """How many steps a flight takes."""
    return _fly(law, position, velocity, times, MOST_STEPS)[1]


def _fly(
    law: Law, position: Floats, velocity: Floats, times: Floats, limit: int
) -> tuple[Sample, int]:
    from truefall.validate.causes.flight_kernel import fill_flight

    length, pace = law.gm / law.c**2, law.c
    duration = length / pace
    x, v = position / length, velocity / pace
    if law.light and law.launch == "own":
        v = light_velocity(law.chart, x, v) if law.exact == 1.0 else v / np.linalg.norm(v)
    start = np.concatenate([x, v, [0.0]])
    numbers, inner = law.numbers(), _INNER[CHART_CODES[law.chart]]
    stamps = times / duration
    found = np.full((times.size, 7), np.nan)
    used = 0
    for rows in (np.flatnonzero(stamps >= 0), np.flatnonzero(stamps < 0)):
        if not rows.size:
            continue
        order = rows[np.argsort(np.abs(stamps[rows]), kind="stable")]
        part = np.full((order.size, 7), np.nan)
        used += fill_flight(start, numbers, stamps[order], inner, _TOLERANCE, limit, part)[1]
        found[order] = part
    clock = found[:, 6] * (length if law.light else duration)
    return Sample(found[:, :3] * length, found[:, 3:6] * pace, clock), used
