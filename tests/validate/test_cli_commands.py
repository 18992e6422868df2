"""The command line: what its commands and options do."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Run = Callable[..., Any]
Write = Callable[..., Path]


def test_options_override_what_the_file_says(run: Run, exact: Path) -> None:
    done = run("check", exact, "--chart", "harmonic", "--json")
    assert done.status == 1
    assert json.loads(done.out)["files"][0]["orbit"]["periapsis"] > 10.5
    assert run("check", exact, "--clock", "proper").status == 1
    assert run("check", exact, "--start-time", "1.0").status == 1
    assert run("check", exact, "--particle", "light").status == 1


def test_budgets_by_comma_and_by_repetition(run: Run, exact: Path) -> None:
    several = run("check", exact, "--budget", "velocity=1e-9,energy=1e-9", "--json")
    repeated = run("check", exact, "--budget", "velocity=1e-9", "--budget", "energy=1e-9", "--json")
    found = {j["quantity"] for j in json.loads(several.out)["files"][0]["judged"]}
    assert found == {"position", "velocity", "energy"}
    assert several.out == repeated.out


def test_report_and_explanation(spoil: Write, run: Run, exact: Path, tmp_path: Path) -> None:
    bad = spoil(exact, 20, 1, 1e-6)
    folder = tmp_path / "report"
    done = run("check", bad, "--budget", "position=1e-9", "--explain", "--report", folder)
    assert done.status == 1
    assert "residual" in done.out
    names = {p.suffix for p in folder.iterdir()}
    assert {".txt", ".json", ".png"} <= names
    assert json.loads((folder / "report.json").read_text())["verdict"] == "fail"


def test_against_a_stored_set(spoil: Write, run: Run, exact: Path, tmp_path: Path) -> None:
    stored = tmp_path / "stored.h5"
    assert run("make", exact.with_suffix(".toml"), "--out", stored, "--certified").status == 0
    assert run("check", exact, "--against", stored).status == 0
    bad = spoil(exact, 20, 1, 1e-6)
    assert run("check", bad, "--against", stored, "--budget", "position=1e-9").status == 1


@pytest.mark.parametrize("suffix", [".h5", ".npz", ".parquet", ".csv"])
def test_convert_keeps_the_verdict(run: Run, exact: Path, tmp_path: Path, suffix: str) -> None:
    if suffix == ".parquet":
        pytest.importorskip("pyarrow", reason="the optional extra 'parquet' is not installed")
    out = tmp_path / f"copy{suffix}"
    done = run("convert", exact, out)
    assert done.status == 0
    assert "41 rows" in done.err
    assert run("check", out, "--budget", "position=1e-12").status == 0


def test_convert_takes_one_of_several_and_says_what_is_lost(
    run: Run, exact: Path, tmp_path: Path
) -> None:
    import h5py

    both = tmp_path / "both.h5"
    assert run("make", exact.with_suffix(".toml"), "--out", both, "--certified").status == 0
    with h5py.File(both, "r+") as file:
        file.copy("trajectory/probe", file["trajectory"], name="twin")
    out = tmp_path / "one.csv"
    done = run("convert", both, out)
    assert done.status == 4
    assert "probe" in done.err
    assert "twin" in done.err
    assert not out.exists()
    done = run("convert", both, out, "--trajectory", "twin")
    assert done.status == 0
    assert "bounds" in done.err
    assert run("convert", both, out, "--trajectory", "third").status == 4


def test_cases_as_a_table_as_a_story_and_as_json(run: Run) -> None:
    listed = run("cases")
    assert listed.status == 0
    rows = json.loads(run("cases", "--json").out)
    assert len(rows) >= 28
    assert all(row["name"] in listed.out for row in rows)
    told = run("cases", "--show", rows[0]["name"])
    assert rows[0]["title"] in told.out
    assert "[start]" in told.out
    (alone,) = json.loads(run("cases", "--show", rows[0]["name"], "--json").out)
    assert alone == rows[0]


def test_a_case_shown_as_an_orbit_file_makes_the_same_trajectory(run: Run, tmp_path: Path) -> None:
    (alone,) = json.loads(run("cases", "--show", "light-critical", "--json").out)
    (tmp_path / "light-critical.toml").write_text(alone["orbit_file"])
    outs = [tmp_path / "a.csv", tmp_path / "b.csv"]
    assert run("make", tmp_path / "light-critical.toml", "--out", outs[0]).status == 0
    assert run("make", "--case", "light-critical", "--out", outs[1]).status == 0
    assert outs[0].read_bytes() == outs[1].read_bytes()


def test_make_writes_every_case_into_a_folder(run, tmp_path, monkeypatch):
    """Only two cases here, to be quick: a set each, which inspect finds in order."""
    from truefall.validate import cases
    from truefall.validate.inspection import inspect_set

    some = [cases.case("plunge-kerr-schild"), cases.case("light-circular")]
    monkeypatch.setattr(cases, "load_cases", lambda: some)
    folder = tmp_path / "sets"
    done = run("make", "--all-cases", "--out", str(folder), "--certified")

    assert done.status == 0
    assert sorted(p.name for p in folder.iterdir()) == [f"{c.name}.h5" for c in reversed(some)]
    for path in folder.iterdir():
        found = inspect_set(path, verify=5)
        assert found.conforms
        assert "azimuth" in found.trajectories[0]["series"]
    (tmp_path / "file").write_text("")
    assert run("make", "--all-cases", "--out", str(tmp_path / "file")).status == 4
    assert run("make", "--all-cases", "--case", "x", "--out", str(folder)).status == 2


def test_two_runs_of_one_orbit_tell_the_order_of_the_step(run: Run, tmp_path: Path) -> None:
    """Runge-Kutta at a step and at half of it: fourth order, told with either file."""
    import numpy as np

    from truefall.integrators import propagate

    times = np.linspace(0.0, 1000.0, 401)
    start, speed = (12.0, 0.0, 0.0), (0.0, 0.3, 0.0)
    paths = []
    for name, step in (("coarse", 2.0), ("fine", 1.0)):
        done = propagate("areal", start, speed, times, method="runge-kutta-4", step=step)
        rows = np.column_stack([done.time, done.position, done.velocity])
        lines = [",".join(map(repr, row)) for row in rows.tolist()]
        head = ['# system = "geometric"', "# gm = 1.0", '# particle = "massive"',
                '# chart = "areal"', '# clock = "coordinate"', "time,x,y,z,vx,vy,vz"]  # fmt: skip
        paths.append(tmp_path / f"{name}.csv")
        paths[-1].write_text("\n".join([*head, *lines]) + "\n")
    done = run("check", *paths, "--budget", "position=1e-9", "--json")
    files = json.loads(done.out)["files"]

    assert done.status == 1
    for file in files:
        finding = file["findings"][0]
        assert finding["cause"] == "step-too-large"
        assert finding["parameters"]["order"]["value"] == pytest.approx(4.0, abs=0.3)
