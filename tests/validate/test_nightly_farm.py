"""Many jobs, few workers: one result each, whoever is killed, and memory that stays flat."""

from __future__ import annotations

import json
import multiprocessing
import os
import signal
import subprocess
import sys
import time
import tracemalloc
from collections import Counter
from collections.abc import Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import nightly_parts as parts
import pytest

from truefall.validate.errors import InputError
from truefall.validate.nightly.farm import ClusterWorkers, LocalWorkers, run_all
from truefall.validate.nightly.night_file import read_night


def lost(job: Any, sentence: str) -> tuple[Any, str]:
    return job, sentence


def test_local_workers_give_each_job_one_result_in_several_processes() -> None:
    found = list(run_all(range(-20, 0), LocalWorkers(2), abs, lost))
    assert sorted(found) == list(range(1, 21))


def test_a_job_that_kills_its_worker_is_lost_and_all_others_are_not() -> None:
    """Signal 0 is none at all, signal 9 kills the worker, and kills it when tried again alone."""
    jobs = [0, 0, int(signal.SIGKILL), 0, 0, 0]
    found = list(run_all(jobs, LocalWorkers(2), signal.raise_signal, lost))
    assert Counter(map(str, found)) == {
        "None": 5, "(9, 'the process that ran it was killed twice')": 1
    }  # fmt: skip


def test_a_worker_killed_from_outside_costs_nothing() -> None:
    jobs = [0.2 + 0.001 * k for k in range(8)]
    others = set(multiprocessing.active_children())
    found = []
    for result in run_all(jobs, LocalWorkers(2), time.sleep, lost):
        found.append(result)
        if len(found) == 2:
            victim = next(iter(set(multiprocessing.active_children()) - others))
            os.kill(int(victim.pid or 0), signal.SIGKILL)
    assert found == [None] * len(jobs)


def test_an_exception_costs_one_job() -> None:
    found = list(run_all(["1", "x", "3"], LocalWorkers(1), int, lost))
    assert sorted(f for f in found if isinstance(f, int)) == [1, 3]
    ((job, sentence),) = [f for f in found if isinstance(f, tuple)]
    assert job == "x"
    assert "ValueError" in sentence


def reverse(job: bytes) -> bytes:
    return job[::-1]


class Counting:
    """Threads, with a count of the jobs taken and not given back."""

    window = 8

    def __init__(self) -> None:
        self.executor = ThreadPoolExecutor(2)

    def start(self) -> Executor:
        return self.executor

    def stop(self) -> None:
        self.executor.shutdown()


def test_ten_thousand_cases_keep_memory_flat(record_property: Any) -> None:
    """Jobs and results of 100 kB: all of them at once would be a gigabyte each."""
    taken = given = most = 0

    def jobs() -> Iterator[bytes]:
        nonlocal taken, most
        for k in range(10_000):
            taken += 1
            most = max(most, taken - given)
            yield k.to_bytes(4, "little") * 25_000

    numbers = []
    tracemalloc.start()
    try:
        for result in run_all(jobs(), Counting(), reverse, lost):
            given += 1
            numbers.append(int.from_bytes(result[:4], "big"))
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    record_property("peak_bytes", peak)
    assert sorted(numbers) == list(range(10_000))
    assert most <= Counting.window + 1
    assert peak < 16e6


# a cluster ---------------------------------------------------------------------------------------


def started(*command: str) -> subprocess.Popen[bytes]:
    return subprocess.Popen(
        [sys.executable, "-W", "ignore", "-m", *command],
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True,
    )  # fmt: skip


@pytest.fixture
def cluster(tmp_path: Path) -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """A scheduler and two workers with one thread each, all processes of their own."""
    notes = tmp_path / "scheduler.json"
    scheduler = started(
        "dask", "scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
        "--scheduler-file", str(notes),
    )  # fmt: skip
    workers = [
        started("dask", "worker", "--scheduler-file", str(notes), "--nthreads", "1", "--no-nanny",
                "--no-dashboard", "--local-directory", str(tmp_path / f"w{k}"))
        for k in range(2)
    ]  # fmt: skip
    try:
        deadline = time.monotonic() + 60
        while not notes.exists() and time.monotonic() < deadline:
            time.sleep(0.05)
        yield json.loads(notes.read_text())["address"], workers
    finally:
        for process in (*workers, scheduler):
            process.kill()
            process.wait()


SLOW = """
import pathlib, time
import mine

def slow(orbit):
    pathlib.Path(__file__).with_name("begun-" + orbit["name"]).touch()
    time.sleep(0.4)
    return mine.exact(orbit)
"""


def test_a_night_on_two_workers_of_a_cluster_one_of_which_is_killed(
    cluster: tuple[str, list[subprocess.Popen[bytes]]], tmp_path: Path
) -> None:
    address, workers = cluster
    folder = tmp_path / "suite"
    suite = parts.make_suite(
        folder, '[propagator.p]\npython = "slow:slow"\n', cases='[cases]\nfiles = ["o-*.toml"]\n'
    )
    (folder / "slow.py").write_text(SLOW)
    for k in range(12):
        (folder / f"o-{k:02d}.toml").write_text(parts.circle(21 + k))
    night = subprocess.Popen(
        [sys.executable, "-c", "from truefall.validate.cli import main; main()", "nightly",
         str(suite), "--cluster", address, "--json"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    deadline = time.monotonic() + 60
    while len(list(folder.glob("begun-*"))) < 4 and time.monotonic() < deadline:
        time.sleep(0.02)
    assert night.poll() is None
    workers[0].kill()
    out, err = night.communicate(timeout=100)
    assert night.returncode == 0, err
    stored = read_night(folder / "suite-nights" / "nights" / "night-00001.h5")
    assert [c.key for c in stored.cases] == [f"p/o-{k:02d}" for k in range(12)]
    assert {(c.verdict, c.outcome) for c in stored.cases} == {("pass", "ran")}
    assert json.loads(out)


def test_no_cluster_is_one_sentence() -> None:
    with pytest.raises(InputError, match="no cluster answers there"):
        ClusterWorkers("nowhere://127.0.0.1:1")
