"""Whole nights: recorded, compared, interrupted at any instant, made again."""

from __future__ import annotations

import json
import os
import sqlite3
import stat
import subprocess
from collections.abc import Callable
from pathlib import Path

import h5py
import nightly_parts as parts
import numpy as np
import pytest

from truefall.validate.cli import main
from truefall.validate.errors import InputError, UsageError
from truefall.validate.nightly.night_file import nights_in, read_night
from truefall.validate.nightly.record import Night
from truefall.validate.nightly.run import accept_cases, rebuild

BODY = parts.BODY
House = parts.House


@pytest.fixture
def house(tmp_path: Path) -> House:
    return House(tmp_path / "suite")


def names(night: Night, level: str = "alarm") -> list[str]:
    return [a.name for a in night.alarms if a.level == level]


# what is recorded ------------------------------------------------------------------------------


def test_a_night_is_one_result_set_with_everything_in_it(house: House) -> None:
    night = house.night()
    assert (night.number, night.verdict, night.exit_status, night.alarms) == (1, "pass", 0, ())
    assert stat.S_IMODE(house.file(1).stat().st_mode) == 0o444
    with h5py.File(house.file(1)) as file:
        assert file.attrs["format"].rstrip(b"\0") == b"truefall-result-set"
        expected, obtained = file["trajectory/circle"], file["obtained/it/circle"]
        assert obtained["position"].shape == expected["position"].shape == (21, 3)
        error = obtained["position"][()] - expected["position"][()] - expected["position_low"][()]
        largest = np.max(np.linalg.norm(error, axis=1))
        assert np.all(expected["position_bound"][()] < 1e-14)
        assert obtained.attrs["verdict"].rstrip(b"\0") == b"pass"
        assert obtained.attrs["position_error_max"] == pytest.approx(largest, rel=1e-6)
        assert obtained.attrs["digest"].rstrip(b"\0").decode() == night.cases[0].digest
        assert file["night"].attrs["number"] == 1
        assert file["night"].attrs["fingerprint"].rstrip(b"\0").decode() == night.fingerprint
        assert "environment python" in file["night"].attrs
    assert read_night(house.file(1)) == night


def test_the_result_set_conforms_and_its_truth_is_the_truth(house: House) -> None:
    from truefall.validate.inspection import inspect_set

    house.night()
    found = inspect_set(house.file(1), verify=5)
    assert found.faults == []
    assert 1 <= found.trajectories[0]["verified"] <= 5  # random rows, some of them the same
    assert found.trajectories[0]["outside"] == 0


def test_equal_nights_are_quiet_and_keep_their_numbers_apart(house: House) -> None:
    for number in (1, 2, 3):
        night = house.night()
        assert (night.number, night.alarms, night.segment) == (number, (), 1)
        assert night.previous == (number - 1 or None)
    assert nights_in(house.out / "nights") == [1, 2, 3]


def test_a_loss_is_alarmed_stands_and_is_accepted(house: House) -> None:
    house.scale(1e-12)
    assert house.night().exit_status == 0
    house.scale(3e-12)
    worse = house.night()
    assert worse.exit_status == 1
    assert worse.verdict == "pass"
    assert set(names(worse)) == {"error-grew", "bits-changed"}
    standing = house.night()
    assert (standing.exit_status, names(standing)) == (1, [])
    assert names(standing, "standing") == ["still-worse"]
    with pytest.raises(UsageError, match="no such case in night 3; did you mean 'it/circle'"):
        accept_cases(house.out, ["it/circel"])
    assert accept_cases(house.out, ["circle"]) == ["it/circle"]
    assert house.night().exit_status == 0
    assert house.night().alarms == ()


def test_a_case_that_vanishes(house: House) -> None:
    house.night()
    two = (house.folder / "circle.toml").read_text()
    (house.folder / "other.toml").write_text(two)
    text = house.suite.read_text()
    house.suite.write_text(text.replace("circle.toml", "*r*.toml").replace("[cases]", "[cases]"))
    (house.folder / "circle.toml").rename(house.folder / "circle.off")
    house.suite.write_text(text.replace("circle.toml", "other.toml"))
    night = house.night()
    assert names(night) == ["case-vanished"]
    assert night.exit_status == 1
    assert night.missing == ("it/circle",)
    assert names(house.night(), "standing") == ["still-missing"]
    accept_cases(house.out, ["it/circle"])
    assert house.night().exit_status == 0


def test_the_commit_is_found_and_the_commits_between_are_named(
    house: House, require_tool: Callable[[str], str], monkeypatch: pytest.MonkeyPatch
) -> None:
    for key, value in {
        "GIT_AUTHOR_NAME": "n", "GIT_AUTHOR_EMAIL": "e", "GIT_COMMITTER_NAME": "n",
        "GIT_COMMITTER_EMAIL": "e", "GIT_CONFIG_GLOBAL": os.devnull,
    }.items():  # fmt: skip
        monkeypatch.setenv(key, value)

    def git(*words: str) -> str:
        done = subprocess.run(
            [require_tool("git"), "-C", house.folder, *words], check=True, capture_output=True
        )
        return done.stdout.decode().strip()

    git("init", "-q")
    git("add", ".")
    git("commit", "-q", "-m", "right")
    first = house.night()
    assert first.commit == git("rev-parse", "HEAD")
    house.scale(3e-12)
    git("add", "scale")
    git("commit", "-q", "-m", "scale the orbit")
    night = house.night()
    (line,) = night.commits
    assert line.endswith(" scale the orbit")
    grew = next(a for a in night.alarms if a.name == "error-grew")
    assert grew.commits == night.commits
    assert names(night, "note") == ["bits-changed"]  # a commit explains other bits
    house.scale(1e-12)
    dirty = house.night()
    assert dirty.commit == git("rev-parse", "HEAD") + "+changes"
    assert dirty.commits == ("changes that are not committed",)
    monkeypatch.setenv("TRUEFALL_COMMIT", "release 7")
    given = house.night()
    assert given.commit == "release 7"
    assert "to release 7" in given.commits[-1]


