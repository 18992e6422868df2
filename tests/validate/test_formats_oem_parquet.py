"""OEM (CCSDS 502.0-B-3, from the project's notes of it) and Parquet."""

from __future__ import annotations

import builtins
import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from truefall.validate.errors import InputError
from truefall.validate.formats import (
    losses,
    read_trajectories,
    read_trajectory,
    write_trajectory,
)
from truefall.validate.trajectory import StoredReference, Trajectory

RNG = np.random.default_rng(4)
DECLARED: dict[str, Any] = {
    "system": "astronomical", "gm": 398600.4418, "particle": "massive", "chart": "harmonic",
    "clock": "coordinate",
}  # fmt: skip
SIDECAR = 'gm = 398600.4418\nparticle = "massive"\nchart = "harmonic"\nclock = "coordinate"\n'


def _run(times: Any, **changes: Any) -> Trajectory:
    n = len(times)
    run = Trajectory(
        path="run", name="probe: 7", time=np.array(times, dtype=float),
        position=RNG.normal(size=(n, 3)) * 7000, velocity=RNG.normal(size=(n, 3)) * 7,
        proper_time=None, coordinate_time=None, affine=None, metadata=DECLARED,
    )  # fmt: skip
    return replace(run, **changes)


def _oem(folder: Path, run: Trajectory) -> Path:
    (folder / "run.toml").write_text(SIDECAR)
    path = folder / "run.oem"
    write_trajectory(path, run, reproducible=True)
    return path


TIMES = [-86400.5, -1e-9, 0.0, 0.1, 1.0 / 3.0, 59.99999999999999, 86400.0, 7.3e8]


def test_oem_keeps_stamps_and_sixteen_digits(tmp_path: Path) -> None:
    """Stamps come back bit for bit, values within half a unit of the sixteenth digit."""
    run = _run(TIMES)
    again = read_trajectory(_oem(tmp_path, run))

    assert np.array_equal(again.time, run.time)
    assert again.quantisation.time < 1e-15
    for name in ("position", "velocity"):
        obtained, expected = getattr(again, name), getattr(run, name)
        quantum = getattr(again.quantisation, name)
        ulp = np.spacing(np.abs(expected))
        assert np.all(np.abs(obtained - expected) <= quantum + ulp / 2)
        assert np.all(quantum <= 0.5e-15 * np.abs(expected) * 1.0000001)
        assert np.all(quantum > 0)
    assert again.metadata["system"] == "astronomical"


def test_oem_syntax(tmp_path: Path) -> None:
    """Keywords in order, lines of printable ASCII, numbers of 16 digits, no claimed time scale."""
    lines = _oem(tmp_path, _run(TIMES)).read_text("ascii").splitlines()
    keys = [line.split(" = ")[0] for line in lines[:14] if not line.startswith("COMMENT")]

    assert keys == [
        "CCSDS_OEM_VERS", "CREATION_DATE", "ORIGINATOR", "META_START", "OBJECT_NAME",
        "OBJECT_ID", "CENTER_NAME", "REF_FRAME", "TIME_SYSTEM", "START_TIME", "STOP_TIME",
        "META_STOP",
    ]  # fmt: skip
    assert lines[1].startswith("COMMENT")
    assert "OBJECT_NAME = PROBE 7" in lines
    assert all(len(line) <= 254 and line.isprintable() for line in lines)
    entry = r"-?\d\.\d{15}e[+-]\d+"
    for line in lines[14:]:
        assert re.fullmatch(rf"\d{{4}}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d+( {entry}){{6}}", line)
    assert lines[16].startswith("2000-01-01T00:00:00.000000000000000 ")
    assert lines[14].startswith("1999-12-30T23:59:59.500000000000000 ")


def test_oem_from_si_and_backwards(tmp_path: Path) -> None:
    """Metres become kilometres, rounded once; a backward run is turned round."""
    run = _run([3.0, 2.0, 1.0])
    metres = replace(
        run, position=run.position * 1000, velocity=run.velocity * 1000,
        metadata={**DECLARED, "system": "SI"},
    )  # fmt: skip
    again = read_trajectory(_oem(tmp_path, metres))

    assert again.time.tolist() == [1.0, 2.0, 3.0]
    assert again.position == pytest.approx(run.position[::-1], rel=1e-15)


