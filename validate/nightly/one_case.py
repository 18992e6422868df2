"""One propagator on one case: written out, run, read back, judged, explained."""

from __future__ import annotations

import hashlib
import itertools
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.nightly.explained import explained
from truefall.validate.nightly.kept import KeptOrbit, expected_orbit
from truefall.validate.nightly.program import Ran, Workplace, run_program, workplace
from truefall.validate.nightly.record import CaseRecord
from truefall.validate.screening import MANY_ROWS

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult
    from truefall.validate.nightly.suite import Propagator
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.trajectory import Trajectory

__all__ = ["CaseResult", "Job", "blank", "run_job"]

Floats = npt.NDArray[np.float64]
_CURVE = 80
_SOME = 1000
_CLOCKS = ("proper_time", "coordinate_time", "affine")


@dataclass(frozen=True)
class Job:
    """What a worker needs to know; everything in it can be sent to another machine.

    ``kept`` says whether expected states may be kept in the worker's own user folder;
    ``own_budget`` that the budget is the case's: of it only what the output has columns for is
    judged, while a budget of the suite demands the columns.
    """

    key: str
    propagator: Propagator
    case: str
    spec: OrbitSpec
    folder: str
    case_digest: str = ""
    title: str = ""
    why: str = ""
    repeat: int = 1
    kept: bool = True
    own_budget: bool = False


@dataclass(frozen=True)
class CaseResult:
    """What came of a job.

    ``obtained`` and ``expected`` are arrays by their names in a result set, (n,) or (n, 3);
    ``attributes`` go with the obtained trajectory; ``repeated`` says whether a second run gave
    the same bits (None: there was none); ``environment`` is the worker's.
    """

    record: CaseRecord
    obtained: Mapping[str, Floats] = field(default_factory=dict)
    expected: Mapping[str, Floats] = field(default_factory=dict)
    attributes: Mapping[str, Any] = field(default_factory=dict)
    repeated: bool | None = None
    environment: Mapping[str, str] = field(default_factory=dict)


def blank(job: Job, outcome: str, verdict: str, reason: str) -> CaseRecord:
    """The record of a job that gave no numbers."""
    return CaseRecord(
        key=job.key, propagator=job.propagator.name, case=job.case, verdict=verdict,
        reason=reason, outcome=outcome, title=job.title, why=job.why, case_digest=job.case_digest,
    )  # fmt: skip


def run_job(job: Job) -> CaseResult:
    """Run and judge; whatever goes wrong becomes the result of this case."""
    from truefall.validate.nightly.environment import environment

    try:
        result = _run(job)
    except InputError as error:
        result = CaseResult(blank(job, "could not start", "not-run", str(error)))
    except Exception as error:
        sentence = f"a fault of truefall itself: {type(error).__name__}: {error}"
        result = CaseResult(blank(job, "fault of truefall", "not-run", sentence))
    return replace(result, environment=environment())


