"""The residual in words, where no known cause explains it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.scene import Scene

__all__ = ["describe"]

Floats = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]
_ENOUGH = 0.9
#: A part of the residual that begins this abruptly has an onset.
_BEFORE = 1e-3


def describe(scene: Scene) -> str:
    """Onset, direction, growth and rhythm of a residual, as far as each stands out."""
    comparison, result = scene.result.comparison, scene.result
    trajectory = result.trajectory
    assert comparison is not None
    assert trajectory is not None
    use = scene.usable & np.isfinite(comparison.distance)
    parts = {k: getattr(comparison, k)[use] for k in ("radial", "along", "cross")}
    size = comparison.distance[use]
    facts = ["no known cause explains the residual"]
    single = _outlier(size)
    if single is not None:
        row = int(np.flatnonzero(use)[single])
        facts.append(
            f"it is in one row alone, row {row + 1} (time {float(trajectory.time[row]):.9g})"
        )
        return "; ".join(facts)
    total = float(sum(np.sum(v**2) for v in parts.values()))
    if total == 0.0:
        facts.append("positions agree, it is in velocities or the second clock")
        return "; ".join(facts)
    power = {k: float(np.sum(v**2)) / total for k, v in parts.items()}
    leading = max(power, key=lambda k: power[k])
    facts.append(f"it is mostly {leading} ({100 * power[leading]:.0f} % of its square)")
    elapsed = np.abs(scene.elapsed[use])
    begin = _onset(size)
    if begin is not None:
        row = int(np.flatnonzero(use)[begin])
        facts.append(f"it starts at row {row + 1} (time {float(trajectory.time[row]):.9g})")
    facts.append(_growth(elapsed - (elapsed[begin] if begin is not None else 0.0), size))
    rhythm = _rhythm(scene, parts[leading], use)
    if rhythm:
        facts.append(rhythm)
    return "; ".join(facts)


def _outlier(size: Floats) -> int | None:
    """The only row that is far off, if there is one."""
    worst = int(np.argmax(size))
    others = np.delete(size, worst)
    if others.size >= 5 and size[worst] > 0 and others.max() < 1e-3 * size[worst]:
        return worst
    return None


def _onset(size: Floats) -> int | None:
    """The row from which on there is a residual, if it begins late and at once."""
    first = int(np.argmax(size > 0.1 * size.max()))
    if first >= max(3, 0.05 * size.size) and size[:first].max() < _BEFORE * size.max():
        return first
    return None


def _growth(elapsed: Floats, size: Floats) -> str:
    """The law of growth of the largest residual so far."""
    use = (elapsed > 0.03 * elapsed.max()) & (size > 0)
    if use.sum() < 8:
        return "it has too few rows for a law of growth"
    edges = np.linspace(elapsed[use].min(), elapsed[use].max() * (1 + 1e-12), 13)
    which = np.searchsorted(edges, elapsed[use], side="right")
    bins = [size[use][which == k].max() for k in range(1, 13) if (which == k).any()]
    times = [elapsed[use][which == k].mean() for k in range(1, 13) if (which == k).any()]
    if len(bins) < 5:
        return "it has too few rows for a law of growth"
    t, e = np.array(times), np.log(np.array(bins))
    laws = {}
    for name, x in (("t", np.log(t)), ("exp", t)):
        slope, offset = np.polyfit(x, e, 1)
        laws[name] = (float(slope), float(np.sum((e - slope * x - offset) ** 2)))
    scatter = float(np.sum((e - e.mean()) ** 2))
    power, left = laws["t"]
    if scatter < 0.3 or abs(power) < 0.25:
        return "it does not grow"
    rate, left_exponential = laws["exp"]
    if left_exponential < 0.5 * left and rate * np.ptp(t) > 3:
        return "it grows exponentially"
    if left > (1 - _ENOUGH) * scatter:
        return "it grows irregularly"
    if abs(power - round(power)) < 0.2:
        return {1: "it grows as t (secular)", 2: "it grows as t^2 (secular)"}.get(
            round(power), f"it grows as t^{power:.1f}"
        )
    return f"it grows as t^{power:.1f}"


def _rhythm(scene: Scene, part: Floats, use: Bools) -> str:
    """The period that a residual keeps, after its slow growth is taken off."""
    orbit = scene.result.orbit
    assert orbit is not None
    elapsed = scene.elapsed[use]
    azimuth = scene.revolutions[use] * 2 * np.pi
    slow = np.vander(elapsed / max(float(np.abs(elapsed).max()), 1e-300), 3)
    rest = part - slow @ np.linalg.lstsq(slow, part, rcond=None)[0]
    total = float(rest @ rest)
    if total < 0.02 * float(part @ part) or azimuth.max() < 4 * np.pi:
        return ""
    phases = {"azimuthal": azimuth}
    if orbit.radial_period is not None:
        phases["radial"] = 2 * np.pi * elapsed * scene.time / orbit.radial_period.value
    best, share = "", 0.6
    for name, phase in phases.items():
        waves = np.column_stack([f(k * phase) for k in (1, 2) for f in (np.cos, np.sin)])
        waves = np.column_stack([waves, waves * (elapsed / elapsed[-1])[:, None]])
        left = rest - waves @ np.linalg.lstsq(waves, rest, rcond=None)[0]
        explained = 1 - float(left @ left) / total
        if explained > share + 0.02:
            best, share = name, explained
    return f"beside that it is periodic at the {best} period" if best else ""
