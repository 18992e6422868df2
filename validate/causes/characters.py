"""The numerical character of a residual that no mistake explains."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from truefall.validate.causes.engine import Candidate, Search
from truefall.validate.causes.families.rounding import is_rounded, is_single
from truefall.validate.causes.finding import Finding, Value
from truefall.validate.causes.scene import Scene

__all__ = ["character"]

Floats = npt.NDArray[np.float64]
#: Mean squares, over the floor's, that the rounding of a good program reaches.
_ROUNDING = 1e4
#: Single precision rounds so many times more coarsely.
_SINGLE = 2.0**29
#: Likeness of neighbouring local errors above which they are no rounding.
_SMOOTH = 0.3
_MANY = 30
#: Share of the rows that must hold the local errors for these to be called random.
_EVEN = 0.15


def character(search: Search, method: Candidate | None, after: Floats | None) -> Finding | None:
    """Rounding, single precision, or a step too long; None where none of them fits.

    Parameters
    ----------
    search : Search
    method : Candidate or None
        The fit of a method's errors, if it explains the residual.
    after : (n,) or None
        What that fit leaves of the positions.
    """
    scene = search.scene
    misfit = search.nothing.misfit
    before = np.linalg.norm(scene.residual.position, axis=1) * scene.length
    smooth = _likeness(scene)
    if is_single(scene):
        return _rounding(
            before, misfit / _SINGLE**2, "single-precision-state",
            "the states are in single precision (24 bits), and kept so from step to step",
            "the types of the program's state and time",
        )  # fmt: skip
    random = smooth is not None and smooth < _SMOOTH and not is_rounded(scene)
    if misfit <= _ROUNDING:
        return _rounding(
            before, misfit, "round-off",
            "the residual is what rounding in double precision adds up to",
            "nothing, unless this accuracy must be beaten: then the step's arithmetic",
        )  # fmt: skip
    few = method is None or method.explains < 0.9
    if random and few and 0.1 < misfit / _SINGLE**2 <= _ROUNDING:
        return _rounding(
            before, misfit / _SINGLE**2, "single-precision-state",
            "the residual wanders as rounding to single precision (24 bits) makes it",
            "the types of the program's state, time and constants",
        )  # fmt: skip
    if random and (method is None or method.explains < 0.99):
        return _rounding(
            before, misfit, "round-off",
            "the residual wanders at random from row to row, as rounding does, at "
            f"{np.sqrt(misfit):.2g} times what double precision costs",
            "differences of nearly equal numbers, and digits lost between steps",
        )  # fmt: skip
    if method is None or after is None:
        return None
    return _step(scene, method, before, after)


def _likeness(scene: Scene) -> float | None:
    """Correlation of neighbouring local errors, (from velocities); None where unknown.

    A local error is a row's error less that of the row before, carried on by the exact motion.
    """
    rows = np.flatnonzero(scene.usable)
    if not scene.has_velocity or rows.size < _MANY:
        return None
    error = np.hstack([scene.residual.position, scene.residual.velocity])[rows]
    matrix = scene.transition[rows, :6]
    try:
        back = np.linalg.solve(matrix, error[:, :, None])[:, :, 0]
    except np.linalg.LinAlgError:
        return None
    step = np.einsum("nij,nj->ni", matrix[1:], np.diff(back, axis=0))[:, 3:]
    if not np.isfinite(step).all():
        return None
    radial = scene.expected.position[rows[1:]]
    radial = radial / np.linalg.norm(radial, axis=1, keepdims=True)
    normal = np.cross(scene.start[:3], scene.start[3:])
    size = float(np.linalg.norm(normal))
    if size == 0:
        return None
    across = np.cross(np.broadcast_to(normal / size, radial.shape), radial)
    parts = np.column_stack([np.sum(step * radial, axis=1), np.sum(step * across, axis=1)])
    power = np.sum(parts * parts, axis=0)
    if not np.all(power > 0):
        return None
    even = power**2 / np.sum(parts**4, axis=0) / len(parts)
    if even.min() < _EVEN:
        return 1.0  # a few rows hold all of it
    return float(
        max(np.max(np.abs(np.sum(parts[k:] * parts[:-k], axis=0) / power)) for k in (1, 2))
    )


def _rounding(before: Floats, misfit: float, cause: str, text: str, look_at: str) -> Finding:
    """A cause that has a size and no shape: within it, everything is explained."""
    allowed = _ROUNDING / max(misfit, 1e-300)
    explains = 1.0 if allowed >= 1.0 else allowed
    return Finding(cause, "numerics", explains, {}, text, look_at, before, np.zeros_like(before))


def _step(scene: Scene, method: Candidate, before: Floats, after: Floats) -> Finding:
    comparison = scene.result.comparison
    assert comparison is not None
    text = "the step is too long for the method, or its tolerance too large"
    parameters: dict[str, Value] = {}
    energy = comparison.drifts.energy
    if energy is not None and scene.revolutions.max() >= 1:
        values, time = energy.values[scene.usable], comparison.time[scene.usable]
        good = np.isfinite(values)
        values, time = values[good], time[good]
        trend = np.polyfit(time, values, 1) if good.sum() > 4 else np.zeros(2)
        drift = float(trend[0] * np.ptp(time))
        swing = float(np.std(values - np.polyval(trend, time))) if good.sum() > 4 else 0.0
        per = drift / float(np.ptp(scene.revolutions[scene.usable]) or 1.0)
        parameters["energy drift per revolution"] = Value(per, None, "1")
        if abs(drift) > 0.2 * swing:
            way = "is lost" if per < 0 else "grows"
            mean = "" if abs(drift) > 3 * swing else "swings, and in the mean "
            text += f": energy {mean}{way} by {abs(per):.2g} a revolution"
        else:
            text += ": energy swings and does not visibly drift"
    return Finding(
        "step-too-large", "numerics", method.explains, parameters, text,
        "the step or the tolerance of the integrator: halve it and compare", before, after,
    )  # fmt: skip