def test_oem_cannot_hold(tmp_path: Path) -> None:
    """Geometric units, positions alone, years past 9999: a sentence and no file."""
    out = tmp_path / "out.oem"
    for run, sentence in (
        (_run([0.0, 1.0], metadata={**DECLARED, "system": "geometric"}), "in kilometres"),
        (_run([0.0, 1.0], velocity=None), "needs velocities"),
        (_run([0.0, 1e15]), "outside the years 1 to 9999"),
        (_run([0.0, 1e-300]), "more decimals than a line"),
    ):
        with pytest.raises(InputError, match=sentence):
            write_trajectory(out, run)

        assert list(tmp_path.iterdir()) == []


ROW = "2000-01-01T00:00:00 7000.0 0.0 0.0 0.0 7.5 0.0"


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        ("CCSDS_OEM_VERS", "CCSDS_OPM_VERS", "does not begin with CCSDS_OEM_VERS"),
        ("META_STOP", "META_END", "exactly one segment"),
        ("META_STOP", "META_STOP\nMETA_START\nMETA_STOP", "exactly one segment"),
        ("OBJECT_ID = UNKNOWN\n", "", "lacks OBJECT_ID"),
        ("OBJECT_ID = UNKNOWN\n", "OBJECT_ID = A\nOBJECT_ID = B\n", "OBJECT_ID twice"),
        (ROW, "", "no ephemeris lines"),
        (ROW, ROW + " 1.0", "has 8 entries"),
        (ROW, ROW.replace("7.5", "7.5D0"), "'7.5D0' is no number"),
        (ROW, ROW.replace("7.5", "nan"), "'nan' is no number"),
        (ROW, ROW.replace("7.5", "."), "'.' is no number"),
        (ROW, ROW.replace("2000-01-01", "2000-13-01"), "is no date"),
        (ROW, ROW.replace("2000-01-01", "2001-366"), "is no date"),
        (ROW, ROW.replace("T00:", "T24:"), "is no date"),
        (ROW, ROW.replace("T00", " 00"), "has 8 entries|is no epoch"),
        (ROW, ROW.replace("2000-01-01", "01/01/2000"), "is no epoch"),
        (ROW, ROW + "\n" + ROW, "row 2 repeats the time"),
        (ROW, ROW.replace("7.5", "7.5é"), "not ASCII"),
    ],
)
def test_bad_oem(tmp_path: Path, old: str, new: str, sentence: str) -> None:
    """One sentence naming the line."""
    path = _oem(tmp_path, _run([0.0]))
    text = re.sub(r"2000-01-01T.* .*e.*", ROW, path.read_text())
    path.write_text(text.replace(old, new))
    with pytest.raises(InputError, match=sentence) as caught:
        read_trajectories(path)

    assert str(caught.value).isprintable()


def test_oem_of_others(tmp_path: Path) -> None:
    """Day-of-year dates, accelerations, Z, comments, covariance blocks, any line end."""
    path = _oem(tmp_path, _run([0.0]))
    head = path.read_text().split("META_STOP")[0]
    rows = [
        "COMMENT for people", "2000-001T00:01:00.25Z 1 2 3 4 5 6",
        "2000-002T00:00:00 1.5 2 3 4 5 6 7 8 9", "COVARIANCE_START", "EPOCH = never read",
        "COVARIANCE_STOP",
    ]  # fmt: skip
    path.write_bytes((head + "META_STOP\n\n" + "\n".join(rows)).replace("\n", "\r\n").encode())
    run = read_trajectory(path)

    assert run.time.tolist() == [60.25, 86400.0]
    assert run.position[:, 0].tolist() == [1.0, 1.5]


