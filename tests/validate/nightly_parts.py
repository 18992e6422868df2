"""What the tests of the nightly watch share: suites, programs under test, workers in a thread."""

from __future__ import annotations

import textwrap
from concurrent.futures import Executor, ThreadPoolExecutor
from pathlib import Path
from typing import Any

from truefall.validate.nightly.record import Night
from truefall.validate.nightly.run import run_night
from truefall.validate.nightly.suite import read_suite

#: A circle r = 10 in geometric units: the angular velocity is r^(-3/2), Kepler's law, exact for
#: circles in the areal chart (textbook result, from memory).
CIRCLE = """
system = "geometric"
gm = 1.0
particle = "massive"
chart = "areal"
clock = "coordinate"
[start]
position = [10.0, 0.0, 0.0]
velocity = [0.0, {speed!r}, 0.0]
[samples]
first = 0.0
last = 200.0
count = {count}
[budget]
position = 1e-9
velocity = 1e-9
"""

PROPAGATOR = '''
"""A propagator that is right on circles, scaled by what stands in the file `scale`."""
import math, os, pathlib, signal, time

def exact(orbit):
    x, v = orbit["start"]["position"], orbit["start"]["velocity"]
    rate = v[1] / x[0]
    times = orbit["samples"]["times"]
    angles = [rate * t for t in times]
    scale = pathlib.Path(__file__).with_name("scale")
    r = x[0] * (1.0 + (float(scale.read_text()) if scale.exists() else 0.0))
    position = [[r * math.cos(a), r * math.sin(a), 0.0] for a in angles]
    velocity = [[-r * rate * math.sin(a), r * rate * math.cos(a), 0.0] for a in angles]
    return times, position, velocity

def with_clock(orbit):
    t, x, v = exact(orbit)
    return t, x, v, [s * math.sqrt(1 - 3 / 10) for s in t]

def crash(orbit): raise ValueError("no convergence")
def die(orbit): os.kill(os.getpid(), signal.SIGSEGV)
def hang(orbit): time.sleep(1000)
def garbage(orbit): return "done"
def partial(orbit):
    t, x, v = exact(orbit)
    return t[:-1], x[:-1], v[:-1]
def late(orbit):
    t, x, v = exact(orbit)
    return [s + 1e-12 * (s > 100) for s in t], x, v
def nan(orbit):
    t, x, v = exact(orbit)
    x[3][0] = math.nan
    return t, x, v
def hungry(orbit): return bytearray(10**12)
def elsewhere(orbit):
    open("result.csv", "w").write("time")
    os._exit(0)
'''


def circle(count: int = 21) -> str:
    """The orbit file of the circle."""
    return CIRCLE.format(speed=10 * 10**-1.5, count=count)


def make_suite(folder: Path, body: str, *, count: int = 21, cases: str = "") -> Path:
    """A suite with the circle as its case and mine.py beside it."""
    folder.mkdir(exist_ok=True)
    (folder / "circle.toml").write_text(circle(count))
    (folder / "mine.py").write_text(PROPAGATOR)
    path = folder / "suite.toml"
    cases = cases or '[cases]\nfiles = ["circle.toml"]\n'
    path.write_text(textwrap.dedent(body) + cases)
    return path


class ThreadWorkers:
    """One thread of this process: nothing to spawn."""

    window = 2

    def __init__(self) -> None:
        self._executor: ThreadPoolExecutor | None = None

    def start(self) -> Executor:
        self._executor = ThreadPoolExecutor(1)
        return self._executor

    def stop(self) -> None:
        if self._executor is not None:
            self._executor.shutdown(cancel_futures=True)


BODY = '[propagator.it]\npython = "mine:exact"\n'


class House:
    """A suite in a folder, its nights beside it."""

    def __init__(self, folder: Path, body: str = BODY) -> None:
        self.suite = make_suite(folder, body)
        self.folder, self.out = folder, folder / "nights-of-it"

    def night(self, **words: Any) -> Night:
        words.setdefault("workers", ThreadWorkers())
        night: Night = run_night(read_suite(self.suite), self.out, **words)
        return night

    def file(self, number: int) -> Path:
        return self.out / "nights" / f"night-{number:05d}.h5"

    def scale(self, value: float) -> None:
        (self.folder / "scale").write_text(repr(value))