def _given(job: Job) -> tuple[OrbitSpec, KeptOrbit]:
    """The case as the program is told it: a start in numbers, times that the orbit reaches.

    Elements become position and velocity in float64, and the program is held against what it
    was told.
    """
    from truefall.validate.nightly.kept import kept_folder

    folder = kept_folder() if job.kept else None
    spec = job.spec
    if spec.elements is not None:
        first = expected_orbit(replace(spec, times=(spec.start_time,)), folder)
        spec = replace(spec, elements=None, position=first.position, velocity=first.velocity)
    times = np.asarray(spec.times)
    if times.size < MANY_ROWS:
        orbit = expected_orbit(spec, folder)
        times = orbit.known.time
    else:  # judged by the table; of the exact states only some are kept
        times = times[spec.orbit().reachable(times)]
        some = times[:: -(-times.size // _SOME)] if times.size else times
        orbit = expected_orbit(replace(spec, times=tuple(some.tolist())), folder)
    if not times.size:
        raise InputError("the orbit ends before all of the case's times", spec.path)
    return replace(spec, times=tuple(times.tolist())), orbit


def orbit_mapping(spec: OrbitSpec) -> dict[str, Any]:
    """The orbit file that a program under test reads, as a table of keys."""
    return {
        "name": spec.name, "system": spec.system, "gm": spec.gm, "particle": spec.particle,
        "chart": spec.chart, "clock": spec.clock,
        "start": {"time": spec.start_time, "position": list(spec.position or ()),
                  "velocity": list(spec.velocity or ())},
        "samples": {"times": list(spec.times or ())},
    }  # fmt: skip


def _write_orbit(spec: OrbitSpec, place: Workplace) -> None:
    mapping = orbit_mapping(spec)
    if place.orbit.suffix == ".json":
        import json

        place.orbit.write_text(json.dumps(mapping), "utf-8")
        return
    from truefall.validate.formats.metadata import dump_toml

    samples = mapping.pop("samples")
    times = ", ".join(map(repr, samples["times"]))
    text = "\n".join([*dump_toml(mapping), "", "[samples]", f"times = [{times}]", ""])
    place.orbit.write_text(text, "utf-8")


def _request(job: Job, place: Workplace) -> dict[str, Any]:
    p = job.propagator
    request: dict[str, Any] = {"env": dict(p.env), "memory": p.memory, "output": p.output}
    if p.python:
        return {**request, "python": p.python, "suite": job.folder}
    words = {"{orbit}": str(place.orbit), "{out}": str(place.out), "{suite}": job.folder}
    command = []
    for part in p.command:
        beside = Path(job.folder, part)
        if "/" in part or beside.is_file():  # names of files beside the suite
            part = str(beside) if beside.exists() else part
        for word, value in words.items():
            part = part.replace(word, value)
        command.append(part)
    return {**request, "command": command}


def _run(job: Job) -> CaseResult:
    spec, orbit = _given(job)
    ran, trajectory, refusal = _obtain(job, spec)
    told = {
        "seconds": ran.seconds, "stdout_tail": ran.stdout_tail, "stderr_tail": ran.stderr_tail,
        "orbit_class": orbit.orbit_class,
    }  # fmt: skip
    if trajectory is None:
        outcome, reason = refusal
        verdict = "not-run" if outcome == "could not start" else "unusable"
        return CaseResult(replace(blank(job, outcome, verdict, reason), **told))
    repeated = None
    if job.repeat > 1:
        _, again, _ = _obtain(job, spec)
        repeated = again is not None and _digest(again) == _digest(trajectory)
    trajectory, left_out = _judgeable(job, trajectory)
    result, reason = _judge(trajectory, orbit)
    if result is None:
        record = blank(job, "output refused", "unusable", reason)
    else:
        record = replace(_figures(job, result), digest=_digest(trajectory))
        record = replace(record, reason=record.reason or left_out)
        record = explained(record, result, job.kept)
    record = replace(record, digest=_digest(trajectory), **told)
    attributes = {"budget": dict(job.spec.budget), "orbit_class": orbit.orbit_class}
    attributes = {**orbit_mapping(replace(spec, name=job.key)), **attributes}
    return CaseResult(record, _arrays(trajectory), _expected(orbit), attributes, repeated)


def _obtain(job: Job, spec: OrbitSpec) -> tuple[Ran, Trajectory | None, tuple[str, str]]:
    """Run the program and read what it wrote."""
    from truefall.validate.formats import read_trajectory

    p = job.propagator
    with workplace(p.reads, p.writes) as place:
        _write_orbit(spec, place)
        ran = run_program(_request(job, place), place, p.timeout)
        if ran.outcome != "ran":
            return ran, None, (ran.outcome, ran.reason)
        declared = {k: v for k, v in orbit_mapping(spec).items() if k not in ("samples", "name")}
        try:
            found = read_trajectory(
                place.out, overrides={**declared, "budget": dict(job.spec.budget)}
            )
        except InputError as error:
            sentence = str(error).replace(f"{place.out}: ", "").replace(f"{place.root}/", "")
            return ran, None, ("output refused", sentence)
        wrong = _wrong_rows(found, spec)
        if wrong:
            return ran, None, ("wrong rows", wrong)
        return ran, replace(found, path=job.key, name=job.key), ("ran", "")


def _wrong_rows(found: Trajectory, spec: OrbitSpec) -> str:
    """A sentence unless the rows are those that were asked for."""
    asked = np.asarray(spec.times)
    if len(found) != asked.size:
        return f"wrote {len(found)} rows where {asked.size} times were asked for"
    off = np.abs(found.time - asked) > found.quantisation.time
    if off.any():
        row = int(np.argmax(off))
        return (
            f"row {row + 1} has time {float(found.time[row])!r} where {float(asked[row])!r} was "
            "asked for"
        )
    return ""


def _judgeable(job: Job, trajectory: Trajectory) -> tuple[Trajectory, str]:
    """With the tolerances that the output has columns for; a sentence about the others."""
    budget = dict(trajectory.metadata.get("budget", {}))
    if not job.own_budget:
        return trajectory, ""
    lacking: list[str] = []
    if trajectory.velocity is None:
        lacking += ["velocity", "energy", "angular_momentum"]
    light, proper = job.spec.particle == "light", job.spec.clock == "proper"
    clock = "affine" if light else "coordinate_time" if proper else "proper_time"
    if getattr(trajectory, clock) is None:
        lacking.append("clock")
    growing = budget.get("per_revolution", {})
    gone = [q for q in lacking if q in budget or q in growing]
    if not gone:
        return trajectory, ""
    budget = {q: t for q, t in budget.items() if q not in gone}
    if growing:
        budget["per_revolution"] = {q: t for q, t in growing.items() if q not in gone}
    metadata = {**trajectory.metadata, "budget": budget}
    words = ", ".join(gone).replace("_", " ")
    sentence = f"not judged, because the output has no columns for it: {words}"
    return replace(trajectory, metadata=metadata), sentence


def _judge(trajectory: Trajectory, orbit: KeptOrbit) -> tuple[CheckResult | None, str]:
    from typing import cast

    from truefall.reference import Orbit
    from truefall.validate.check import check_trajectory

    try:
        result = check_trajectory(trajectory, orbit=cast("Orbit", orbit))
    except InputError as error:
        return None, str(error).removeprefix(f"{trajectory.path}: ")
    orbit.only_from_now_on()
    return result, ""


def _figures(job: Job, result: CheckResult) -> CaseRecord:
    """The record of a judged trajectory."""
    from truefall.reference.units import SYSTEM
    from truefall.validate.report.document import file_object

    document = file_object(result)
    errors: dict[str, dict[str, float | None]] = {}
    guards: dict[str, float] = {}
    for quantity, values, time, guard in _series(result):
        finite = np.isfinite(values)
        if finite.any():
            worst = int(np.nanargmax(np.where(finite, np.abs(values), -1.0)))
            rms = float(np.sqrt(np.mean(values[finite] ** 2)))
            errors[quantity] = {"max": float(abs(values[worst])), "rms": rms,
                                "at_time": float(time[worst])}  # fmt: skip
            guards[quantity] = float(guard[worst])
    margins = [j.margin / j.tolerance for j in result.judgements if np.isfinite(j.margin)]
    unit = SYSTEM[job.spec.system]
    return replace(
        blank(job, "ran", result.verdict, result.reason),
        errors=errors,
        guards=guards,
        budget=dict(result.tolerances),
        margin=min(margins) if margins else None,
        floor=None if result.floor is None else result.floor.position,
        guard=guards.get("position"),
        unit_length=unit.length,
        unit_time=unit.time,
        curve=_curve(result),
        orbit={k: v for k, v in (document["orbit"] or {}).items() if v is not None},
    )


def _series(result: CheckResult) -> list[tuple[str, Floats, Floats, Floats]]:
    """Quantity, errors (n,), times (n,), guards (n,) of all that was compared."""
    c = result.comparison
    if c is None:
        return []
    found = [("position", c.distance, c.time, c.position_guard.total)]
    if c.velocity_error is not None and c.velocity_guard is not None:
        found.append(("velocity", c.velocity_error, c.time, c.velocity_guard.total))
    if c.clock_error is not None and c.clock_guard is not None:
        found.append(("clock", c.clock_error, c.time, c.clock_guard.total))
    for name in ("energy", "angular_momentum"):
        drift = getattr(c.drifts, name)
        if drift is not None:
            found.append((name, drift.values, c.time, drift.guard))
    return found


def _curve(result: CheckResult) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Position errors for a small picture: the largest of each of at most 80 stretches."""
    c = result.comparison
    if c is None:
        return (), ()
    time, distance = c.time, c.distance
    edges = np.unique(np.linspace(0, time.size, min(_CURVE, time.size) + 1).astype(int))
    sizes = np.nan_to_num(distance, nan=0.0, posinf=0.0)
    rows = [a + int(np.argmax(sizes[a:b])) for a, b in itertools.pairwise(edges)]
    return tuple(time[rows].tolist()), tuple(float(f"{v:.6g}") for v in sizes[rows])


def _arrays(trajectory: Trajectory) -> dict[str, Floats]:
    found = {"time": trajectory.time, "position": trajectory.position}
    for name in ("velocity", *_CLOCKS):
        if (values := getattr(trajectory, name)) is not None:
            found[name] = values
    return found


def _expected(orbit: KeptOrbit) -> dict[str, Floats]:
    """Expected values with second words and bounds."""
    states = orbit.known
    found = {"time": states.time}
    for name in ("position", "velocity", *_CLOCKS):
        if getattr(states, name) is not None:
            for suffix in ("", "_low", "_bound"):
                found[name + suffix] = getattr(states, name + suffix)
    return found


def _digest(trajectory: Trajectory) -> str:
    """Of the obtained numbers: two runs with the same digest gave the same bits."""
    digest = hashlib.sha256()
    for name, values in _arrays(trajectory).items():
        digest.update(name.encode() + str(values.shape).encode())
        digest.update(np.ascontiguousarray(values, dtype="<f8").tobytes())
    return digest.hexdigest()