def test_a_new_environment_opens_a_segment(house: House, monkeypatch: pytest.MonkeyPatch) -> None:
    first = house.night()
    monkeypatch.setenv("OMP_NUM_THREADS", "17")
    second = house.night()
    assert second.fingerprint != first.fingerprint
    assert second.segment == 2
    (note,) = second.alarms
    assert note.name == "new-segment"
    assert "OMP_NUM_THREADS" in note.text
    assert second.exit_status == 0
    assert house.night().segment == 2


def test_two_runs_of_a_case_are_compared_when_asked(house: House) -> None:
    house.suite.write_text(house.suite.read_text() + "[run]\nrepeat = 2\n")
    assert house.night().alarms == ()
    text = (house.folder / "mine.py").read_text()
    (house.folder / "mine.py").write_text(
        text.replace("def exact(orbit):", "def exact(orbit):\n    import random").replace(
            "r = x[0] *", "r = x[0] * (1 + 1e-13 * random.random()) *"
        )
    )
    assert "not-deterministic" in names(house.night())


# made again, refused ---------------------------------------------------------------------------


def test_everything_is_made_again_from_the_nights(house: House) -> None:
    house.scale(1e-12)
    house.night()
    house.scale(1.1e-12)
    house.night()
    with sqlite3.connect(house.out / "trends.sqlite") as base:
        before = base.execute("SELECT * FROM figures ORDER BY key, night").fetchall()
    base.close()
    for path in house.out.glob("trends.sqlite*"):
        path.write_bytes(b"garbage")
    assert rebuild(house.out) == 2
    with sqlite3.connect(house.out / "trends.sqlite") as base:
        assert base.execute("SELECT * FROM figures ORDER BY key, night").fetchall() == before
    base.close()
    assert house.night().previous == 2


def test_a_damaged_night_is_one_sentence(house: House) -> None:
    house.night()
    data = bytearray(house.file(1).read_bytes())
    house.file(1).chmod(0o644)
    house.file(1).write_bytes(data[: len(data) // 2])
    with pytest.raises(InputError, match=r"night-00001\.h5: is no whole night"):
        rebuild(house.out)


def test_another_suite_is_refused_in_the_same_folder(house: House) -> None:
    house.night()
    house.suite.write_text('name = "other"\n' + house.suite.read_text())
    with pytest.raises(InputError, match="holds nights of the suite 'suite', not of 'other'"):
        house.night()


# the command -----------------------------------------------------------------------------------


def command(capsys: pytest.CaptureFixture[str], *words: object) -> tuple[int, str, str]:
    capsys.readouterr()
    with pytest.raises(SystemExit) as caught:
        main(["nightly", *map(str, words)])
    said = capsys.readouterr()
    return int(caught.value.code or 0), said.out, said.err


MIXED = """
[propagator.right]
python = "mine:exact"
[propagator.wrong]
python = "mine:crash"
[propagator.slow]
python = "mine:hang"
timeout = 0.3
"""


def test_the_command_end_to_end(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    suite = parts.make_suite(tmp_path / "suite", MIXED)
    status, out, _ = command(capsys, suite, "--json", "--jobs", 1, "--out", tmp_path / "out")
    assert status == 4
    assert json.loads(out)
    night = read_night(tmp_path / "out" / "nights" / "night-00001.h5")
    assert {c.key: (c.verdict, c.outcome) for c in night.cases} == {
        "right/circle": ("pass", "ran"), "wrong/circle": ("unusable", "crashed"),
        "slow/circle": ("unusable", "timed out"),
    }  # fmt: skip
    status, out, _ = command(capsys, suite, "--accept", "right/*", "--out", tmp_path / "out")
    assert (status, out.strip()) == (0, "accepted right/circle")
    status, _, _ = command(capsys, suite, "--rebuild", "--out", tmp_path / "out")
    assert status == 0


def test_a_wrong_suite_is_exit_status_2(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for words in ([tmp_path / "none.toml"], [], ["--init", tmp_path, "--rebuild"]):
        status, _, err = command(capsys, *words)
        assert status == 2
        assert err.startswith("truefall: ")
        assert len(err.splitlines()) == 1
    suite = parts.make_suite(tmp_path / "suite", BODY)
    status, _, err = command(capsys, suite, "--accept", "x")
    assert status == 4
    assert "holds no nights yet" in err


def test_undecided_counts_as_asked() -> None:
    from dataclasses import replace

    from truefall.validate.nightly.record import CaseRecord
    from truefall.validate.nightly.run import exit_status

    cases = (CaseRecord("p/a", "p", "a", "pass"), CaseRecord("p/b", "p", "b", "undecided"))
    night = Night(1, "", "s", "undecided", 0, cases)
    assert exit_status(night) == 3
    assert exit_status(replace(night, undecided="skip")) == 0
    assert exit_status(replace(night, undecided="pass")) == 0
    fault = CaseRecord("p/c", "p", "c", "not-run", outcome="fault of truefall")
    assert exit_status(replace(night, cases=(*cases, fault))) == 70
