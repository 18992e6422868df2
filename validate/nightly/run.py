"""A night from beginning to end, in one output folder.

The order makes an interruption harmless at any instant: results go into an unfinished file that
only its last step makes a night; figures and pages are copies, and are caught up with the next
time if they are missing.  A lock keeps two nights in one folder apart.
"""

from __future__ import annotations

import contextlib
import datetime
import fcntl
import os
import shutil
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace
from pathlib import Path

from truefall.validate.errors import InputError
from truefall.validate.nightly.accepting import accept, read_accepted
from truefall.validate.nightly.commits import commit_of, commits_between
from truefall.validate.nightly.environment import environment, fingerprint
from truefall.validate.nightly.farm import ClusterWorkers, LocalWorkers, Workers, run_all
from truefall.validate.nightly.night_file import NightWriter, night_path, nights_in, read_night
from truefall.validate.nightly.noticing import Noticed, Setting, notice
from truefall.validate.nightly.one_case import CaseResult, Job, blank, run_job
from truefall.validate.nightly.record import VERDICTS, CaseRecord, Night
from truefall.validate.nightly.suite import Suite
from truefall.validate.nightly.trends import Trends

__all__ = ["accept_cases", "exit_status", "rebuild", "report_folder", "run_night"]

_ORDER = (70, 4, 1, 3, 5, 0)
_STATUS = {"unusable": 4, "not-run": 4, "fail": 1, "undecided": 3, "not-judged": 5, "pass": 0}
_MANY_CASES = 1000
_FEW_POINTS = 20
#: Rows of trends in a report, and nights that are shown however many cases there are.
_MOST_ROWS, _LEAST_NIGHTS = 200_000, 30


@contextlib.contextmanager
def _locked(out: Path) -> Iterator[None]:
    """The output folder, for this process alone."""
    try:
        (out / "nights").mkdir(parents=True, exist_ok=True)
        handle = os.open(out / ".lock", os.O_RDWR | os.O_CREAT, 0o644)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", out) from None
    try:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise InputError(
                "another night is running here; wait until it has ended", out
            ) from None
        for leftover in (out / "nights").glob(".night-*.unfinished-*"):
            leftover.unlink(missing_ok=True)
        yield
    finally:
        os.close(handle)


def _jobs(suite: Suite, kept: bool) -> Iterator[Job]:
    for propagator, case in suite.pairs():
        yield Job(
            key=f"{propagator.name}/{case.name}", propagator=propagator, case=case.name,
            spec=case.spec(), folder=str(suite.folder), case_digest=case.digest,
            title=case.title, why=case.why, repeat=suite.repeat, kept=kept, own_budget=case.own,
        )  # fmt: skip


def _lost(job: Job, sentence: str) -> CaseResult:
    return CaseResult(blank(job, "worker lost", "not-run", sentence))


def exit_status(night: Night) -> int:
    """Exit status of a night: the first of 70, 4, 1, 3, 5, 0 that occurs."""
    found = {0}
    for case in night.cases:
        if case.outcome == "fault of truefall":
            found.add(70)
        elif case.verdict != "undecided" or night.undecided == "error":
            found.add(_STATUS[case.verdict])
    if any(a.level in ("alarm", "standing") for a in night.alarms):
        found.add(1)
    return next(s for s in _ORDER if s in found)


def _environment(found: Sequence[Mapping[str, str]]) -> dict[str, str]:
    """The one environment of all workers; where they differ, every value that occurs."""
    if not found:
        return environment()
    return {
        name: " | ".join(sorted({e.get(name, "-") for e in found}))
        for name in sorted({name for e in found for name in e})
    }


