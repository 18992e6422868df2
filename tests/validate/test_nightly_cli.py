"""The command as a process: adaptors to start from, interrupts, what is left running."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import nightly_parts as parts
import numpy as np
import pytest

from truefall.validate.errors import UsageError
from truefall.validate.nightly.init import write_skeleton
from truefall.validate.nightly.kept import expected_orbit, kept_folder
from truefall.validate.nightly.night_file import read_night
from truefall.validate.nightly.suite import read_suite

TRUEFALL = [sys.executable, "-c", "from truefall.validate.cli import main; main()", "nightly"]


def begin(*words: object) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [*TRUEFALL, *map(str, words)],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True,
    )  # fmt: skip


# to start from ---------------------------------------------------------------------------------


def test_the_suite_to_start_from_runs_in_python_c_and_fortran(
    tmp_path: Path, require_tool: Callable[[str], str]
) -> None:
    folder = tmp_path / "new"
    names = [p.name for p in write_skeleton(folder)]
    assert names == ["suite.toml", "adaptor.py", "adaptor.c", "adaptor.f90"]
    text = (folder / "suite.toml").read_text()
    # as its comments say: compile and take out the comment signs
    for compiler in ("cc", "gfortran"):
        (line,) = re.findall(rf"^# ({compiler} .*)$", text, re.MULTILINE)
        require_tool("gcc" if compiler == "cc" else compiler)
        subprocess.run(line.split(), cwd=folder, check=True)
    text = re.sub(r"^# (\[propagator|command)", r"\1", text, flags=re.MULTILINE)
    text = text.replace('use   = ["circular-stable", "bound-strong"]', 'use = ["bound-strong"]')
    text = text.replace('"python3", "adaptor.py"', f'"{sys.executable}", "adaptor.py"')
    (folder / "suite.toml").write_text(text)
    done = begin(folder / "suite.toml", "--jobs", 2)
    out, err = done.communicate(timeout=120)
    assert done.returncode == 0, err
    assert out.count("\n") == 1  # one line for a chat
    night = read_night(folder / "suite-nights" / "nights" / "night-00001.h5")
    errors = {c.propagator: c.position_error for c in night.cases}
    assert set(errors) == {"python", "function", "c", "fortran"}
    assert errors["python"] == errors["function"]
    for error in errors.values():
        # four of them share one method; its error is far above rounding and far below the budget
        assert error == pytest.approx(errors["python"], rel=1e-3)
        assert 1e-9 < error < 1e-6


def test_c_adaptor_has_no_warnings_and_refuses_what_it_does_not_know(
    tmp_path: Path, require_tool: Callable[[str], str]
) -> None:
    write_skeleton(tmp_path)
    gcc = require_tool("gcc")
    options = ["-O2", "-Wall", "-Wextra", "-Wconversion", "-Werror", "-o", "c"]
    subprocess.run([gcc, *options, "adaptor.c", "-lm"], cwd=tmp_path, check=True)
    (tmp_path / "o.toml").write_text('particle = "light"\nchart = "areal"\nclock = "coordinate"\n')
    done = subprocess.run(["./c", "o.toml", "x"], cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 1
    assert "massive particles" in done.stderr


def test_init_overwrites_nothing(tmp_path: Path) -> None:
    (tmp_path / "adaptor.c").write_text("mine")
    with pytest.raises(UsageError, match=r"adaptor\.c is there already"):
        write_skeleton(tmp_path)
    assert [p.name for p in tmp_path.iterdir()] == ["adaptor.c"]
    assert (tmp_path / "adaptor.c").read_text() == "mine"


# interrupted -----------------------------------------------------------------------------------

WAITING = """
import os, pathlib, time
def wait(orbit):
    note = pathlib.Path(__file__).with_name("pid")
    note.with_suffix(".new").write_text(str(os.getpid()))
    note.with_suffix(".new").rename(note)
    time.sleep(600)
