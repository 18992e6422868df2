"""Nights interrupted at every instant that matters: none corrupt, none lost, none twice."""

from __future__ import annotations

import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import nightly_parts as parts
import pytest

from truefall.validate.errors import InputError
from truefall.validate.nightly.night_file import nights_in, read_night

House = parts.House


@pytest.fixture
def house(tmp_path: Path) -> House:
    return House(tmp_path / "suite")


# interrupted -----------------------------------------------------------------------------------

KILLER = """
import importlib.util, os, signal, sys
from pathlib import Path
import truefall.validate.nightly.run as run
import truefall.validate.nightly.night_file as night_file
import truefall.validate.nightly.pages as pages
import truefall.validate.nightly.trends as trends
from truefall.validate.nightly.suite import read_suite

spec = importlib.util.spec_from_file_location("nightly_parts", sys.argv[1])
parts = importlib.util.module_from_spec(spec)
spec.loader.exec_module(parts)
where, suite, out = sys.argv[2], Path(sys.argv[3]), Path(sys.argv[4])

def die(*_, **__):
    os.kill(os.getpid(), signal.SIGKILL)

def after(function):
    def wrapped(*a, **k):
        function(*a, **k)
        die()
    return wrapped

def half_written(self, *_):
    self._file.flush()
    die()

if where == "after a result":
    night_file.NightWriter.add = after(night_file.NightWriter.add)
elif where == "half written":
    night_file.NightWriter._close = half_written
elif where == "before it is a night":
    night_file.os.link = die
elif where == "as soon as it is a night":
    night_file.os.link = after(os.link)
elif where == "inside the database":
    trends.Trends._forget = after(trends.Trends._forget)
elif where == "after the database":
    trends.Trends.add = after(trends.Trends.add)
elif where == "while pages are written":
    pages.write_pages = die
elif where == "while the folder is put in place":
    run.shutil.copytree = die
run.run_night(read_suite(suite), out, workers=parts.ThreadWorkers())
"""

PLACES = {
    "after a result": False, "half written": False, "before it is a night": False,
    "as soon as it is a night": True, "inside the database": True, "after the database": True,
    "while pages are written": True, "while the folder is put in place": True,
}  # fmt: skip


@pytest.mark.parametrize("where", PLACES)
def test_killed_at_any_instant_and_run_again_at_once(
    house: House, tmp_path: Path, where: str
) -> None:
    house.night()
    script = tmp_path / "killer.py"
    script.write_text(KILLER)
    shared = Path(__file__).with_name("nightly_parts.py")
    done = subprocess.run(
        [sys.executable, script, shared, where, house.suite, house.out], capture_output=True
    )
    assert done.returncode == -signal.SIGKILL, done.stderr.decode()
    complete = PLACES[where]
    assert nights_in(house.out / "nights") == ([1, 2] if complete else [1])
    night = house.night()
    count = 3 if complete else 2
    assert (night.number, night.previous, night.alarms) == (count, count - 1, ())
    assert nights_in(house.out / "nights") == list(range(1, count + 1))
    files = sorted(p.name for p in (house.out / "nights").iterdir())
    assert files == [f"night-{n:05d}.h5" for n in range(1, count + 1)]  # no leftovers
    for number in range(1, count + 1):
        assert read_night(house.file(number)).number == number
    with sqlite3.connect(house.out / "trends.sqlite") as base:
        rows = base.execute("SELECT night, key FROM figures ORDER BY night").fetchall()
    base.close()
    assert sorted(p.name for p in (house.out / "latest").iterdir()) == sorted(
        p.name for p in (house.out / f"report-{count:05d}").iterdir()
    )
    assert f"night {count}" in (house.out / "latest" / "index.html").read_text()
    assert rows == [(n, "it/circle") for n in range(1, count + 1)]


def test_a_failing_night_leaves_nothing(house: House, monkeypatch: pytest.MonkeyPatch) -> None:
    import truefall.validate.nightly.run as module

    def no(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(module, "_compare", no)
    with pytest.raises(KeyboardInterrupt):
        house.night()
    assert list((house.out / "nights").iterdir()) == []


def test_two_nights_at_once_are_refused(house: House) -> None:
    import truefall.validate.nightly.run as module

    house.out.mkdir()
    with module._locked(house.out), pytest.raises(InputError, match="another night is running"):
        house.night()
    assert house.night().number == 1
