"""The main job: judge a trajectory file against the exact solution at its own time stamps."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.against import load_stored, stored_expected
from truefall.validate.budget import Judgement, overall, parse_budget
from truefall.validate.carry import end_spread, exact_orbit, second_clock, stamp_spread
from truefall.validate.compare import Comparison, Expected, compare
from truefall.validate.drift import drifts_of
from truefall.validate.errors import InputError, UsageError
from truefall.validate.growth import Growth, growth_of
from truefall.validate.judging import (
    Floor,
    floor_of,
    judgements_of,
    position_tolerance,
)
from truefall.validate.starts import Start, find_start

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.causes import Explanation
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.streaming.totals import Totals
    from truefall.validate.trajectory import Trajectory

__all__ = ["CheckResult", "Floor", "check_file", "check_trajectory", "exit_status", "worst_verdict"]

Floats = npt.NDArray[np.float64]
_STATUS = {"unusable": 4, "fail": 1, "undecided": 3, "not-judged": 5, "pass": 0}
#: What value and second word together leave open, relative to the size of the vector.
_TWO_WORDS = 2.0**-104


@dataclass(frozen=True)
class CheckResult:
    """Everything known about one trajectory after a check.

    ``verdict`` is pass, fail, undecided, not-judged or unusable; ``reason`` is the sentence
    for a verdict that no tolerance explains.  ``trajectory`` holds the rows that were compared
    (those the orbit reaches), of ``samples`` in the file; ``tolerances`` are the budget's;
    ``certified`` of the rows were held against enclosed values, the others against the table.
    ``explanation`` holds the causes, where they were asked for.  Of a long file only the rows
    that matter are in memory; ``totals`` then holds the statistics of all.
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
    samples: int = 0
    certified: int = 0
    tolerances: Mapping[str, float] = field(default_factory=dict)
    start_from: str = ""
    reference: str = "exact"
    explanation: Explanation | None = None
    totals: Totals | None = None

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

    Raises
    ------
    UsageError
        For options that contradict each other.
    """
    from truefall.validate.formats import read_trajectories

    if fit and against is not None:
        raise UsageError("--fit finds a start, --against gives the expected values: use one")
    layer = dict(overrides or {})
    if budget:
        layer["budget"] = dict(budget)
    try:
        if not fit and against is None:
            long = _long_file(path, layer, orbit_file)
            if long is not None:
                return long
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


def _long_file(
    path: str | Path, layer: Mapping[str, Any], orbit_file: str | Path | None
) -> list[CheckResult] | None:
    """Results for a file whose rows are better not all read into memory; None for others."""
    from truefall.validate.formats import long_rows

    with long_rows(path, overrides=layer, orbit_file=orbit_file) as sources:
        if not sources:
            return None
        from truefall.validate.streaming.long_check import check_rows
        from truefall.validate.streaming.rows import first_row

        results: list[CheckResult] = []
        for rows in sources:
            try:
                start = find_start(first_row(rows), fit=False, stored=None)
                result = check_rows(rows, start)
            except InputError as error:
                result = CheckResult(str(path), rows.head.name, "unusable", str(error))
            if result is None:  # no table of this orbit: every row exactly, in memory
                return None
            results.append(result)
        return results


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


def exact_expected(orbit: Orbit, times: Floats) -> Expected:
    """The exact solution at the time stamps, nothing interpolated.

    The engine bounds the high word alone; value and second word together are proven to
    2^-107 of the vector's size (32 digits), of which 2^-104 allows for the rounding of the
    second word, and the comparison uses both.
    """
    states = orbit.at(times)
    clock, clock_low, _ = second_clock(states)

    def open_by(vectors: Floats) -> Floats:
        size = np.linalg.norm(vectors, axis=1, keepdims=True)
        return np.broadcast_to(size * _TWO_WORDS, vectors.shape)

    return Expected(
        position=states.position,
        position_low=states.position_low,
        position_bound=open_by(states.position),
        velocity=states.velocity,
        velocity_low=states.velocity_low,
        velocity_bound=open_by(states.velocity),
        clock=clock,
        clock_low=clock_low,
        clock_bound=np.abs(clock) * _TWO_WORDS,
        azimuth=states.azimuth,
        normal=orbit.angular_momentum_direction,
    )


def check_trajectory(
    trajectory: Trajectory,
    *,
    against: str | Path | None = None,
    fit: bool = False,
    orbit: Orbit | None = None,
) -> CheckResult:
    """Judge one trajectory; ``orbit``, where given, is that of its declared start, built before.

    Raises
    ------
    InputError
        If it cannot be judged at all.
    """
    from truefall.validate.screening import MANY_ROWS

    stored = None if against is None else load_stored(against, trajectory)
    start = find_start(trajectory, fit=fit, stored=stored)
    if stored is None and len(trajectory) >= MANY_ROWS:
        from truefall.validate.streaming.long_check import check_rows
        from truefall.validate.streaming.rows import MemoryRows

        result = check_rows(MemoryRows(trajectory), start)
        if result is not None:
            return result
    spec = start.spec
    budget = parse_budget(trajectory.metadata.get("budget", {}), spec.system, trajectory.path)
    orbit = exact_orbit(spec) if orbit is None else orbit
    inside = orbit.reachable(trajectory.time)
    beyond, past = beyond_end(spec, orbit, trajectory, inside, start.half_units)
    result = CheckResult(
        trajectory.path, trajectory.name, beyond, past, trajectory, spec, orbit,
        samples=len(trajectory), start_from=start.source,
        reference="exact" if against is None else f"stored: {against}",
    )  # fmt: skip
    if not inside.any():
        return result
    kept = _part(trajectory, inside)
    certified = len(kept)
    if stored is not None:
        expected = stored_expected(stored, orbit, inside, bool(budget.per_revolution))
        certified = 0
    else:
        expected = exact_expected(orbit, kept.time)
    comparison = compared(kept, start, orbit, expected)
    floor, judged = floor_of(
        comparison, position_tolerance(comparison, budget, radius_of(spec, expected))
    )
    judgements = judgements_of(
        comparison, budget, judged, trajectory.path, spec.particle == "light"
    )
    verdict, reason = verdict_of(trajectory, len(trajectory), start, judgements, beyond, past)
    return replace(
        result,
        verdict=verdict,
        reason=reason,
        trajectory=kept,
        certified=certified,
        expected=expected,
        comparison=comparison,
        judgements=tuple(judgements),
        tolerances=budget.flat(),
        floor=floor,
        growth=growth_of(
            kept.time, comparison.distance, comparison.position_guard.total, spec.start_time
        ),
    )


def compared(kept: Trajectory, start: Start, orbit: Orbit, expected: Expected) -> Comparison:
    """The comparison of a trajectory with expected values at its stamps."""
    drifts = drifts_of(
        kept,
        energy_minus_one=orbit.energy_minus_one.value,
        momentum=orbit.angular_momentum.value,
        normal=expected.normal,
        start_open=start.is_open,
    )
    return compare(
        kept,
        expected,
        drifts=drifts,
        stamps=stamp_spread(orbit, kept.time, kept.quantisation.time),
        carried=start.spread(orbit, kept.time),
    )


def radius_of(spec: OrbitSpec, expected: Expected) -> Floats:
    """Areal radius of the expected positions, (n,), in the file's length."""
    from truefall.reference.charts import areal_radius
    from truefall.reference.units import length_in

    length = length_in(spec.system, spec.gm)
    return areal_radius(spec.chart, np.linalg.norm(expected.position, axis=1) / length) * length


