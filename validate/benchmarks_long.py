"""How long files are judged, as whole processes: against h5py and PyArrow just reading them."""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.reference.table import Table
    from truefall.validate.streaming.rows import Block, Head

__all__ = ["GeneratedRows", "measure_long"]

_CHECK = "from truefall.validate.cli import main; main()"
_H5PY = """
import sys, h5py
with h5py.File(sys.argv[1]) as file:
    for group in file["trajectory"].values():
        for name in ("time", "position", "velocity", "proper_time"):
            data = group[name]
            for first in range(0, data.shape[0], 131072):
                data[first:first + 131072]
"""
_ARROW = """
import sys
from pyarrow import csv
csv.read_csv(sys.argv[1], read_options=csv.ReadOptions(skip_rows=int(sys.argv[2])))
"""
#: Prints seconds and peak memory (MB) of a check of generated rows.
_GENERATED = """
import resource, sys, time
from truefall.validate.benchmarks_long import check_generated
begin = time.perf_counter()
check_generated(int(sys.argv[1]))
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(time.perf_counter() - begin, peak)
"""


def _orbit() -> Orbit:
    from truefall.reference import Orbit

    return Orbit.from_elements(semilatus_rectum=10.0, eccentricity=0.3)


def _metadata(orbit: Orbit) -> dict[str, Any]:
    return {
        "name": "long", "system": "geometric", "gm": 1.0, "particle": "massive", "chart": "areal",
        "clock": "coordinate",
        "start": {
            "time": 0.0, "position": list(orbit.position), "velocity": list(orbit.velocity)
        },
        "budget": {"position": 1e-7, "velocity": 1e-8},
    }  # fmt: skip


class GeneratedRows:
    """Rows made when they are asked for, from the table with noise of 1e-9."""

    def __init__(self, count: int) -> None:
        from truefall.reference.table import build_table
        from truefall.validate.streaming.rows import Head

        orbit = _orbit()
        self.table: Table = build_table(orbit, 0.0, 1.0)
        series = ("time", "position", "velocity", "proper_time")
        self.head: Head = Head("generated", "long", count, series, _metadata(orbit))

    def block(self, first: int, last: int) -> Block:
        """Rows ``first`` to ``last``, the same whenever they are asked for."""
        from truefall.validate.streaming.rows import Block

        rows = np.arange(first, last, dtype=np.float64)
        times = 0.7 * rows
        position, velocity, clock = self.table.at(times)
        noise = 1e-9 * np.sin(rows * 1.618)
        return Block(
            {
                "time": times, "position": position + noise[:, None], "velocity": velocity,
                "proper_time": clock,
            }
        )  # fmt: skip


def check_generated(count: int) -> str:
    """The verdict on so many generated rows."""
    from truefall.validate.starts import find_start
    from truefall.validate.streaming.long_check import check_rows
    from truefall.validate.streaming.rows import first_row

    rows = GeneratedRows(count)
    result = check_rows(rows, find_start(first_row(rows), fit=False, stored=None))
    assert result is not None
    return result.verdict


def _write(path: Path, count: int, contiguous: bool) -> None:
    """An HDF5 set of generated rows in our own layout, or contiguous, written in parts."""
    import h5py

    from truefall.validate.formats.metadata import flatten

    rows = GeneratedRows(count)
    options: Mapping[str, Any] = {"chunks": None}
    if not contiguous:
        options = {
            "compression": "gzip",
            "compression_opts": 4,
            "shuffle": True,
            "fletcher32": True,
        }
    with h5py.File(path, "w", libver=("v108", "v110")) as file:
        group = file.create_group("trajectory/long")
        for key, value in flatten(rows.head.metadata).items():
            group.attrs[key] = np.bytes_(value.encode()) if isinstance(value, str) else value
        sets = {}
        for name in rows.head.series:
            inner = (3,) if name in ("position", "velocity") else ()
            more = dict(options) if contiguous else {**options, "chunks": (8192, *inner)}
            sets[name] = group.create_dataset(name, (count, *inner), "<f8", **more)
        for first in range(0, count, 1 << 17):
            last = min(first + (1 << 17), count)
            for name, values in rows.block(first, last).values.items():
                sets[name][first:last] = values


def _write_csv(path: Path, count: int) -> int:
    """The same as text; gives back the number of lines before the header."""
    from truefall.validate.formats.metadata import dump_toml

    rows = GeneratedRows(count)
    lines = [f"# {line}" for line in dump_toml(rows.head.metadata)]
    with path.open("w") as file:
        file.write("\n".join([*lines, "time,x,y,z,vx,vy,vz,proper_time"]) + "\n")
        for first in range(0, count, 1 << 17):
            values = rows.block(first, min(first + (1 << 17), count)).values
            table: npt.NDArray[np.float64] = np.column_stack(list(values.values()))
            file.writelines(",".join(map(repr, row)) + "\n" for row in table.tolist())
    return len(lines)


def _process(code: str, *words: str) -> tuple[float, float]:
    """Seconds and peak memory (MB) of a whole Python process, output thrown away."""
    wrapped = (
        "import resource, subprocess, sys\n"
        "subprocess.run([sys.executable, '-c', *sys.argv[1:]], stdout=subprocess.DEVNULL)\n"
        "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024)"
    )
    begin = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", wrapped, code, *words], capture_output=True, text=True, check=True
    )
    return time.perf_counter() - begin, float(done.stdout)


def _pair(
    mine: tuple[str, ...], other: tuple[str, ...], repeats: int
) -> tuple[float, float, float]:
    """Best seconds of both, taken in turn, and the peak memory of the first."""
    best = [float("inf"), float("inf")]
    peak = 0.0
    for _ in range(repeats):
        seconds, memory = _process(*mine)
        best[0], peak = min(best[0], seconds), max(peak, memory)
        best[1] = min(best[1], _process(*other)[0])
    return best[0], best[1], peak


def measure_long(rows: int = 10_000_000, generated: int = 100_000_000) -> dict[str, float]:
    """Figures of long files by name."""
    figures: dict[str, float] = {}
    with tempfile.TemporaryDirectory() as folder:
        for name, contiguous in (("HDF5, our layout", False), ("HDF5, contiguous", True)):
            path = Path(folder) / "long.h5"
            _write(path, rows, contiguous)
            check, read, peak = _pair((_CHECK, "check", str(path)), (_H5PY, str(path)), 3)
            label = f"{name}, {rows:,} rows"
            figures[f"{label}: check, s"] = check
            figures[f"{label}: h5py reading, s"] = read
            figures[f"{label}: check by reading"] = check / read
            figures[f"{label}: peak memory, MB"] = peak
            path.unlink()
        path = Path(folder) / "long.csv"
        lines = _write_csv(path, rows // 5)
        check, read, _ = _pair((_CHECK, "check", str(path)), (_ARROW, str(path), str(lines)), 3)
        label = f"CSV, {rows // 5:,} rows"
        figures[f"{label}: check, s"] = check
        figures[f"{label}: PyArrow reading, s"] = read
        figures[f"{label}: check by reading"] = check / read
    done = subprocess.run(
        [sys.executable, "-c", _GENERATED, str(generated)],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    seconds, peak = map(float, done.stdout.split())
    figures[f"{generated:,} generated rows: check, s"] = seconds
    figures[f"{generated:,} generated rows: peak memory, MB"] = peak
    return figures
