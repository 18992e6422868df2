"""The main job: judge a trajectory file against the exact solution at its own time stamps."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.budget import Budget, Judgement, judge, overall, parse_budget
from truefall.validate.compare import Comparison, Expected, compare
from truefall.validate.errors import InputError
from truefall.validate.growth import Growth, growth_of

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.trajectory import Trajectory

__all__ = ["CheckResult", "Floor", "check_file", "check_trajectory", "exit_status", "worst_verdict"]

Floats = npt.NDArray[np.float64]
_STATUS = {"unusable": 4, "fail": 1, "undecided": 3, "not-judged": 5, "pass": 0}
_DEFAULT_SHARE = 0.01  # of r, for predictable_until without a position budget


@dataclass(frozen=True)
class Floor:
    """Below which nothing can be said.  ``predictable_until`` is None if the end is never met."""

    position: float
    source: str
    predictable_until: float | None


@dataclass(frozen=True)
class CheckResult:
    """Everything known about one trajectory after a check.

    ``verdict`` is pass, fail, undecided, not-judged or unusable; ``reason`` is the sentence
    for a verdict that no tolerance explains.
    """

    file: str
    name: str
    verdict: str
    reason: str = ""
    trajectory: Trajectory | None = None
    spec: OrbitSpec | None = None
    orbit: Orbit | None = None
    expected: Expected | None = None
    comparison: Comparison | None = None
    judgements: tuple[Judgement, ...] = ()
    floor: Floor | None = None
    growth: Growth | None = None
    start_from: str = ""
    reference: str = "exact"

    def as_json(self) -> dict[str, Any]:
        """The object of the documentation for this file."""
        from truefall.validate.report.document import file_object

        return file_object(self)


def worst_verdict(results: Sequence[CheckResult]) -> str:
    """The first of unusable, fail, undecided, not-judged, pass that occurs."""
    verdicts = {r.verdict for r in results}
    return next((v for v in _STATUS if v in verdicts), "not-judged")


def exit_status(results: Sequence[CheckResult]) -> int:
    """Exit status of a check: the first of 4, 1, 3, 5, 0 that occurs."""
    return _STATUS[worst_verdict(results)]


def check_file(
    path: str | Path,
    *,
    orbit_file: str | Path | None = None,
    overrides: Mapping[str, Any] | None = None,
    budget: Mapping[str, Any] | None = None,
    against: str | Path | None = None,
    fit: bool = False,
) -> list[CheckResult]:
    """Judge every trajectory of a file.

    Parameters
    ----------
    path : str or Path
    orbit_file : str or Path, optional
        Start and metadata, before the file's own.
    overrides : mapping, optional
        Metadata that win over everything.
    budget : mapping, optional
        Tolerances that win, key by key (a [budget] table).
    against : str or Path, optional
        A stored result set in place of the exact solution.
    fit : bool
        Find the start that fits the file best.

    Returns
    -------
    list of CheckResult
        One for each trajectory; a file that cannot be used gives one "unusable" result.
    """
    from truefall.validate.formats import read_trajectories

    layer = dict(overrides or {})
    if budget:
        layer["budget"] = dict(budget)
    try:
        trajectories = read_trajectories(path, overrides=layer, orbit_file=orbit_file)
    except InputError as error:
        return [CheckResult(str(path), Path(path).stem, "unusable", str(error))]
    results = []
    for trajectory in trajectories:
        try:
            results.append(check_trajectory(trajectory, against=against, fit=fit))
        except InputError as error:
            results.append(CheckResult(str(path), trajectory.name, "unusable", str(error)))
    return results


def _start(trajectory: Trajectory, fit: bool) -> tuple[OrbitSpec, str]:
    """The orbit to hold the trajectory against, and where its start comes from."""
    from truefall.validate.orbit_file import parse_orbit

    spec = parse_orbit(
        {k: v for k, v in trajectory.metadata.items() if k != "samples"},
        trajectory.path,
        need_start=False,
    )
    if fit:
        from truefall.validate.fit import fit_start

        return fit_start(spec, trajectory), "fit"
    if spec.position is not None or spec.elements is not None:
        return spec, "orbit file"
    if trajectory.velocity is None:
        raise InputError(
            "has no velocities, so its first row is no start; give an orbit file (--orbit) or "
            "let --fit find the start that fits best",
            trajectory.path,
        )
    first = replace(
        spec,
        start_time=float(trajectory.time[0]),
        position=tuple(trajectory.position[0].tolist()),
        velocity=tuple(trajectory.velocity[0].tolist()),
    )
    return first, "first row"


def _part(trajectory: Trajectory, keep: npt.NDArray[np.bool_]) -> Trajectory:
    """The kept rows of a trajectory."""

    def cut(values: Floats | None) -> Floats | None:
        return None if values is None else values[keep]

    q = trajectory.quantisation
    return replace(
        trajectory,
        time=trajectory.time[keep],
        position=trajectory.position[keep],
        velocity=cut(trajectory.velocity),
        proper_time=cut(trajectory.proper_time),
        coordinate_time=cut(trajectory.coordinate_time),
        affine=cut(trajectory.affine),
        quantisation=replace(
            q,
            position=q.position[keep] if q.position.ndim == 2 else q.position,
            velocity=q.velocity[keep] if q.velocity.ndim == 2 else q.velocity,
        ),
        stored=None,
    )


def _expected(orbit: Orbit, times: Floats) -> Expected:
    """The exact solution at the time stamps, nothing interpolated."""
    states = orbit.at(times)
    if orbit.particle == "light":
        clock = (states.affine, states.affine_low, states.affine_bound)
    elif orbit.clock == "proper":
        clock = (states.coordinate_time, states.coordinate_time_low, states.coordinate_time_bound)
    else:
        clock = (states.proper_time, states.proper_time_low, states.proper_time_bound)
    return Expected(
        position=states.position,
        position_low=states.position_low,
        position_bound=states.position_bound + 0.0,
        velocity=states.velocity,
        velocity_low=states.velocity_low,
        velocity_bound=states.velocity_bound,
        clock=clock[0],
        clock_low=clock[1],
        clock_bound=clock[2],
        azimuth=states.azimuth,
        normal=orbit.angular_momentum_direction,
    )


def _tight(expected: Expected) -> Expected:
    """With second words at hand what is left open is 2^-104 of the size, not half an ulp.

    The engine bounds the high word alone; value and second word together are right to the
    digits it was asked for (32), and the comparison uses both.
    """
    tiny = 2.0**-104
    size = np.linalg.norm(expected.position, axis=1, keepdims=True)
    assert expected.velocity is not None
    speed = np.linalg.norm(expected.velocity, axis=1, keepdims=True)
    return replace(
        expected,
        position_bound=np.broadcast_to(size * tiny, expected.position.shape),
        velocity_bound=np.broadcast_to(speed * tiny, expected.velocity.shape),
        clock_bound=None if expected.clock is None else np.abs(expected.clock) * tiny,
    )


def _quantum_of_start(trajectory: Trajectory, start_from: str) -> Floats:
    if start_from != "first row":
        return np.zeros(6)
    q = trajectory.quantisation
    return np.concatenate([np.atleast_2d(q.position)[0], np.atleast_2d(q.velocity)[0]])


def check_trajectory(
    trajectory: Trajectory, *, against: str | Path | None = None, fit: bool = False
) -> CheckResult:
    """Judge one trajectory; raises InputError if it cannot be judged at all."""
    spec, start_from = _start(trajectory, fit)
    budget = parse_budget(spec.budget, spec.system, trajectory.path)
    orbit = spec.orbit()
    inside = orbit.reachable(trajectory.time)
    reason = _beyond(orbit, trajectory, inside)
    if not inside.any():
        return CheckResult(
            trajectory.path, trajectory.name, "fail", reason, trajectory, spec, orbit,
            start_from=start_from,
        )  # fmt: skip
    kept = _part(trajectory, inside)
    if against is None:
        expected, reference = _tight(_expected(orbit, kept.time)), "exact"
    else:
        from truefall.validate.against import stored_expected

        expected, reference = stored_expected(against, kept, orbit), f"stored: {against}"
    carried = np.zeros(len(kept))
    quantum = _quantum_of_start(trajectory, start_from)
    if against is None and quantum.any():
        from truefall.validate.carry import carried_floor

        carried = carried_floor(spec, orbit, kept.time, quantum)
    comparison = compare(
        kept,
        expected,
        energy_minus_one=orbit.energy_minus_one.value,
        momentum=orbit.angular_momentum.value,
        carried=carried,
    )
    floor, judged = _floor(comparison, expected, budget, carried)
    judgements = _judgements(comparison, budget, judged)
    verdict = overall(judgements)
    if len(trajectory) == 1 and start_from == "first row":
        verdict, reason, judgements = "not-judged", "the only row is the start itself", []
    elif reason:
        verdict = "fail"
    elif verdict == "not-judged":
        reason = "no budget was given; errors are reported all the same"
    return CheckResult(
        file=trajectory.path,
        name=trajectory.name,
        verdict=verdict,
        reason=reason,
        trajectory=kept,
        spec=spec,
        orbit=orbit,
        expected=expected,
        comparison=comparison,
        judgements=tuple(judgements),
        floor=floor,
        growth=growth_of(
            kept.time,
            comparison.distance,
            comparison.position_bound + comparison.position_quantum,
            spec.start_time,
        ),
        start_from=start_from,
        reference=reference,
    )


def _beyond(orbit: Orbit, trajectory: Trajectory, inside: npt.NDArray[np.bool_]) -> str:
    """The sentence for rows that lie past an end of the orbit, or nothing."""
    if inside.all():
        return ""
    row = int(np.argmin(inside))
    after = trajectory.time[row] >= orbit.start_time
    end = orbit.ends_after if after else orbit.ends_before
    if end is None:
        return ""
    return (
        f"the orbit ends at {end.reason} at time {end.time!r}, but the file goes on: row {row + 1} "
        f"has time {float(trajectory.time[row])!r}"
    )


def _floor(
    comparison: Comparison, expected: Expected, budget: Budget, carried: Floats
) -> tuple[Floor, npt.NDArray[np.bool_]]:
    """The floor under the position errors, and which samples may be judged."""
    limit = np.full(comparison.time.size, budget.absolute.get("position", np.inf))
    if "position" not in budget.absolute:
        limit = _DEFAULT_SHARE * np.linalg.norm(expected.position, axis=1)
    open_ = carried > limit
    until = float(comparison.time[int(np.argmax(open_))]) if open_.any() else None
    total = comparison.position_bound + comparison.position_quantum
    worst = int(np.argmax(total))
    source = "reference bound"
    if comparison.position_quantum[worst] > comparison.position_bound[worst]:
        source = "digits of the file"
    judged = ~np.logical_or.accumulate(open_) if open_.any() else np.ones(limit.size, dtype=bool)
    return Floor(float(total[worst]), source, until), judged


def _judgements(
    comparison: Comparison, budget: Budget, judged: npt.NDArray[np.bool_]
) -> list[Judgement]:
    series = {
        "position": (
            comparison.distance, comparison.position_bound, comparison.position_quantum
        ),
        "velocity": (
            comparison.velocity_error, comparison.velocity_bound, comparison.velocity_quantum
        ),
        "clock": (
            None if comparison.clock_error is None else np.abs(comparison.clock_error),
            comparison.clock_bound,
            comparison.clock_quantum,
        ),
    }  # fmt: skip
    for name, drift in (
        ("energy", comparison.energy), ("angular_momentum", comparison.angular_momentum)
    ):  # fmt: skip
        zero = np.zeros(comparison.time.size)
        series[name] = (
            (np.abs(drift.values), zero, drift.guard) if drift is not None else (None, None, None)
        )
    found = []
    for quantity, tolerance in budget.absolute.items():
        found.append(_one(comparison, quantity, np.full(judged.size, tolerance), series, judged))
    for quantity, tolerance in budget.per_revolution.items():
        if np.isnan(comparison.revolutions).any():
            raise InputError("a budget per revolution needs the exact reference, not a stored set")
        limit = tolerance * np.maximum(comparison.revolutions, 1.0)
        judgement = _one(comparison, quantity, limit, series, judged)
        found.append(replace(judgement, quantity=f"per_revolution.{quantity}"))
    return found


def _one(
    comparison: Comparison,
    quantity: str,
    limit: Floats,
    series: Mapping[str, tuple[Floats | None, Floats | None, Floats | None]],
    judged: npt.NDArray[np.bool_],
) -> Judgement:
    deviation, bound, quantum = series[quantity]
    if deviation is None or bound is None or quantum is None:
        raise InputError(
            f"there is a budget for {quantity}, but the file has nothing to judge it by "
            "(velocities for velocity, energy and angular_momentum; proper_time, affine or "
            "coordinate_time for clock); add the columns or drop that budget"
        )
    return judge(quantity, limit, deviation, bound, quantum, comparison.time, judged)
