"""Programs under test that behave in every way programs do; each way is a stated result."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
import tomllib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import nightly_parts as parts
import numpy as np
import pytest

from truefall.validate.nightly.one_case import CaseResult, Job, run_job
from truefall.validate.nightly.suite import Propagator, read_suite

C_PROGRAM = """
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
/* the circle of the orbit file, told by Kepler's law */
int main(int n, char **a)
{
    static char text[1 << 20];
    FILE *in = fopen(a[1], "r"), *out = fopen(a[2], "w");
    text[fread(text, 1, sizeof text - 1, in)] = 0;
    char *at = strstr(text, "times = [") + 9, *end;
    double r = 10, rate = pow(r, -1.5);
    fputs("time,x,y,z,vx,vy,vz\\n", out);
    for (double t; t = strtod(at, &end), end != at; at = end + strspn(end, ", "))
        fprintf(out, "%.17g,%.17g,%.17g,0,%.17g,%.17g,0\\n", t, r * cos(rate * t),
                r * sin(rate * t), -r * rate * sin(rate * t), r * rate * cos(rate * t));
    return fclose(out);
}
"""


@pytest.fixture
def run(tmp_path: Path) -> Callable[..., CaseResult]:
    """Run the circle through one program under test."""

    def one(own_budget: bool = False, kept: bool = False, **words: Any) -> CaseResult:
        suite = read_suite(
            parts.make_suite(tmp_path / "suite", '[propagator.it]\npython = "mine:exact"\n')
        )
        case = suite.cases[0]
        if "command" in words:
            words["command"] = tuple(words["command"])
        else:
            words |= {"reads": "json", "writes": "npz"}
        job = Job(
            key="it/circle", propagator=Propagator("it", **words), case=case.name,
            spec=case.spec(), folder=str(suite.folder), case_digest=case.digest, kept=kept,
            own_budget=own_budget,
        )  # fmt: skip
        return run_job(job)

    return one


def test_a_right_python_function_passes(run: Callable[..., CaseResult]) -> None:
    result = run(python="mine:exact")
    record = result.record
    assert (record.verdict, record.outcome, record.reason) == ("pass", "ran", "")
    assert record.position_error is not None
    assert 0 < record.position_error < 1e-13
    assert record.errors["energy"]["max"] < 1e-13  # type: ignore[operator]
    assert 0.99 < record.margin <= 1  # type: ignore[operator]
    assert record.orbit_class == "bound"  # the start is rounded: no exact circle
    assert len(record.curve[0]) == len(record.curve[1]) == 21
    assert result.obtained["position"].shape == (21, 3)
    assert np.all(np.abs(result.obtained["position"] - result.expected["position"]) < 1e-13)
    assert np.all(result.expected["position_bound"] < 1e-14)
    assert len(record.digest) == 64
    assert record.case_digest


def test_a_c_program_compiled_on_the_spot_passes(
    run: Callable[..., CaseResult], tmp_path: Path, require_tool: Callable[[str], str]
) -> None:
    folder = tmp_path / "suite"
    folder.mkdir()
    (folder / "circle.c").write_text(C_PROGRAM)
    compiler = require_tool("gcc")
    subprocess.run(
        [compiler, "-O1", "-o", folder / "circle", folder / "circle.c", "-lm"], check=True
    )
    record = run(command=["./circle", "{orbit}", "{out}"]).record
    assert (record.verdict, record.outcome, record.reason) == ("pass", "ran", "")


@pytest.mark.parametrize(
    ("function", "outcome", "words"),
    [
        ("crash", "crashed", "exit status 1: ValueError: no convergence"),
        ("die", "crashed", "signal SIGSEGV"),
        ("garbage", "output refused", "returned str; it must return time (n,)"),
        ("partial", "wrong rows", "wrote 20 rows where 21 times were asked for"),
        ("late", "wrong rows", "row 12 has time 110.000000000001 where 110.0 was asked for"),
        ("nan", "output refused", "row 4 of position is nan"),
        ("elsewhere", "wrote elsewhere", "wrote result.csv instead"),
        ("nobody", "could not start", "there is no 'nobody' in mine"),
    ],
)
def test_python_functions_that_go_wrong(
    run: Callable[..., CaseResult], function: str, outcome: str, words: str
) -> None:
    record = run(python=f"mine:{function}").record
    assert record.outcome == outcome
    assert words in record.reason
    assert record.verdict == ("not-run" if outcome == "could not start" else "unusable")
    assert not record.errors


def test_a_budget_of_the_case_is_judged_as_far_as_there_are_columns(
    run: Callable[..., CaseResult], tmp_path: Path
) -> None:
    (tmp_path / "suite").mkdir()
    program = """
