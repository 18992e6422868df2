"""Units, axes, origin, and what the velocities are the rate of."""

from __future__ import annotations

from collections.abc import Callable
from itertools import permutations, product

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.flight import CHART_CODES, Sample
from truefall.validate.causes.plan import Plan, spoil_output
from truefall.validate.causes.scene import Scene

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_LENGTHS = (
    (1e3, "1000 times too large (m for km)"), (1e-3, "1000 times too small (km for m)"),
    (1e2, "100 times too large (cm for m)"), (1e-2, "100 times too small (m for cm)"),
    (1 / 149597870700.0, "astronomical units in place of metres"),
    (1 / 149597870.7, "astronomical units in place of kilometres"),
    (0.3048, "in feet's measure: 0.3048 times their value"), (1 / 0.3048, "in feet"),
    (2.0, "doubled (in GM/c^2 where 2GM/c^2 was the unit)"),
    (0.5, "halved (in 2GM/c^2 where GM/c^2 was the unit)"),
)  # fmt: skip


def _little(change: float) -> float:
    """A factor near 1; others are a unit's, and on a list."""
    if abs(change) > 0.2:
        raise ValueError("such a factor is a unit's")
    return 1 + change


def _scaled(plan: Plan, scene: Scene, place: float, pace: float, start_too: bool) -> Plan:
    def output(s: Sample, _: Rows) -> Sample:
        return Sample(s.position * place, s.velocity * pace, s.clock)

    def undo(start: Floats) -> Floats:
        return np.concatenate([start[:3] / place, start[3:] / pace])

    return spoil_output(plan, scene, output, undo if start_too else None)


def _unit(cause: str, factor: float, words: str, place: bool, pace: bool) -> Fault:
    what = {(True, True): "positions and velocities are {}",
            (True, False): "the positions are {}, the velocities are not",
            (False, True): "the velocities are {}, the positions are not"}[place, pace]  # fmt: skip
    return Fault(
        cause, "units", look_at="the unit of " + cause.split("-")[0], choices=1, label=words,
        wanted=lambda s: s.has_velocity or (place and pace),
        apply=lambda plan, s, _: _scaled(
            plan, s, factor if place else 1.0, factor if pace else 1.0, True
        ),
        say=lambda _: what.format(words),
    )  # fmt: skip


for _factor, _words in _LENGTHS:
    register(
        _unit("length-unit", _factor, _words, True, True),
        _unit("position-unit", _factor, _words, True, False),
        _unit("velocity-unit", _factor, _words, False, True),
    )
register(
    Fault("length-scaled", "units", look_at="the unit of lengths",
          parameters=(Parameter("relative change of lengths"),),
          apply=lambda plan, s, p: _scaled(plan, s, _little(p[0]), _little(p[0]), True),
          say=lambda f: f"positions and velocities are too large by {f.say(0)} of themselves"),
    Fault("velocity-scaled", "units", look_at="the unit of velocities",
          parameters=(Parameter("relative change of velocities"),),
          wanted=lambda s: s.has_velocity,
          apply=lambda plan, s, p: _scaled(plan, s, 1.0, _little(p[0]), True),
          say=lambda f: f"the velocities are too large by {f.say(0)} of themselves"),
)  # fmt: skip


# axes --------------------------------------------------------------------------------------------


def _turned(plan: Plan, scene: Scene, matrix: Floats) -> Plan:
    def output(s: Sample, _: Rows) -> Sample:
        return Sample(s.position @ matrix.T, s.velocity @ matrix.T, s.clock)

    return spoil_output(
        plan, scene, output,
        lambda start: np.concatenate([matrix.T @ start[:3], matrix.T @ start[3:]]),
    )  # fmt: skip


def _rotation(angles: tuple[float, ...]) -> Floats:
    """The matrix of a rotation vector (Rodrigues)."""
    w = np.array(angles, dtype=np.float64)
    size = float(np.linalg.norm(w))
    cross = np.array([[0, -w[2], w[1]], [w[2], 0, -w[0]], [-w[1], w[0], 0]])
    if size < 1e-8:
        return np.asarray(np.eye(3) + cross + cross @ cross / 2)
    return np.asarray(
        np.eye(3) + np.sin(size) / size * cross + (1 - np.cos(size)) / size**2 * cross @ cross
    )


def _names(order: tuple[int, ...], signs: tuple[float, ...]) -> str:
    return ", ".join(f"{'-' if s < 0 else ''}{'xyz'[k]}" for k, s in zip(order, signs, strict=True))


_LOOK_AXES = "the order and the senses of the axes"


def _axes(order: tuple[int, ...], signs: tuple[float, ...]) -> Fault:
    matrix = np.diag(signs) @ np.eye(3)[list(order)]
    names = _names(order, signs)
    return Fault(
        "axes-permuted" if order != (0, 1, 2) else "axes-mirrored", "units",
        look_at=_LOOK_AXES, choices=2, label=names,
        apply=lambda plan, s, _: _turned(plan, s, matrix),
        wanted=lambda s: not s.shared,
        say=lambda _: f"the columns x, y, z hold {names}",
    )  # fmt: skip


register(
    *(
        _axes(order, signs)
        for order in permutations(range(3))
        for signs in product((1.0, -1.0), repeat=3)
        if (order, signs) != ((0, 1, 2), (1.0, 1.0, 1.0))
    )
)