def test_losses_are_told(tmp_path: Path) -> None:
    """Every format says what it cannot keep; HDF5 keeps all."""
    words = StoredReference({"position_bound": np.zeros((2, 3))})
    run = _run([2.0, 1.0], proper_time=np.array([2.0, 1.0]), stored=words)

    assert losses(tmp_path / "a.h5", run) == []
    assert losses(tmp_path / "a.csv", replace(run, stored=None)) == []
    (bounds,) = losses(tmp_path / "a.csv", run)
    assert "proven bounds" in bounds
    told = " ".join(losses(tmp_path / "a.oem", run))
    for word in ("proper_time", "16 digits", "a.toml", "reversed", "proven bounds"):
        assert word in told


def _table(**changes: Any) -> dict[str, Any]:
    columns: dict[str, Any] = {"time": [0.0, 1.0], "x": [1.0, 2.0], "y": [0.0, 0.1], "z": [0.0] * 2}
    return {k: v for k, v in {**columns, **changes}.items() if v is not None}


def _parquet(folder: Path, columns: dict[str, Any], toml: str = "") -> Path:
    path = folder / "run.parquet"
    table = pa.table(columns)
    if toml:
        table = table.replace_schema_metadata({"truefall": toml})
    pq.write_table(table, path)
    (folder / "run.toml").write_text('system = "astronomical"\n' + SIDECAR)
    return path


def test_parquet_of_others(tmp_path: Path) -> None:
    """Plain double and float columns; float carries half an ulp."""
    column = pa.array(np.array([1.0, 8.0], dtype="f4"))
    run = read_trajectory(_parquet(tmp_path, _table(x=column)))

    assert run.position[:, 0].tolist() == [1.0, 8.0]
    assert run.quantisation.position[:, 0].tolist() == [2.0**-24, 2.0**-21]
    assert not run.quantisation.position[:, 1].any()


@pytest.mark.parametrize(
    ("changes", "toml", "sentence"),
    [
        ({"x": [1.0, None]}, "", "'x' has empty entries"),
        ({"x": ["1", "2"]}, "", "'x' has type string"),
        ({"x": [1, 2]}, "", "'x' has type int64"),
        ({"x": [[1.0], [2.0]]}, "", "'x' has type list"),
        ({"x": [1.0, float("nan")]}, "", "row 2 of position is nan"),
        ({"x": None}, "", "column x missing"),
        ({"w": [1.0, 2.0]}, "", "unknown column 'w'"),
        ({}, "chart: areal", "not TOML"),
        ({}, "chart = 'flat'", "chart is 'flat'; allowed"),
    ],
)
def test_bad_parquet(tmp_path: Path, changes: dict[str, Any], toml: str, sentence: str) -> None:
    """One sentence naming the column."""
    path = _parquet(tmp_path, _table(**changes), toml)
    with pytest.raises(InputError, match=sentence):
        read_trajectories(path)


def test_parquet_rows_are_counted_before_they_are_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Equal values compress to nothing, so the limit is on numbers, not on bytes."""
    from truefall.validate.formats import parquet_format

    n = 1_000_000
    path = _parquet(tmp_path, {name: np.zeros(n) for name in ("time", "x", "y", "z")})
    assert path.stat().st_size < 20_000
    monkeypatch.setattr(parquet_format, "_MAX_NUMBERS", n)
    with pytest.raises(InputError, match="claims 1000000 rows"):
        read_trajectories(path)


@pytest.mark.parametrize("data", [b"", b"time,x,y,z\n", b"PAR1" + bytes(20) + b"PAR1"])
def test_what_is_no_parquet(tmp_path: Path, data: bytes) -> None:
    """Text and damaged files."""
    path = tmp_path / "run.parquet"
    path.write_bytes(data)
    with pytest.raises(InputError, match="not a readable Parquet file"):
        read_trajectories(path)


def test_without_pyarrow(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The optional package is named, with how to get it and what to use instead."""
    path = _parquet(tmp_path, _table())
    whole = builtins.__import__

    def broken(name: str, *args: Any) -> Any:
        if name.startswith("pyarrow"):
            raise ImportError(name)
        return whole(name, *args)

    monkeypatch.setattr(builtins, "__import__", broken)
    with pytest.raises(InputError, match=r"need pyarrow.*truefall\[parquet\].*\.csv"):
        read_trajectories(path)