"""


def running(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    stat = Path(f"/proc/{pid}/stat")
    return not stat.exists() or stat.read_text().rsplit(")", 1)[1].split()[0] != "Z"


@pytest.mark.parametrize(
    ("number", "status"),
    [(signal.SIGINT, 130), (signal.SIGTERM, 143), (signal.SIGKILL, -signal.SIGKILL)],
)
def test_a_stopped_night_leaves_no_night_and_nothing_running(
    tmp_path: Path, number: signal.Signals, status: int
) -> None:
    suite = parts.make_suite(tmp_path / "s", '[propagator.p]\npython = "waiting:wait"\n')
    (tmp_path / "s" / "waiting.py").write_text(WAITING)
    night = begin(suite, "--jobs", 1)
    note = tmp_path / "s" / "pid"
    deadline = time.monotonic() + 60
    while not note.exists() and time.monotonic() < deadline:
        time.sleep(0.02)
    pid = int(note.read_text())
    assert running(pid)
    night.send_signal(number)
    _, err = night.communicate(timeout=30)
    assert night.returncode == status
    assert "Traceback" not in err
    deadline = time.monotonic() + 20
    while running(pid) and time.monotonic() < deadline:
        time.sleep(0.02)
    assert not running(pid)
    nights = tmp_path / "s" / "suite-nights" / "nights"
    if number != signal.SIGKILL:
        assert list(nights.iterdir()) == []


# expected states that are kept -----------------------------------------------------------------


def spec_of(tmp_path: Path, count: int = 21) -> Any:
    parts.make_suite(tmp_path / "s", '[propagator.p]\npython = "mine:exact"\n', count=count)
    return read_suite(tmp_path / "s" / "suite.toml").cases[0].spec()


def test_kept_states_are_the_computed_ones(tmp_path: Path) -> None:
    spec = spec_of(tmp_path)
    folder = tmp_path / "kept"
    folder.mkdir()
    fresh = expected_orbit(spec, str(folder))
    (stored,) = folder.iterdir()
    kept = expected_orbit(spec, str(folder))
    assert kept._constants.keys() == fresh._constants.keys()
    exact = spec.orbit()
    states = exact.at(spec.times)
    for name in ("position", "position_low", "velocity_bound", "proper_time", "azimuth"):
        assert np.array_equal(getattr(kept.known, name), getattr(states, name)), name
    assert kept.energy_minus_one == exact.energy_minus_one
    assert kept.orbit_class == exact.orbit_class
    assert kept.ends_after == exact.ends_after
    assert np.array_equal(kept.angular_momentum_direction, exact.angular_momentum_direction)
    other = [1.5, 2.5]
    assert np.array_equal(kept.at(other).position, exact.at(other).position)
    assert kept.reachable([1.0]).tolist() == [True]
    assert stored.exists()


def test_a_damaged_file_counts_as_missing_and_other_times_have_another_name(tmp_path: Path) -> None:
    folder = tmp_path / "kept"
    folder.mkdir()
    spec = spec_of(tmp_path)
    first = expected_orbit(spec, str(folder)).known.position
    (stored,) = folder.iterdir()
    data = bytearray(stored.read_bytes())
    for place in (len(data) // 3, len(data) // 2):
        data[place] ^= 0xFF
    stored.write_bytes(data)
    assert np.array_equal(expected_orbit(spec, str(folder)).known.position, first)
    stored.write_bytes(b"")
    assert np.array_equal(expected_orbit(spec, str(folder)).known.position, first)
    expected_orbit(spec_of(tmp_path, 22), str(folder))
    assert len(list(folder.glob("*.npz"))) == 2


def test_states_are_kept_in_a_private_folder_only(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    kept_folder.cache_clear()
    try:
        folder = kept_folder()
        assert folder is not None
        assert folder.startswith(str(tmp_path))
        assert os.stat(folder).st_mode & 0o077 == 0
        os.chmod(folder, 0o777)
        kept_folder.cache_clear()
        assert kept_folder() is None
    finally:
        kept_folder.cache_clear()


# reach -----------------------------------------------------------------------------------------

COPYING = """
import json, sys, time
def copy(orbit):
    begin = time.monotonic()
    with open(f"{sys.path[0]}/truth/{orbit['name']}.json") as stream:
        found = json.load(stream)
    time.sleep(max(0.0, 0.01 - (time.monotonic() - begin)))
    return found
"""


@pytest.mark.slow
def test_sixty_cases_of_ten_milliseconds_leave_six_seconds_of_overhead(
    tmp_path: Path, record_property: Callable[[str, object], None]
) -> None:
    """The bound here is twice the promise, for machines under load."""
    from truefall.validate.cases import load_cases

    folder = tmp_path / "s"
    cases = load_cases()
    suite = parts.make_suite(
        folder,
        '[propagator.one]\npython = "copying:copy"\n[propagator.two]\npython = "copying:copy"\n'
        f"cases = {[c.name for c in cases[: 60 - len(cases)]]}\n",
        cases='[cases]\nuse = ["*"]\n',
    )
    (folder / "copying.py").write_text(COPYING)
    (folder / "truth").mkdir()
    for case in cases:
        states = expected_orbit(case.spec, kept_folder()).known
        arrays = [states.time, states.position, states.velocity]
        (folder / "truth" / f"{case.name}.json").write_text(
            json.dumps([a.tolist() for a in arrays])
        )
    took = []
    for number in (1, 2):
        begun = time.monotonic()
        done = begin(suite, "--jobs", 2)
        _, err = done.communicate(timeout=300)
        whole = time.monotonic() - begun
        night = read_night(folder / "suite-nights" / "nights" / f"night-{number:05d}.h5")
        assert len(night.cases) == 60
        assert done.returncode == 0, err
        took.append(whole - sum(c.seconds for c in night.cases) / 2)
    print(f"overhead of 60 cases: {took[0]:.2f} s, {took[1]:.2f} s warm")
    record_property("overhead_seconds", took)
    assert took[1] < 2 * 6.0
