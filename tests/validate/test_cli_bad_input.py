"""Input that cannot be used: one sentence with file and place, status 4, nothing left behind."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Run = Callable[..., Any]

HEADER = """# system = "geometric"
# gm = 1.0
# particle = "massive"
# chart = "areal"
# clock = "coordinate"
time,x,y,z,vx,vy,vz
"""
ROWS = ["0.0,10.0,0.0,0.0,0.0,0.33,0.0", "1.0,9.9,0.3,0.0,-0.1,0.33,0.0",
        "2.0,9.8,0.6,0.0,-0.1,0.32,0.0"]  # fmt: skip
ORBIT = """system = "geometric"
gm = 1.0
particle = "massive"
chart = "areal"
clock = "coordinate"
[start]
position = [10.0, 0.0, 0.0]
velocity = [0.0, 0.33, 0.0]
[samples]
times = [0.0, 1.0, 2.0]
"""


def table(*rows: str, header: str = HEADER) -> str:
    return header + "\n".join(rows) + "\n"


def without(line: str, text: str) -> str:
    assert line in text
    return text.replace(line, "")


def swap(old: str, new: str, text: str = ORBIT) -> str:
    assert old in text
    return text.replace(old, new)


#: A trajectory as text or bytes, and what the sentence must say.
TRAJECTORIES: dict[str, tuple[str | bytes, str]] = {
    "empty": (b"", "empty|no header|header"),
    "header only": (table(), "no rows|row"),
    "binary": (bytes(range(256)) * 20, "UTF-8|text"),
    "zip": (b"PK\x03\x04" + bytes(200), "text|header|column"),
    "no gm": (table(*ROWS, header=without("# gm = 1.0\n", HEADER)), "gm missing"),
    "no chart": (table(*ROWS, header=without('# chart = "areal"\n', HEADER)), "chart missing"),
    "no unit": (table(*ROWS, header=without('# system = "geometric"\n', HEADER)),
                "system missing"),
    "unknown chart": (table(*ROWS, header=swap('"areal"', '"spherical"', HEADER)),
                      "chart is 'spherical'; allowed are"),
    "gm in geometric": (table(*ROWS, header=swap("gm = 1.0", "gm = 2.0", HEADER)),
                        "geometric units mean gm = 1"),
    "NaN": (table(ROWS[0], ROWS[1].replace("9.9", "nan"), ROWS[2]), "line 8"),
    "infinity": (table(ROWS[0], ROWS[1].replace("9.9", "inf"), ROWS[2]), "line 8"),
    "overflow": (table(ROWS[0], ROWS[1].replace("9.9", "1e999"), ROWS[2]), "line 8"),
    "text": (table(ROWS[0], ROWS[1].replace("9.9", "far"), ROWS[2]), "line 8"),
    "empty cell": (table(ROWS[0], ROWS[1].replace("9.9", ""), ROWS[2]), "line 8"),
    "Fortran exponent": (table(ROWS[0], ROWS[1].replace("9.9", "9.9D+00"), ROWS[2]), "line 8"),
    "underscore": (table(ROWS[0], ROWS[1].replace("9.9", "9_9"), ROWS[2]), "line 8"),
    "too many cells": (table(ROWS[0], ROWS[1] + ",1.0", ROWS[2]), "line 8"),
    "too few cells": (table(ROWS[0], ROWS[1].rpartition(",")[0], ROWS[2]), "line 8"),
    "duplicate time": (table(ROWS[0], ROWS[1], ROWS[1]), "row 3"),
    "turning time": (table(ROWS[1], ROWS[2], ROWS[0]), "row 3"),
    "falling then rising": (table(ROWS[2], ROWS[0], ROWS[1]), "row 3"),
    "no time column": (table(*ROWS, header=swap("time,x", "epoch,x", HEADER)), "time|epoch"),
    "column twice": (table(*ROWS, header=swap("x,y,z", "x,x,z", HEADER)), "'?x'?"),
    "half a velocity": (
        table("0.0,10.0,0.0,0.0,0.1", header=swap(",vx,vy,vz", ",vx", HEADER)), "vy"),
    "superluminal": (table("0.0,10.0,0.0,0.0,0.0,1.33,0.0", ROWS[1]), "light"),
    "inside": (table("0.0,1.5,0.0,0.0,0.0,0.1,0.0", ROWS[1]), "horizon"),
    "no velocities": (table("0.0,10.0,0.0,0.0", "1.0,9.9,0.3,0.0",
                            header=swap(",vx,vy,vz", "", HEADER)), "--fit"),
    "bad header value": (table(*ROWS, header=swap("gm = 1.0", "gm = one", HEADER)), "line 2"),
}  # fmt: skip

ORBITS: dict[str, tuple[str | bytes, str]] = {
    "empty": (b"", "missing"),
    "binary": (bytes(range(128, 256)), "UTF-8"),
    "not TOML": ("system = geometric", "TOML.*line 1"),
    "no gm": (without("gm = 1.0\n", ORBIT), "gm missing"),
    "no chart": (without('chart = "areal"\n', ORBIT), "chart missing"),
    "no unit": (without('system = "geometric"\n', ORBIT), "system missing"),
    "no clock": (without('clock = "coordinate"\n', ORBIT), "clock missing"),
    "no start": (without("velocity = [0.0, 0.33, 0.0]\n", ORBIT), r"start.*velocity"),
    "no samples": (without("[samples]\ntimes = [0.0, 1.0, 2.0]\n", ORBIT), r"\[samples\] missing"),
    "misspelt key": (swap("particle", "particel"), "did you mean 'particle'"),
    "misspelt table": (swap("[start]", "[strat]"), "did you mean 'start'"),
    "unknown unit": (swap('"geometric"', '"imperial"'), "system is 'imperial'; allowed are"),
    "negative gm": (swap('"geometric"\ngm = 1.0', '"SI"\ngm = -1.0'), "gm must be positive"),
    "gm as text": (swap("gm = 1.0", 'gm = "1.0"'), "gm must be a number"),
    "gm true": (swap("gm = 1.0", "gm = true"), "gm must be a number"),
    "NaN": (swap("10.0", "nan"), r"start\.position\[0\] must be a finite number"),
    "two components": (swap("10.0, 0.0, 0.0", "10.0, 0.0"), "three numbers"),
    "text": (swap("10.0, 0.0, 0.0", '"ten", 0.0, 0.0'), r"start\.position\[0\] must be a number"),
    "superluminal": (swap("0.33", "1.5"), "start.velocity.*light"),
    "light speed": (swap("[0.0, 0.33, 0.0]", "[0.8, 0.0, 0.0]"), "start.velocity.*light"),
    "inside": (swap("10.0, 0.0, 0.0", "1.5, 0.0, 0.0"), "start.position.*horizon"),
    "inside isotropic": (swap("10.0, 0.0, 0.0", "0.4, 0.0, 0.0",
                              swap('"areal"', '"isotropic"')), "start.position.*horizon"),
    "at the origin": (swap("10.0, 0.0, 0.0", "0.0, 0.0, 0.0", swap('"areal"', '"kerr-schild"')),
                      "start.position"),
    "light by proper time": (
        swap('"coordinate"', '"proper"', swap('"massive"', '"light"')), "light has no proper time"),
    "light without direction": (
        swap("[0.0, 0.33, 0.0]", "[0.0, 0.0, 0.0]", swap('"massive"', '"light"')),
        "start.velocity"),
    "ingoing light": (
        swap("[0.0, 0.33, 0.0]", "[-1.0, 0.0, 0.0]",
             swap('"areal"', '"eddington-finkelstein"', swap('"massive"', '"light"'))),
        "start.velocity"),
    "elements too tight": (
        swap("position = [10.0, 0.0, 0.0]\nvelocity = [0.0, 0.33, 0.0]",
             "semilatus_rectum = 6.5\neccentricity = 0.5"), r"semilatus_rectum"),
    "elements elsewhere": (
        swap("position = [10.0, 0.0, 0.0]\nvelocity = [0.0, 0.33, 0.0]",
             "semilatus_rectum = 20.0\neccentricity = 0.5", swap('"areal"', '"harmonic"')),
        "elements are areal"),
    "duplicate times": (swap("1.0, 2.0]", "1.0, 1.0]"), "strictly increasing"),
    "turning times": (swap("1.0, 2.0]", "1.0, 0.5]"), "strictly increasing"),
    "NaN time": (swap("1.0, 2.0]", "1.0, nan]"), r"samples\.times\[2\]"),
    "one sample of a range": (
        swap("times = [0.0, 1.0, 2.0]", "first = 0.0\nlast = 1.0\ncount = 1"), "count"),
    "two ways": (swap("times = [0.0", "count = 3\ntimes = [0.0"), "exactly one"),
    "missing times file": (swap("times = [0.0, 1.0, 2.0]", 'from_file = "none.csv"'), "none.csv"),
    "past the end": (
        swap("10.0, 0.0, 0.0", "1.5, 0.0, 0.0",
             swap("[0.0, 1.0, 2.0]", "[0.0, 1.0, 50.0]",
                  swap("[0.0, 0.33", "[-0.5, 0.1", swap('"areal"', '"kerr-schild"')))),
        r"ends at r = 0 at time [0-9.]+, and sample 3 asks for time 50\.0.*--truncate"),
}  # fmt: skip


def write(path: Path, content: str | bytes) -> Path:
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def one_sentence(text: str) -> str:
    """The message on one line; a page of the terminal may fold it."""
    return " ".join(text.split())


@pytest.mark.parametrize("what", TRAJECTORIES)
def test_check_refuses(run: Run, tmp_path: Path, what: str) -> None:
    content, sentence = TRAJECTORIES[what]
    path = write(tmp_path / "run.csv", content)
    done = run("check", path, "--budget", "position=1e-3")
    assert done.status == 4, done.text
    said = one_sentence(done.text)
    assert "run.csv" in said
    assert re.search(sentence, said), said
    assert len(said) < 500 + 2 * len(str(path))
    assert [p.name for p in tmp_path.iterdir()] == ["run.csv"]


@pytest.mark.parametrize("what", TRAJECTORIES)
def test_convert_refuses_or_copies_and_leaves_no_half(run: Run, tmp_path: Path, what: str) -> None:
    path = write(tmp_path / "run.csv", TRAJECTORIES[what][0])
    done = run("convert", path, tmp_path / "copy.npz")
    # starts that are no orbit and files without velocities are trajectories all the same
    readable = what in ("superluminal", "inside", "no velocities")
    assert done.status == (0 if readable else 4), done.text
    left = {p.name for p in tmp_path.iterdir()}
    assert left == ({"run.csv", "copy.npz"} if readable else {"run.csv"})


@pytest.mark.parametrize("suffix", [".csv", ".h5", ".npz", ".parquet", ".oem"])
@pytest.mark.parametrize("content", [b"", b"\x00\x01\x02" * 300, b"hello\n"])
def test_rubbish_in_every_format(run: Run, tmp_path: Path, suffix: str, content: bytes) -> None:
    path = write(tmp_path / f"run{suffix}", content)
    done = run("check", path)
    assert done.status == 4, done.text
    assert path.name in done.text
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_folders_and_files_that_are_not_there(run: Run, tmp_path: Path) -> None:
    (tmp_path / "folder.csv").mkdir()
    for path, words in ((tmp_path / "folder.csv", "is a folder"), (tmp_path / "no.h5", "no such")):
        done = run("check", path)
        assert done.status == 4
        assert words in one_sentence(done.text)
    assert run("make", tmp_path / "no.toml", "--out", tmp_path / "a.csv").status == 4
    assert run("check", tmp_path / "no.csv", "--orbit", tmp_path / "no.toml").status == 4


@pytest.mark.parametrize("what", ORBITS)
def test_make_refuses_and_writes_nothing(run: Run, tmp_path: Path, what: str) -> None:
    content, sentence = ORBITS[what]
    path = write(tmp_path / "probe.toml", content)
    done = run("make", path, "--out", tmp_path / "out.h5")
    assert done.status == 4, done.text
    assert done.out == ""
    assert done.err.count("\n") == 1, done.err
    assert "probe.toml" in done.err or "none.csv" in done.err
    assert re.search(sentence, done.err), done.err
    assert [p.name for p in tmp_path.iterdir()] == ["probe.toml"]


@pytest.mark.parametrize("target", ["no/such/folder/out.csv", "folder.csv"])
def test_make_refuses_a_place_where_it_cannot_write(run: Run, tmp_path: Path, target: str) -> None:
    (tmp_path / "folder.csv").mkdir()
    path = write(tmp_path / "probe.toml", ORBIT)
    done = run("make", path, "--out", tmp_path / target)
    assert done.status == 4
    assert done.err.count("\n") == 1
    assert sorted(p.name for p in tmp_path.iterdir()) == ["folder.csv", "probe.toml"]


def test_a_report_where_a_file_is_is_refused_before_judging(run: Run, tmp_path: Path) -> None:
    path = write(tmp_path / "run.csv", table(*ROWS))
    done = run("check", path, "--report", path)
    assert done.status == 4
    assert done.out == ""
    assert "is a file; name a folder" in done.err


def test_an_older_result_survives_a_refusal(run: Run, tmp_path: Path) -> None:
    path = write(tmp_path / "probe.toml", ORBITS["past the end"][0])
    old = write(tmp_path / "out.csv", "precious\n")
    assert run("make", path, "--out", old).status == 4
    assert old.read_text() == "precious\n"


def test_a_broken_sidecar_is_named(run: Run, tmp_path: Path) -> None:
    path = write(tmp_path / "run.csv", table(*ROWS))
    write(tmp_path / "run.toml", "budget = [")
    done = run("check", path)
    assert done.status == 4
    assert "run.toml" in done.text


def test_a_budget_that_is_none_is_refused_by_key(run: Run, tmp_path: Path) -> None:
    path = write(tmp_path / "run.csv", table(*ROWS))
    for budget, words in (
        ("postion = 1e-6", "did you mean 'position'"),
        ("position = 0.0", "positive"),
        ('position = "1 mm"', "geometric units have no mm"),
        ('energy = "1 mm"', "energy"),
    ):
        write(tmp_path / "run.toml", f"[budget]\n{budget}\n")
        done = run("check", path)
        assert done.status == 4, done.text
        assert words in one_sentence(done.text)
