"""Numerics: rows that are interpolated between larger steps."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.fault import Fault, Fitted, Parameter, register
from truefall.validate.causes.flight import Law, Sample, fly
from truefall.validate.causes.plan import Plan
from truefall.validate.causes.scene import Scene

Floats = npt.NDArray[np.float64]
Rows = npt.NDArray[np.intp]
_MULTIPLES = (2, 3, 4, 5, 6, 8, 10, 12, 16, 20, 25, 32, 40, 50, 64)
_MOST_NODES = 4000


@lru_cache(maxsize=64)
def _nodes(law: Law, start: tuple[float, ...], step: float, first: int, last: int) -> Floats:
    times = np.arange(first, last + 1, dtype=np.float64) * step
    times = np.asarray(times, dtype=np.float64)
    s = fly(law, np.array(start[:3]), np.array(start[3:]), times)
    return np.column_stack([s.position, s.velocity, s.clock])


def _between(plan: Plan, scene: Scene, step: float, kind: str, clock: bool) -> Plan:
    """Nodes at whole steps from the start; the rows between them by a low polynomial."""
    span = np.abs(plan.stamps).max()
    if not step > 0 or span / step > _MOST_NODES or span < 3 * step:
        raise ValueError("the step does not fit the file")
    place = plan.stamps / step
    first, last = int(np.floor(place.min())) - 1, int(np.ceil(place.max())) + 2
    values = _nodes(plan.law, tuple(plan.start.tolist()), step, first, last)
    whole = np.floor(place + 1e-9)
    share = (place - whole)[:, None]
    k = whole.astype(int) - first
    a, b = values[k], values[k + 1]
    if kind == "linear":
        found = a + (b - a) * share
    elif kind == "cubic":  # through four nodes
        z, d = values[k - 1], values[k + 2]
        w = share
        found = (
            -w * (w - 1) * (w - 2) / 6 * z + (w + 1) * (w - 1) * (w - 2) / 2 * a
            - (w + 1) * w * (w - 2) / 2 * b + (w + 1) * w * (w - 1) / 6 * d
        )  # fmt: skip
    else:  # Hermite: by positions and velocities at two nodes
        w, h = share, step
        found = a + (b - a) * share
        pa, pb, va, vb = a[:, :3], b[:, :3], a[:, 3:6], b[:, 3:6]
        found[:, :3] = (
            (1 + 2 * w) * (1 - w) ** 2 * pa + w * w * (3 - 2 * w) * pb
            + h * w * (1 - w) ** 2 * va - h * w * w * (1 - w) * vb
        )  # fmt: skip
        found[:, 3:6] = (
            (6 * w * w - 6 * w) * (pa - pb) / h + (1 - 4 * w + 3 * w * w) * va
            + (3 * w * w - 2 * w) * vb
        )  # fmt: skip
    exact = fly(plan.law, plan.start[:3], plan.start[3:], plan.stamps, scene.patience)
    change = Sample(
        found[:, :3] - exact.position, found[:, 3:6] - exact.velocity, found[:, 6] - exact.clock
    )

    def output(s: Sample, rows: Rows) -> Sample:
        return Sample(
            s.position + change.position[rows],
            s.velocity + change.velocity[rows],
            s.clock + change.clock[rows] if clock else s.clock,
        )

    return plan.write_by(output)


@lru_cache(maxsize=2)
def _steps(scene: Scene) -> list[tuple[float, ...]]:
    """Steps worth a try: multiples of the rows' spacing, those with zeros of the residual first."""
    spacing = abs(float(np.median(np.diff(scene.elapsed))))
    size = np.linalg.norm(scene.residual.position, axis=1)
    first = int(np.argmin(np.abs(scene.elapsed)))
    ranked = []
    for m in _MULTIPLES:
        nodes = size[first::m]
        between = np.delete(size[first:], slice(None, None, m))
        if nodes.size > 3 and between.size:
            ranked.append((float(np.median(nodes)) / max(float(np.median(between)), 1e-300), m))
    ranked.sort()
    chosen = [m for share, m in ranked if share < 0.1][:3]
    # a multiple of the true step has zeros too: the smallest one that has them counts
    return [(m * spacing,) for m in sorted(chosen)[-3:]] + _rhythm(scene, size)


def _rhythm(scene: Scene, size: Floats) -> list[tuple[float, ...]]:
    """The period of the residual's bumps, where the rows are even."""
    t = scene.elapsed
    if t.size < 32 or not np.allclose(np.diff(t), t[1] - t[0], rtol=1e-6):
        return []
    level = np.sqrt(size / max(float(size.max()), 1e-300))
    power = np.abs(np.fft.rfft((level - level.mean()) * np.hanning(level.size))) ** 2
    power[:3] = 0.0
    peak = int(np.argmax(power))
    if peak < 3 or power[peak] < 20 * np.median(power[power > 0]):
        return []
    if peak + 1 < power.size:
        left, mid, right = np.log(power[peak - 1 : peak + 2] + 1e-300)
        peak_at = peak + 0.5 * (left - right) / (left - 2 * mid + right)
    else:
        peak_at = float(peak)
    spacing = abs(float(t[-1] - t[0])) / (t.size - 1)
    seen = peak_at / t.size  # in cycles a row; shorter steps show an alias of theirs
    return [_tuned(t, level, spacing / f) for f in (seen, 1 - seen, 1 + seen)]


def _tuned(t: Floats, level: Floats, rough: float) -> tuple[float, ...]:
    """The step near a rough one whose bumps follow the residual best."""
    trials = rough * np.linspace(0.95, 1.05, 801)
    share = np.mod(t[None, :] / trials[:, None], 1.0)
    bump = share * (1 - share)
    bump -= bump.mean(axis=1, keepdims=True)
    likeness = bump @ (level - level.mean()) / np.linalg.norm(bump, axis=1)
    return (float(trials[int(np.argmax(likeness))]),)


def _wanted(scene: Scene) -> bool:
    return len(scene) >= 12 and bool(_steps(scene))


def _say(fitted: Fitted, kind: str) -> str:
    spacing = abs(float(np.median(np.diff(fitted.scene.elapsed))))
    words = {"linear": "linearly", "cubic": "by cubics through four of them",
             "Hermite": "by cubics with their velocities"}[kind]  # fmt: skip
    return (
        f"rows are interpolated {words} between steps of {fitted.say(0)} "
        f"({fitted.numbers[0] / spacing:.4g} rows)"
    )


def _interpolated(kind: str, clock: bool) -> Fault:
    def apply(plan: Plan, scene: Scene, p: tuple[float, ...]) -> Plan:
        if p[0] == 0.0:
            raise ValueError("a step of nothing")
        return _between(plan, scene, p[0], kind, clock)

    return Fault(
        cause="output-interpolated",
        family="numerics",
        label=f"{kind}, clock too" if clock else kind,
        choices=1,
        parameters=(Parameter("step", "time", 1e-9),),
        guesses=_steps,
        wanted=lambda s: _wanted(s) and (s.has_clock or not clock),
        apply=apply,
        say=lambda f: _say(f, kind),
        look_at="how output times are served: let the integrator stop there, or use its own "
        "dense output",
    )


for _kind in ("linear", "cubic", "Hermite"):
    register(_interpolated(_kind, False), _interpolated(_kind, True))