def verdict_of(
    trajectory: Trajectory,
    samples: int,
    start: Start,
    judgements: Sequence[Judgement],
    beyond: str,
    past: str,
) -> tuple[str, str]:
    """The verdict on the whole file, and the sentence for one that no tolerance explains."""
    verdict = overall(judgements)
    if past:
        return ("fail" if "fail" in (beyond, verdict) else "undecided"), past
    alone = samples == 1 and trajectory.time[0] == start.spec.start_time
    if alone and (start.source == "first row" or verdict != "fail"):
        return "not-judged", "the only row is the start itself"
    if verdict == "not-judged":
        return verdict, "no budget was given; errors are reported all the same"
    return verdict, ""


def beyond_end(
    spec: OrbitSpec,
    orbit: Orbit,
    trajectory: Trajectory,
    inside: npt.NDArray[np.bool_],
    quantum: Floats,
) -> tuple[str, str]:
    """Verdict and sentence for rows past an end of the orbit; "not-judged" and "" without any.

    The end of an orbit whose start has few digits is itself open by what those leave open.
    """
    if inside.all():
        return "not-judged", ""
    outside = np.flatnonzero(~inside)
    after = bool(trajectory.time[outside[0]] >= orbit.start_time)
    end = orbit.ends_after if after else orbit.ends_before
    if end is None:
        raise ArithmeticError("an orbit without an end refused a time")
    slack = end_spread(spec, orbit, quantum, after) + trajectory.quantisation.time
    furthest = float(np.max(np.abs(trajectory.time[outside] - end.time)))
    row = int(outside[0])
    sentence = (
        f"the orbit ends at {end.reason} at time {end.time!r}, but the file goes on: row {row + 1} "
        f"has time {float(trajectory.time[row])!r}"
    )
    if furthest <= slack:
        return "undecided", sentence + "; its digits cannot settle whether that is past the end"
    return "fail", sentence