class _Gathered:
    """What is kept in memory of the results: records, not arrays."""

    def __init__(self, many: bool) -> None:
        self.records: list[CaseRecord] = []
        self.environments: dict[str, Mapping[str, str]] = {}
        self.nondeterministic: set[str] = set()
        self.many = many

    def add(self, result: CaseResult, path: str) -> None:
        record = replace(result.record, result_set=path)
        if self.many:
            step = -(-len(record.curve[0]) // _FEW_POINTS) or 1
            record = replace(record, curve=(record.curve[0][::step], record.curve[1][::step]),
                             stdout_tail=record.stdout_tail[-400:],
                             stderr_tail=record.stderr_tail[-400:])  # fmt: skip
        self.records.append(record)
        if result.repeated is False:
            self.nondeterministic.add(record.key)
        if result.environment:
            self.environments.setdefault(fingerprint(result.environment), result.environment)


def run_night(
    suite: Suite,
    out: Path,
    *,
    jobs: int = 1,
    cluster: str | None = None,
    undecided: str = "error",
    workers: Workers | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Night:
    """Run, judge, record, compare with the past, write the pages.

    Parameters
    ----------
    out : Path
        Output folder: ``nights/`` and ``accepted.json`` are the memory, all else is made of it.
    jobs : int
        Cases at a time, on this machine.
    cluster : str, optional
        Address of a Dask scheduler instead.
    workers : Workers, optional
        Instead of either.
    progress : callable, optional
        Told how many cases of how many are done.

    Raises
    ------
    InputError
        If the folder cannot be used, a night in it is damaged, or no cluster answers.
    """
    began, started = time.monotonic(), datetime.datetime.now(datetime.UTC)
    with _locked(out), Trends(out) as trends:
        _catch_up(out, trends)
        latest = trends.latest()
        if latest is not None and latest["suite"] != suite.name:
            raise InputError(
                f"holds nights of the suite {latest['suite']!r}, not of {suite.name!r}; give "
                "another --out, or the suite its old name",
                out,
            )
        number = max([0, *nights_in(out / "nights")]) + 1
        if workers is None:
            workers = ClusterWorkers(cluster) if cluster else LocalWorkers(jobs)
        gathered = _Gathered(len(suite.keys()) > _MANY_CASES)
        name = night_path(Path("nights"), number).as_posix()
        with NightWriter(out / "nights", number) as writer:
            total = len(suite.keys())
            for done, result in enumerate(run_all(_jobs(suite, True), workers, run_job, _lost), 1):
                writer.add(result)
                gathered.add(result, name)
                if progress is not None:
                    progress(done, total)
            night = _compare(suite, trends, gathered, number, out, undecided)
            night = replace(
                night,
                started=started.strftime("%Y-%m-%dT%H:%M:%SZ"),
                seconds=time.monotonic() - began,
                result_set=name,
            )
            writer.finish(night)
        trends.add(night)
        _pages(night, trends, out)
    return night


def _compare(
    suite: Suite, trends: Trends, gathered: _Gathered, number: int, out: Path, undecided: str
) -> Night:
    """The night's record: figures against the past."""
    cases = sorted(gathered.records, key=lambda c: c.key)
    parts = _environment(list(gathered.environments.values()))
    print_ = fingerprint(parts)
    commit = commit_of(suite)
    latest = trends.latest() or {}
    same = bool(latest) and latest["fingerprint"] == print_
    segment = int(str(latest["segment"])) if same else number
    commits = commits_between(suite, _text(latest.get("code")), commit)
    before_missing = latest.get("missing")
    missing = [str(k) for k in before_missing] if isinstance(before_missing, list) else []
    setting = Setting(
        night=number,
        previous=int(str(latest["number"])) if latest else None,
        segment=segment,
        thresholds=suite.thresholds,
        commits=commits,
        environment_changes=() if same else _changes(latest.get("environment"), parts),
        accepted=read_accepted(out),
        missing=missing,
    )
    past = trends.past([*missing, *(c.key for c in cases)])
    noticed: Noticed = notice(cases, past, setting, gathered.nondeterministic)
    night = Night(
        number=number, started="", suite=suite.name,
        verdict=next((v for v in VERDICTS if any(c.verdict == v for c in cases)), "not-judged"),
        exit_status=0, cases=noticed.cases, alarms=noticed.alarms, previous=setting.previous,
        environment=parts, fingerprint=print_, segment=segment, commit=commit, commits=commits,
        undecided=undecided, missing=noticed.missing,
    )  # fmt: skip
    return replace(night, exit_status=exit_status(night))


def _text(value: object) -> str | None:
    return None if value is None else str(value)


def _changes(before: object, now: Mapping[str, str]) -> tuple[str, ...]:
    if not isinstance(before, Mapping):
        return ()
    names = sorted(set(before) | set(now))
    return tuple(
        f"{n}: {before.get(n, 'none')} before, {now.get(n, 'none')} now"
        for n in names if before.get(n) != now.get(n)
    )  # fmt: skip


def report_folder(out: Path, number: int) -> Path:
    """Where a night's pages are."""
    return out / f"report-{number:05d}"


def _pages(night: Night, trends: Trends, out: Path) -> None:
    """Write the pages of a night whole, and a copy under a name that does not change."""
    from truefall.validate.nightly.pages import write_pages

    final, latest = report_folder(out, night.number), out / "latest"
    unfinished = out / f".report-{night.number:05d}.unfinished"
    shutil.rmtree(unfinished, ignore_errors=True)
    unfinished.mkdir()
    keys = [c.key for c in night.cases]
    write_pages(
        night, trends.trends(keys, max(_LEAST_NIGHTS, _MOST_ROWS // max(1, len(keys)))), unfinished
    )
    shutil.rmtree(final, ignore_errors=True)
    unfinished.rename(final)
    copy = out / ".latest.unfinished"
    shutil.rmtree(copy, ignore_errors=True)
    shutil.copytree(final, copy)
    shutil.rmtree(latest, ignore_errors=True)
    copy.rename(latest)


def _catch_up(out: Path, trends: Trends) -> None:
    """Take in what an interrupted night left undone."""
    trends.catch_up()
    numbers = nights_in(out / "nights")
    if numbers and not report_folder(out, numbers[-1]).is_dir():
        _pages(read_night(night_path(out / "nights", numbers[-1])), trends, out)


def rebuild(out: Path) -> int:
    """Make the figures and the last night's pages again from the nights; returns their number.

    Raises
    ------
    InputError
        If there are no nights, or one is damaged.
    """
    if not nights_in(out / "nights"):
        raise InputError("holds no nights to rebuild from", out)
    with _locked(out), Trends(out, rebuild=True) as trends:
        count = len(trends.catch_up())
        number = nights_in(out / "nights")[-1]
        _pages(read_night(night_path(out / "nights", number)), trends, out)
    return count


def accept_cases(out: Path, patterns: Sequence[str]) -> list[str]:
    """Accept the latest figures of cases; returns their keys.

    Raises
    ------
    InputError
        If there are no nights.
    UsageError
        For names that are no cases.
    """
    if not nights_in(out / "nights"):
        raise InputError("holds no nights yet; run one first", out)
    with _locked(out), Trends(out) as trends:
        _catch_up(out, trends)
        latest = trends.latest() or {}
        stored = latest.get("missing")
        missing = [str(k) for k in stored] if isinstance(stored, list) else []
        return accept(out, patterns, trends.past(missing), missing, int(str(latest["number"])))
