"""What raises an alarm, and what does not: nights simulated, through the database and without."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.validate.nightly.noticing import Accepted, Noticed, Past, Setting, notice
from truefall.validate.nightly.record import CaseRecord, Night
from truefall.validate.nightly.suite import Thresholds
from truefall.validate.nightly.trends import Trends

GUARD = 1e-15
CASES = [f"ours/case-{k:02d}" for k in range(60)]


def record(key: str, error: float | None, **words: Any) -> CaseRecord:
    """A case with that position error, a budget of 1e-3, and bits that follow from the error."""
    errors = {} if error is None else {"position": {"max": error, "rms": error, "at_time": 1.0}}
    usual: dict[str, Any] = {
        "verdict": "pass", "errors": errors, "guards": {"position": GUARD}, "case_digest": "c",
        "digest": "" if error is None else error.hex(), "seconds": 0.01,
        "margin": None if error is None else 1 - error / 1e-3,
    }  # fmt: skip
    return CaseRecord(key, *key.split("/"), **{**usual, **words})


class Watch:
    """Nights one after the other, in memory."""

    def __init__(self) -> None:
        self.night, self.segment = 0, 1
        self.past: dict[str, Past] = {}
        self.missing: tuple[str, ...] = ()
        self.accepted: dict[str, Accepted] = {}

    def run(
        self, cases: Sequence[CaseRecord], *, opens: bool = False, commits: Sequence[str] = (),
        twice: Sequence[str] = (),
    ) -> Noticed:  # fmt: skip
        previous, self.night = self.night or None, self.night + 1
        self.segment = self.night if opens else self.segment
        setting = Setting(
            self.night, previous, self.segment, Thresholds(), tuple(commits), (),
            self.accepted, self.missing,
        )  # fmt: skip
        noticed = notice(cases, self.past, setting, twice)
        gone = {k: p for k, p in self.past.items() if k in noticed.missing}
        self.past = gone | {c.key: as_past(c, self.night) for c in noticed.cases}
        self.missing = noticed.missing
        return noticed


def as_past(c: CaseRecord, night: int) -> Past:
    errors = {q: e["max"] for q, e in c.errors.items() if e["max"] is not None}
    return Past(night, c.verdict, c.digest, c.case_digest, c.margin, errors, c.baseline, c.level)


def alarms(noticed: Noticed, level: str = "alarm") -> list[tuple[str, str]]:
    return [(a.name, a.key) for a in noticed.alarms if a.level == level]


def errors_of_a_clean_suite() -> Mapping[str, float]:
    rng = np.random.default_rng(7)
    return {key: float(10.0 ** rng.uniform(-12, -4)) for key in CASES}


def test_400_clean_nights_give_no_alarm() -> None:
    watch, errors = Watch(), errors_of_a_clean_suite()
    for _ in range(400):
        assert watch.run([record(k, e) for k, e in errors.items()]).alarms == ()


@pytest.mark.parametrize("factor", [2.0, 2.5, 100.0])
def test_a_loss_is_alarmed_on_its_first_night_and_only_there(factor: float) -> None:
    watch, errors = Watch(), dict(errors_of_a_clean_suite())
    bad = CASES[17]
    for night in range(1, 61):
        if night == 41:
            errors[bad] *= factor
        noticed = watch.run([record(k, e) for k, e in errors.items()], commits=["abc123 faster"])
        if night == 41:
            assert ("error-grew", bad) in alarms(noticed)
            assert {key for _, key in alarms(noticed)} == {bad}
            told = next(a for a in noticed.alarms if a.name == "error-grew")
            assert told.commits == ("abc123 faster",)
            assert told.before is not None
            assert told.after == pytest.approx(factor * told.before)
        else:
            assert alarms(noticed) == []
            assert alarms(noticed, "standing") == ([("still-worse", bad)] if night > 41 else [])


def test_a_drift_of_one_percent_a_night_is_alarmed_within_thirty_nights() -> None:
    watch, errors = Watch(), dict(errors_of_a_clean_suite())
    bad, when = CASES[3], []
    for night in range(1, 61):
        errors[bad] *= 1.01
        noticed = watch.run([record(k, e) for k, e in errors.items()], commits=["abc123 x"])
        when += [night for name, key in alarms(noticed) if (name, key) == ("slow-drift", bad)]
        assert {key for _, key in alarms(noticed)} <= {bad}
    # 1.01^n > 1.25 for n >= 23 after the first night, and again by the same factor
    assert when[:2] == [24, 47]


def test_growth_below_the_guard_is_no_growth() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-16)])
    noticed = watch.run([record("p/c", 9e-16)], commits=["abc x"])
    assert alarms(noticed) == []
    assert alarms(watch.run([record("p/c", 2e-15)], commits=["abc x"])) == [("error-grew", "p/c")]


def test_an_error_from_nothing_is_growth() -> None:
    watch = Watch()
    watch.run([record("p/c", 0.0)])
    assert ("error-grew", "p/c") in alarms(watch.run([record("p/c", 1e-9)]))


def test_bits_need_a_commit() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9)])
    unexplained = watch.run([record("p/c", 1e-9, digest="other")])
    assert alarms(unexplained) == [("bits-changed", "p/c")]
    assert "no commit explains it" in unexplained.alarms[0].text
    explained = watch.run(
        [record("p/c", 1e-9, digest="third")], commits=["abc123 one", "def456 two"]
    )
    assert alarms(explained) == []
    assert alarms(explained, "note") == [("bits-changed", "p/c")]
    assert explained.alarms[0].commits == ("abc123 one", "def456 two")
    assert watch.run([record("p/c", 1e-9, digest="third")]).alarms == ()


def test_verdicts() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9)])
    worse = watch.run([record("p/c", 1e-9, verdict="fail", reason="late")])
    assert alarms(worse) == [("verdict-changed", "p/c")]
    assert worse.alarms[0].text == "p/c was pass in night 1 and is fail: late"
    assert watch.run([record("p/c", 1e-9, verdict="fail")]).alarms == ()
    gone = watch.run([record("p/c", None, verdict="unusable", outcome="crashed")])
    assert alarms(gone) == [("verdict-changed", "p/c")]
    back = watch.run([record("p/c", 1e-9)])
    assert alarms(back) == []
    assert alarms(back, "note") == [("verdict-changed", "p/c")]


def test_a_loss_behind_a_night_without_numbers_is_seen() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9)])
    watch.run([record("p/c", None, verdict="unusable")])
    assert ("slow-drift", "p/c") in alarms(watch.run([record("p/c", 2e-9)]))


def test_margins() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9, margin=0.11)])
    noticed = watch.run([record("p/c", 1e-9, margin=0.09)])
    assert alarms(noticed) == [("margin-shrank", "p/c")]
    assert (noticed.alarms[0].before, noticed.alarms[0].after) == (0.11, 0.09)
    assert watch.run([record("p/c", 1e-9, margin=0.09)]).alarms == ()


def test_a_case_that_vanished_stands_until_it_is_back_or_accepted() -> None:
    watch = Watch()
    both = [record("p/a", 1e-9), record("p/b", 1e-9)]
    watch.run(both)
    assert alarms(watch.run(both[:1])) == [("case-vanished", "p/b")]
    still = watch.run(both[:1])
    assert (alarms(still), alarms(still, "standing")) == ([], [("still-missing", "p/b")])
    assert watch.run(both).alarms == ()
    watch.run(both[:1])
    watch.accepted["p/b"] = Accepted(watch.night, gone=True)
    assert watch.run(both[:1]).alarms == ()
    assert watch.run(both[:1]).alarms == ()


def test_nothing_is_accepted_by_itself_and_an_acceptance_is_the_new_measure() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9)])
    watch.run([record("p/c", 3e-9)])
    for _ in range(5):
        assert alarms(watch.run([record("p/c", 3e-9)]), "standing") == [("still-worse", "p/c")]
    watch.accepted["p/c"] = Accepted(watch.night, {"position": 3e-9})
    noticed = watch.run([record("p/c", 3e-9)])
    assert alarms(noticed, "standing") == []
    assert alarms(noticed, "note") == [("accepted", "p/c")]
    assert watch.run([record("p/c", 3e-9)]).alarms == ()
    assert ("slow-drift", "p/c") in alarms(watch.run([record("p/c", 3.8e-9)]))


def test_an_improvement_is_told_once_and_holds_when_accepted() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-6)])
    better = watch.run([record("p/c", 1e-9)], commits=["abc x"])
    assert ("improved", "p/c") in alarms(better, "note")
    assert alarms(better) == []
    assert watch.run([record("p/c", 1e-9)]).alarms == ()
    # unaccepted, a slow return is not seen before the old value ...
    assert alarms(watch.run([record("p/c", 1.5e-9)], commits=["abc x"])) == []
    watch.accepted["p/c"] = Accepted(watch.night, {"position": 1.5e-9})
    watch.run([record("p/c", 1.5e-9)])
    # ... accepted, it is
    assert alarms(watch.run([record("p/c", 1.9e-9)], commits=["abc x"])) == [("slow-drift", "p/c")]


def test_a_recovered_case_that_fails_again_is_alarmed_again() -> None:
    watch = Watch()
    for error, expected in ((1e-9, []), (3e-9, ["error-grew"]), (1e-9, []), (3e-9, ["error-grew"])):
        names = [n for n, _ in alarms(watch.run([record("p/c", error)], commits=["abc x"]))]
        assert names == expected


def test_a_new_environment_opens_a_segment_and_forgives_bits_not_losses() -> None:
    watch = Watch()
    watch.run([record("p/a", 1e-9), record("p/b", 1e-9)])
    noticed = watch.run([record("p/a", 1.6e-9), record("p/b", 5e-9)], opens=True)
    assert alarms(noticed) == [("error-grew", "p/b")]
    assert ("new-segment", "") in alarms(noticed, "note")
    assert not [a for a in noticed.alarms if a.name == "bits-changed"]
    after = watch.run([record("p/a", 1.6e-9), record("p/b", 5e-9)])
    assert (alarms(after), alarms(after, "standing")) == ([], [("still-worse", "p/b")])
    # a second change of environment accepts nothing that stood
    again = watch.run([record("p/a", 1.6e-9), record("p/b", 5e-9)], opens=True)
    assert alarms(again, "standing") == [("still-worse", "p/b")]


def test_another_case_of_the_same_name_is_a_new_one() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9)])
    noticed = watch.run([record("p/c", 1e-3, case_digest="other")])
    assert alarms(noticed) == []
    assert "budget changed" in noticed.alarms[0].text


def test_two_runs_of_one_night_must_agree() -> None:
    noticed = Watch().run([record("p/c", 1e-9)], twice=["p/c"])
    assert alarms(noticed) == [("not-deterministic", "p/c")]


def test_run_times_raise_nothing() -> None:
    watch = Watch()
    watch.run([record("p/c", 1e-9)])
    assert watch.run([record("p/c", 1e-9, seconds=1e6)]).alarms == ()


# the database ----------------------------------------------------------------------------------


def night(number: int, cases: Sequence[CaseRecord], **words: Any) -> Night:
    return Night(number, "2030-01-01T00:00:00Z", "suite", "pass", 0, tuple(cases), **words)


@pytest.fixture
def base(tmp_path: Path) -> Callable[[], Trends]:
    (tmp_path / "nights").mkdir()
    return lambda: Trends(tmp_path)


def test_trends_of_400_nights_and_60_cases_are_read_in_half_a_second(
    base: Callable[[], Trends], record_property: Callable[[str, object], None]
) -> None:
    errors = errors_of_a_clean_suite()
    level = {"position": 1.0}
    cases = [replace(record(k, e), baseline=level, level=level) for k, e in errors.items()]
    with base() as trends:
        for number in range(1, 401):
            trends.add(night(number, cases, segment=1 + 200 * (number > 200)))
    with base() as trends:
        begin = time.perf_counter()
        found = trends.trends()
        took = time.perf_counter() - begin
        begin = time.perf_counter()
        past = trends.past(CASES)
        again = time.perf_counter() - begin
    print(f"trends of 400 nights x 60 cases: {took:.3f} s; the last night: {again:.4f} s")
    record_property("trends_seconds", took)
    assert sorted(found) == CASES
    trend = found[CASES[0]]
    assert trend.nights.tolist() == list(range(1, 401))
    assert set(trend.segments.tolist()) == {1, 201}
    assert np.all(trend.error == errors[CASES[0]])
    assert past[CASES[5]].errors == {"position": errors[CASES[5]]}
    assert past[CASES[5]].night == 400
    assert took < 2 * 0.5  # twice the promise, for machines under load


def test_a_night_counts_once_and_a_damaged_base_is_made_again(
    base: Callable[[], Trends], tmp_path: Path
) -> None:
    cases = [record("p/c", 1e-9)]
    with base() as trends:
        for _ in range(3):
            trends.add(night(1, cases))
        assert trends.numbers() == [1]
        assert trends.trends()["p/c"].nights.tolist() == [1]
        assert trends.catch_up() == []
        assert trends.numbers() == []  # there is no such night in the folder
    (tmp_path / "trends.sqlite").write_bytes(b"no database at all" * 100)
    with base() as trends:
        assert trends.numbers() == []
        trends.add(night(1, cases))
    with base() as trends:
        assert trends.numbers() == [1]
