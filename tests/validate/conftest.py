"""Trajectories made from exact orbits, in memory and as files, for the tests of the judge."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.trajectory import Trajectory

CsvOf = Callable[..., Path]
TrajectoryOf = Callable[..., Trajectory]


def _columns(orbit: Orbit, times: Sequence[float], drop: Sequence[str]) -> dict[str, Any]:
    states = orbit.at(times)
    columns: dict[str, Any] = {"time": np.array(times, dtype=float)}
    for names, values in (("xyz", states.position), (("vx", "vy", "vz"), states.velocity)):
        if "velocity" in drop and names != "xyz":
            continue
        columns |= {name: values[:, k] for k, name in enumerate(names)}
    for name in ("proper_time", "coordinate_time", "affine"):
        wanted = name == "coordinate_time" or orbit.clock != "proper"
        if getattr(states, name) is not None and name not in drop and wanted:
            columns[name] = getattr(states, name)
    return columns


def _metadata(orbit: Orbit, start: bool) -> dict[str, Any]:
    found: dict[str, Any] = {
        key: getattr(orbit, key) for key in ("system", "gm", "particle", "chart", "clock")
    }
    if start:
        found["start"] = {
            "time": orbit.start_time,
            "position": list(orbit.position),
            "velocity": list(orbit.velocity),
        }
    return found


@pytest.fixture
def csv_of(tmp_path: Path) -> CsvOf:
    """Write a CSV of an orbit: shortest form, or so many significant digits, errors added."""

    def write(
        orbit: Orbit,
        times: Sequence[float],
        *,
        name: str = "run",
        digits: int | None = None,
        drop: Sequence[str] = (),
        start: bool = False,
        change: Callable[[dict[str, Any]], None] | None = None,
    ) -> Path:
        columns = _columns(orbit, times, drop)
        if change is not None:
            change(columns)
        form = repr if digits is None else (lambda v: f"{v:.{digits - 1}e}")
        lines = []
        for key, value in _metadata(orbit, start).items():
            if isinstance(value, dict):
                lines += [f"# {key}.{inner} = {item!r}" for inner, item in value.items()]
            else:
                lines.append(
                    f'# {key} = "{value}"' if isinstance(value, str) else f"# {key} = {value!r}"
                )
        lines.append(",".join(columns))
        stamps = [repr(float(t)) for t in columns["time"]]
        others = [[form(float(v)) for v in columns[k]] for k in columns if k != "time"]
        lines += [",".join(row) for row in zip(stamps, *others, strict=True)]
        path = tmp_path / f"{name}.csv"
        path.write_text("\n".join(lines) + "\n")
        return path

    return write


@pytest.fixture
def trajectory_of() -> TrajectoryOf:
    """The exact states of an orbit, rounded to float64, as a Trajectory in memory."""

    def make(
        orbit: Orbit,
        times: Sequence[float],
        *,
        drop: Sequence[str] = (),
        start: bool = True,
        budget: Mapping[str, Any] | None = None,
    ) -> Trajectory:
        columns = _columns(orbit, times, drop)
        metadata = _metadata(orbit, start)
        if budget is not None:
            metadata["budget"] = dict(budget)
        velocity = None
        if "vx" in columns:
            velocity = np.column_stack([columns[k] for k in ("vx", "vy", "vz")])
        return Trajectory(
            path="run.csv",
            name="run",
            time=columns["time"],
            position=np.column_stack([columns[k] for k in "xyz"]),
            velocity=velocity,
            proper_time=columns.get("proper_time"),
            coordinate_time=columns.get("coordinate_time"),
            affine=columns.get("affine"),
            metadata=metadata,
        )

    return make


@dataclass(frozen=True)
class Outcome:
    """What a run of the command line said, and its exit status."""

    status: int
    out: str
    err: str

    @property
    def text(self) -> str:
        return self.out + self.err


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Callable[..., Outcome]:
    """The command line in this process; an outcome never holds a traceback."""

    def call(*args: str | Path) -> Outcome:
        from truefall.validate.cli import main

        capsys.readouterr()
        with pytest.raises(SystemExit) as stop:
            main([str(a) for a in args])
        captured = capsys.readouterr()
        assert isinstance(stop.value.code, int)
        outcome = Outcome(stop.value.code, captured.out, captured.err)
        assert "Traceback" not in outcome.text, outcome.text
        return outcome

    return call


@pytest.fixture
def child() -> Callable[..., Outcome]:
    """The command line in a process of its own."""

    def call(*args: str | Path, folder: Path | None = None, **environment: str) -> Outcome:
        program = [sys.executable, "-c", "from truefall.validate.cli import main; main()"]
        done = subprocess.run(
            [*program, *map(str, args)],
            cwd=folder,
            env={**os.environ, **environment},
            capture_output=True,
            text=True,
            timeout=120,
            check=False,
        )
        return Outcome(done.returncode, done.stdout, done.stderr)

    return call


#: A bound orbit with a budget: the orbit file behind the fixtures below.
ORBIT_FILE = """
system = "geometric"
gm = 1.0
particle = "massive"
chart = "areal"
clock = "coordinate"
[start]
position = [10.0, 0.0, 0.0]
velocity = [0.0, 0.33, 0.02]
[samples]
first = 0.0
last = 200.0
count = 41
[budget]
position = 1e-9
"""


@pytest.fixture
def orbit_file(tmp_path: Path) -> Path:
    path = tmp_path / "probe.toml"
    path.write_text(ORBIT_FILE)
    return path


@pytest.fixture
def exact(run: Callable[..., Outcome], orbit_file: Path) -> Path:
    """A reference trajectory; the orbit file beside it is its sidecar."""
    out = orbit_file.with_suffix(".csv")
    assert run("make", orbit_file, "--out", out).status == 0
    return out


@pytest.fixture
def spoil() -> Callable[..., Path]:
    """A copy of a CSV with one number changed (rows counted after the header line)."""

    def change(path: Path, row: int, column: int, error: float) -> Path:
        lines = path.read_text().splitlines()
        first = next(k for k, line in enumerate(lines) if line.startswith("time,")) + 1
        cells = lines[first + row].split(",")
        cells[column] = repr(float(cells[column]) + error)
        lines[first + row] = ",".join(cells)
        copy = path.with_name("spoiled.csv")
        copy.write_text("\n".join(lines) + "\n")
        return copy

    return change