def _say_rotation(fitted: Fitted) -> str:
    parts = ", ".join(fitted.say(k) for k in range(3))
    size = np.degrees(np.linalg.norm(fitted.numbers))
    text = f"the axes are rotated by {size:.6g} degrees (about x, y, z: {parts})"
    if abs(size - 23.43929) < 0.01:
        text += ": the obliquity of the ecliptic"
    return text


register(
    Fault("axes-rotated", "units", look_at="the frame of the axes: equator, ecliptic, epoch",
          parameters=tuple(Parameter(f"rotation about {a}", "angle") for a in "xyz"),
          apply=lambda plan, s, p: _turned(plan, s, _rotation(p)),
          wanted=lambda s: not s.shared,
          guesses=lambda _: ((0.409, 0.0, 0.0), (-0.409, 0.0, 0.0)),
          say=_say_rotation),
    Fault("origin-shifted", "units", look_at="the origin that positions are counted from",
          parameters=tuple(Parameter(f"shift along {a}", "length") for a in "xyz"),
          apply=lambda plan, s, p: spoil_output(
              plan, s, lambda q, _: Sample(q.position + np.array(p), q.velocity, q.clock),
              lambda start: np.concatenate([start[:3] - np.array(p), start[3:]])),
          say=lambda f: "all positions are shifted by the vector "
          f"({', '.join(f.say(k) for k in range(3))})"),
)  # fmt: skip


def _degrees(plan: Plan, factor: float) -> Plan:
    """The azimuth about the z axis of the coordinates off by a factor."""

    def output(s: Sample, _: Rows) -> Sample:
        x, y = s.position[:, 0], s.position[:, 1]
        angle = np.arctan2(y, x) * (factor - 1)
        c, w = np.cos(angle), np.sin(angle)

        def turn(v: Floats) -> Floats:
            return np.column_stack([v[:, 0] * c - v[:, 1] * w, v[:, 0] * w + v[:, 1] * c, v[:, 2]])

        return Sample(turn(s.position), turn(s.velocity), s.clock)

    return plan.write_by(output)


def _angle_unit(factor: float, words: str) -> Fault:
    return Fault(
        "degrees-for-radians", "units", look_at="sines and cosines of the azimuth", choices=1,
        label=words,
        apply=lambda plan, _, _p: _degrees(plan, factor),
        say=lambda _: f"the azimuth is in the wrong unit: {words}",
    )  # fmt: skip


register(
    _angle_unit(np.pi / 180, "radians taken for degrees"),
    _angle_unit(180 / np.pi, "degrees taken for radians"),
)


# velocities --------------------------------------------------------------------------------------


def _per_proper_time(scene: Scene, s: Sample) -> Floats:
    """dT/dtau at each state, from the metric."""
    from truefall.validate.causes.flight_kernel import _metric

    rho = np.linalg.norm(s.position, axis=1)
    radial = np.sum(s.position * s.velocity, axis=1) / rho
    across = np.sum(s.velocity**2, axis=1) - radial**2
    metric = np.array([_metric.py_func(CHART_CODES[scene.law.chart], float(r)) for r in rho])
    a, _, b, _, c, _, q, _ = metric.T
    rate = -(a + 2 * b * radial + c * radial**2 + q / rho**2 * across)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(1 / np.sqrt(rate))


def _static_observer(scene: Scene, s: Sample) -> Floats:
    """Velocities that observers at rest measure (charts without shift)."""
    from truefall.validate.causes.flight_kernel import _metric

    rho = np.linalg.norm(s.position, axis=1)
    unit = s.position / rho[:, None]
    radial = np.sum(unit * s.velocity, axis=1)[:, None] * unit
    metric = np.array([_metric.py_func(CHART_CODES[scene.law.chart], float(r)) for r in rho])
    a, _, _, _, c, _, q, _ = metric.T
    with np.errstate(invalid="ignore"):
        out = np.sqrt(-c / a)[:, None]
        across = (np.sqrt(q / -a) / rho)[:, None]
    return np.asarray(radial * out + (s.velocity - radial) * across)


def _velocities(
    plan: Plan, scene: Scene, meaning: Callable[[Scene, Sample], Floats], factor: bool
) -> Plan:
    def told(s: Sample) -> Floats:
        value = meaning(scene, s)
        return s.velocity * value[:, None] if factor else value

    def undo(start: Floats) -> Floats:
        true = start.copy()
        for _ in range(60):
            s = Sample(true[None, :3], true[None, 3:], np.zeros(1))
            true = np.concatenate([start[:3], true[3:] + (start[3:] - told(s)[0])])
        return true

    return spoil_output(plan, scene, lambda s, _: Sample(s.position, told(s), s.clock), undo)


_LOOK_VELOCITY = "what the velocities are the rate of: they must be d position / d (chart time)"
register(
    Fault("velocity-per-proper-time", "units", look_at=_LOOK_VELOCITY,
          wanted=lambda s: s.has_velocity and not s.law.light,
          apply=lambda plan, s, _: _velocities(plan, s, _per_proper_time, True),
          say=lambda _: "the velocities are per proper time, not per chart time"),
    Fault("velocity-of-static-observers", "units", look_at=_LOOK_VELOCITY,
          wanted=lambda s: s.has_velocity and s.law.chart in ("areal", "isotropic", "harmonic"),
          apply=lambda plan, s, _: _velocities(plan, s, _static_observer, False),
          say=lambda _: "the velocities are those that observers at rest would measure"),
)  # fmt: skip