import json, mine, sys
t, x, _ = mine.exact(json.load(open(sys.argv[1])))
rows = "\\n".join(",".join(map(repr, [s, *p])) for s, p in zip(t, x))
open(sys.argv[2], "w").write("time,x,y,z\\n" + rows)
"""
    (tmp_path / "suite" / "it.py").write_text(program)
    words = {"command": [sys.executable, "it.py", "{orbit}", "{out}"], "reads": "json",
             "env": {"PYTHONPATH": str(tmp_path / "suite")}}  # fmt: skip
    lenient = run(**words, own_budget=True).record
    assert (lenient.verdict, lenient.budget) == ("pass", {"position": 1e-9})
    assert lenient.reason == "not judged, because the output has no columns for it: velocity"
    strict = run(**words).record
    assert (strict.verdict, strict.outcome) == ("unusable", "output refused")
    assert "budget for velocity" in strict.reason


def test_a_function_may_return_the_second_clock(run: Callable[..., CaseResult]) -> None:
    record = run(python="mine:with_clock").record
    # on a circle d tau / dt = sqrt(1 - 3/r) (textbook result, from memory)
    assert record.errors["clock"]["max"] == pytest.approx(0, abs=1e-12)


def test_a_module_that_is_not_there_and_one_that_lacks_another(
    run: Callable[..., CaseResult], tmp_path: Path
) -> None:
    assert "there is no module 'yours'" in run(python="yours:f").record.reason
    (tmp_path / "suite" / "needy.py").write_text("import not_to_be_found\n")
    record = run(python="needy:f").record
    assert record.outcome == "crashed"
    assert "No module named 'not_to_be_found'" in record.reason


def test_memory_has_a_limit(run: Callable[..., CaseResult]) -> None:
    record = run(python="mine:hungry", memory=4 * 10**9).record
    assert record.outcome == "memory limit"
    assert "4000 MB" in record.reason


SHELL = {
    "hangs": ("sleep 60", "timed out", "still running after 0.5 s"),
    "hangs with children": ("sleep 60 & sleep 60 & wait", "timed out", "it was killed"),
    "writes half a file": (
        'printf "time,x,y,z\\n0,10,0,0\\n10,1" > "$2"', "output refused", "line 3 has 2 entries",
    ),
    "writes garbage": ('head -c 1000 /dev/zero > "$2"', "output refused", ""),
    "writes nothing": ("true", "no output", "wrote nothing"),
    "makes a link": ('ln -s "$1" "$2"', "output refused", "symbolic link"),
    "makes a folder": ('mkdir "$2"', "output refused", "something else than a file"),
    "writes without end": ('yes > "$2"', "output too large", "more than 1 MB"),
    "fails": ("echo bad step size >&2; exit 3", "crashed", "exit status 3: bad step size"),
    "is killed": ("kill -9 $$", "crashed", "signal SIGKILL"),
    "writes elsewhere": ("echo > other.csv", "wrote elsewhere", "wrote other.csv instead"),
    "kills its starter": ("kill -9 $PPID; sleep 60", "crashed", "starts programs was killed"),
}  # fmt: skip


@pytest.mark.parametrize("name", SHELL)
def test_programs_that_go_wrong(run: Callable[..., CaseResult], tmp_path: Path, name: str) -> None:
    script, outcome, words = SHELL[name]
    (tmp_path / "suite").mkdir()
    (tmp_path / "suite" / "it.sh").write_text(script)
    timeout = 0.5 if "hangs" in name else 30.0
    begin = time.monotonic()
    record = run(command=["sh", "it.sh", "{orbit}", "{out}"], timeout=timeout, output=10**6).record
    assert record.outcome == outcome, record
    assert words in record.reason
    assert time.monotonic() - begin < 20
    assert str(tmp_path) not in record.reason


def test_a_program_that_is_not_there(run: Callable[..., CaseResult]) -> None:
    record = run(command=["./nowhere", "{orbit}", "{out}"]).record
    assert (record.verdict, record.outcome) == ("not-run", "could not start")
    assert "No such file" in record.reason


def test_what_it_prints_is_kept_within_bounds(
    run: Callable[..., CaseResult], tmp_path: Path
) -> None:
    (tmp_path / "suite").mkdir()
    script = "seq 1 200000; printf '\\033[31mred\\000' >&2; exit 1"
    (tmp_path / "suite" / "it.sh").write_text(script)
    record = run(command=["sh", "it.sh", "{orbit}", "{out}"]).record
    assert record.stdout_tail.endswith("199999\n200000\n")
    assert record.stdout_tail.startswith("[1284895 bytes before this]")
    assert len(record.stdout_tail) < 5000
    assert record.stderr_tail == "\ufffd[31mred\ufffd"


def test_nothing_that_it_started_outlives_it(
    run: Callable[..., CaseResult], tmp_path: Path
) -> None:
    (tmp_path / "suite").mkdir()
    note = tmp_path / "pid"
    (tmp_path / "suite" / "it.sh").write_text(f"sleep 60 & echo $! > {note}")
    assert run(command=["sh", "it.sh", "{orbit}", "{out}"]).record.outcome == "no output"
    pid = int(note.read_text())
    deadline = time.monotonic() + 10
    alive = True
    while alive and time.monotonic() < deadline:
        try:
            os.kill(pid, 0)
            stat = Path(f"/proc/{pid}/stat")
            alive = not stat.exists() or stat.read_text().rsplit(")", 1)[1].split()[0] != "Z"
        except ProcessLookupError:
            alive = False
        time.sleep(0.01)
    assert not alive


@pytest.mark.parametrize("reads", ["toml", "json"])
def test_the_orbit_file_holds_numbers_and_explicit_times(
    run: Callable[..., CaseResult], tmp_path: Path, reads: str
) -> None:
    (tmp_path / "suite").mkdir()
    seen = tmp_path / "seen"
    (tmp_path / "suite" / "it.sh").write_text(f'cp "$1" {seen}')
    run(command=["sh", "it.sh", "{orbit}", "{out}"], reads=reads)
    text = seen.read_text()
    orbit = tomllib.loads(text) if reads == "toml" else json.loads(text)
    assert orbit["samples"] == {"times": [10.0 * k for k in range(21)]}
    assert orbit["start"]["position"] == [10.0, 0.0, 0.0]
    assert orbit["start"]["velocity"] == [0.0, 10 * 10**-1.5, 0.0]
    assert {k: orbit[k] for k in ("system", "gm", "particle", "chart", "clock")} == {
        "system": "geometric", "gm": 1.0, "particle": "massive", "chart": "areal",
        "clock": "coordinate",
    }  # fmt: skip


def test_elements_become_position_and_velocity(tmp_path: Path) -> None:
    from truefall.validate.cases import case
    from truefall.validate.nightly.one_case import _given

    spec = case("bound-strong").spec
    assert spec.elements is not None
    job = Job("p/c", Propagator("p", python="m:f"), "c", replace(spec, times=(0.0, 5.0)),
              str(tmp_path), kept=False)  # fmt: skip
    given, orbit = _given(job)
    assert given.elements is None
    exact = spec.orbit()
    assert given.position == exact.position
    assert given.velocity == exact.velocity
    assert given.times == (0.0, 5.0)
    assert np.allclose(orbit.known.position, exact.at([0.0, 5.0]).position, rtol=1e-15, atol=1e-14)


def test_of_long_cases_some_exact_states_are_kept(tmp_path: Path) -> None:
    from truefall.validate.nightly.one_case import _given

    path = parts.make_suite(tmp_path / "s", '[propagator.p]\npython = "mine:exact"\n', count=20001)
    spec = read_suite(path).cases[0].spec()
    given, orbit = _given(
        Job("p/c", Propagator("p", python="m:f"), "c", spec, str(tmp_path), kept=False)
    )
    assert given.times == spec.times
    assert orbit.known.time.size == 953  # every 21st
    assert set(orbit.known.time) <= set(spec.times or ())


def test_a_failing_case_is_explained(run: Callable[..., CaseResult], tmp_path: Path) -> None:
    (tmp_path / "suite").mkdir()
    (tmp_path / "suite" / "scale").write_text("1e-3")
    record = run(python="mine:exact").record
    assert (record.verdict, record.outcome) == ("fail", "ran")
    assert record.position_error == pytest.approx(1e-2, rel=1e-6)
    assert record.margin is not None
    assert record.margin < 0
    assert record.findings or record.description
    json.dumps(record.findings, allow_nan=False)


def test_causes_are_kept_and_what_takes_too_long_is_tried_three_times(
    run: Callable[..., CaseResult], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import truefall.validate.causes as causes
    from truefall.validate.nightly import explained

    monkeypatch.setattr(explained, "kept_folder", lambda: str(tmp_path))
    monkeypatch.setattr(explained, "_LONGEST", 0.05)
    calls = []

    def endless(_: object) -> None:
        calls.append(1)
        time.sleep(5)

    monkeypatch.setattr(causes, "explain", endless)
    (tmp_path / "suite").mkdir()
    (tmp_path / "suite" / "scale").write_text("1e-3")
    for count in (1, 2, 3, 3):
        record = run(python="mine:exact", kept=True).record
        assert record.description == "no cause was found within 0.05 s"
        assert len(calls) == count
    for path in tmp_path.glob("causes-*"):
        path.write_text("{}")
    found = causes.Explanation(description="something else")
    monkeypatch.setattr(causes, "explain", lambda _: (calls.append(1), found)[1])
    for _ in range(2):
        assert run(python="mine:exact", kept=True).record.description == "something else"
        assert len(calls) == 4
