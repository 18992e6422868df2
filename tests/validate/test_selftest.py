"""The self-test: sound as installed, and every kind of fault put in on purpose is reported."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.validate.selftest import command, measures
from truefall.validate.selftest.kernels import Held

TRUTH = Path(measures.__file__).with_name("truth.json")


def test_sound_and_quick(child: Any) -> None:
    """A process of its own: words on stdout, status 0."""
    done = child("selftest", "--quick")
    assert done.status == 0, done.text
    assert done.out.startswith("SOUND  20 of 20 ")
    for group in ("reference", "table", "files", "judge"):
        assert f"\n  {group} " in done.out
    assert "left out (--quick)" in done.out
    assert max(map(len, done.out.splitlines())) < 140


def test_json_is_one_document_and_words_go_to_stderr(run: Any) -> None:
    done = run("selftest", "--quick", "--json")
    found = json.loads(done.out)
    assert done.status == 0
    assert found["verdict"] == "pass"
    groups = {m["group"] for m in found["measurements"]}
    assert groups == {"reference", "table", "files", "judge"}
    assert all(set(m) == {"group", "name", "good", "value", "limit", "unit", "text"}
               for m in found["measurements"])  # fmt: skip
    assert "SOUND" in done.err


def test_compiled_code_that_differs_is_said(run: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """Outcomes of kernels, in the table, in JSON and in the status."""
    held = [
        Held("truefall.x.right", "equal", calls=3),
        Held("truefall.x.wrong", "differs", 7.0, 0.0, 3),
        Held("truefall.x.stuck", "stands still", calls=1),
        Held("truefall.x.new", "no inputs"),
    ]
    monkeypatch.setattr("truefall.validate.selftest.kernels.hold_kernels", lambda **_: held)
    done = run("selftest", "--json")
    assert done.status == 1
    rows = {m["name"]: m for m in json.loads(done.out)["measurements"]}
    assert [rows[f"x.{n}"]["good"] for n in ("right", "wrong", "stuck", "new")] == [
        True, False, False, False,
    ]  # fmt: skip
    assert "FAULTY  21 of 24" in done.err
    assert "OUT   kernels: x.wrong: 7 ulp (at most 0); computes something else" in done.err
    assert "x.stuck" in done.err
    assert "x.new: 0 ulp (at most 0); has no sample inputs" in done.err


def test_a_run_that_breaks_is_a_fault_of_truefall(
    run: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    from truefall.validate.selftest.kernels import ScenarioFailed

    def broken(**_: object) -> None:
        raise ScenarioFailed("the interpreted scenarios ended with: nothing")

    monkeypatch.setattr("truefall.validate.selftest.kernels.hold_kernels", broken)
    done = run("selftest")
    assert done.status == 70
    assert "a fault of truefall itself: ScenarioFailed" in done.err


def test_a_wrong_stored_value_or_a_wrong_engine_is_out(monkeypatch: pytest.MonkeyPatch) -> None:
    """One unit of the 20th digit: far outside the proven bound of two words."""
    stored = json.loads(TRUTH.read_text("utf-8"))["orbits"][2:3]
    value = stored[0]["true"][0]["position"][0]
    place = value.index(".") + 20
    digit = str((int(value[place]) + 5) % 10)
    stored[0]["true"][0]["position"][0] = value[:place] + digit + value[place + 1 :]
    monkeypatch.setattr(measures, "_stored_orbits", lambda: stored)
    (found,) = measures.reference()
    assert not found.good
    assert "not to be trusted" in found.text


def test_the_shipped_values_are_those_of_the_test_data() -> None:
    """A part of the independent orbits, digit for digit."""
    whole = json.loads((Path(__file__).parents[1] / "data/truth_orbits.json").read_text())
    by_name = {o["name"]: o for o in whole["orbits"]}
    part = json.loads(TRUTH.read_text("utf-8"))["orbits"]
    assert len(part) == len(by_name)
    for orbit in part:
        own = by_name[orbit["name"]]
        for time, true in zip(orbit["times"], orbit["true"], strict=True):
            row = own["true"][own["times"].index(time)]
            assert true == {key: value for key, value in row.items() if value is not None}


def test_a_table_that_is_worse_than_it_claims_is_out(monkeypatch: pytest.MonkeyPatch) -> None:
    from truefall.reference.table import Table

    right = Table.at

    def wrong(self: Table, times: Any) -> Any:
        position, velocity, clock = right(self, times)
        return position * (1.0 + 1e-14), velocity, clock

    monkeypatch.setattr(Table, "at", wrong)
    found = list(measures.table())
    assert len(found) == 3
    assert not any(m.good for m in found)


def test_a_writer_that_loses_a_bit_is_out(monkeypatch: pytest.MonkeyPatch) -> None:
    """Positions off by one unit in the last place; and a reader that overlooks damage."""
    from truefall.validate import formats
    from truefall.validate.trajectory import Trajectory

    right = formats.write_trajectory

    def wrong(path: Any, trajectory: Trajectory, **more: Any) -> Any:
        trajectory.position[5] = np.nextafter(trajectory.position[5], np.inf)
        try:
            return right(path, trajectory, **more)
        finally:
            trajectory.position[5] = np.nextafter(trajectory.position[5], -np.inf)

    monkeypatch.setattr(formats, "write_trajectory", wrong)
    found = {m.name: m.good for m in measures.files() if m.unit != "note"}
    assert not any(found[name] for name in ("csv", "h5", "npz", "parquet"))


def test_a_reader_that_overlooks_damage_is_out(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from truefall.validate import formats

    source = tmp_path / "probe.csv"
    source.write_text(measures._trajectory()[0])
    given = formats.read_trajectory(source)
    target = tmp_path / "copy.h5"
    formats.write_trajectory(target, given)
    whole = target.read_bytes()
    assert measures._flipped(target).good
    changed = [i for i, (a, b) in enumerate(zip(whole, target.read_bytes(), strict=True)) if a != b]
    assert len(changed) == 1
    monkeypatch.setattr(formats, "read_trajectory", lambda _: given)
    target.write_bytes(whole)
    assert not measures._flipped(target).good


def test_a_judge_that_lets_everything_pass_is_out(monkeypatch: pytest.MonkeyPatch) -> None:
    import dataclasses

    from truefall.validate import check

    right = check.check_file

    def lenient(*given: Any, **how: Any) -> Any:
        return [dataclasses.replace(result, verdict="pass") for result in right(*given, **how)]

    monkeypatch.setattr(check, "check_file", lenient)
    assert [m.good for m in measures.judge()] == [True, False]


def test_numbers_without_a_value_are_null_in_json() -> None:
    m = measures.Measure("table", "a", False, float("inf"), 1.0, "claimed errors", "why")
    (row,) = command.document([m])["measurements"]
    assert row["value"] is None
    assert "OUT   table: a: inf claimed errors (at most 1); why" in command.text([m], True)
