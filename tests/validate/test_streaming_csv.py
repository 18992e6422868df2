"""Long CSV files: the same numbers and the same digits as the reader of short files finds."""

from __future__ import annotations

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate import formats
from truefall.validate.check import check_file
from truefall.validate.formats import csv_format, long_rows
from truefall.validate.formats.text_digits import file_quanta
from truefall.validate.streaming import csv_rows
from truefall.validate.streaming.csv_rows import CsvRows

pytest.importorskip("pyarrow", reason="long CSV files need the extra truefall[parquet]")

HEAD = """# system = "geometric"
# gm = 1.0
# particle = "massive"
# chart = "areal"
# clock = "coordinate"
"""
NAMES = ["time", "x", "y", "z", "vx", "vy", "vz"]


@pytest.fixture(autouse=True)
def small_parts(monkeypatch):
    """Every file is long, and is cut into many parts."""
    monkeypatch.setattr(formats, "_LONG_BYTES", 0)
    monkeypatch.setattr(csv_rows, "_BYTES", 5000)


@pytest.fixture(scope="module")
def states():
    """A few hundred exact states, as columns."""
    orbit = Orbit(position=(10.0, 0, 0), velocity=(0, 0.34, 0.02))
    found = orbit.at(np.arange(0.0, 300.0, 0.75))
    return np.column_stack([found.time, found.position, found.velocity])


def written(path, states, formatted, time=repr, end="\n"):
    """A CSV file whose numbers are written by ``formatted`` and time stamps by ``time``."""
    lines = [",".join([time(row[0]), *map(formatted, row[1:])]) for row in states.tolist()]
    path.write_bytes((HEAD.replace("\n", end) + end.join([",".join(NAMES), *lines, ""])).encode())
    return path


FORMS = {
    "shortest": repr,
    "nine decimals": "{:.9f}".format,
    "twelve digits": "{:.11e}".format,
    "seventeen digits": "{:.16e}".format,
    "general, eight digits": "{:.8g}".format,
    "rounded, zeros dropped": lambda v: repr(round(v, 7)),
    "padded": "{:.20f}".format,
    "sixteen": "{:.15e}".format,
    "capital exponents": "{:.10E}".format,
}
STAMPS = {
    "shortest": repr,
    "two decimals": "{:.2f}".format,
    "five decimals": "{:.5f}".format,
    "five digits": "{:.5e}".format,
    "off the grid": lambda t: f"{t + 0.003 * np.sin(t):.4f}",
}


@pytest.mark.parametrize("stamps", STAMPS)
@pytest.mark.parametrize("form", FORMS)
def test_numbers_and_digits_are_those_of_the_reader_of_short_files(tmp_path, states, form, stamps):
    """Bit for bit, for every way to write numbers that a printf knows."""
    path = written(tmp_path / "rows.csv", states, FORMS[form], STAMPS[stamps])
    _, short = csv_format.read(path)
    with long_rows(path) as (rows,):
        assert isinstance(rows, CsvRows)
        block = rows.block(0, len(short))
        zero = np.zeros((len(short), 3))
        for key in ("time", "position", "velocity"):
            np.testing.assert_array_equal(block.values[key], getattr(short, key))
        for key in ("position", "velocity"):
            expected = np.broadcast_to(getattr(short.quantisation, key), zero.shape)
            np.testing.assert_allclose(block.quanta.get(key, zero), expected, rtol=1e-12)
        assert rows.head.time_quantum == pytest.approx(short.quantisation.time, rel=1e-12)


@pytest.mark.parametrize(
    ("old", "new"),
    [("0.75,", "nan,"), ("0.75,", "0x1p3,"), ("0.75,", "1d5,"), ("0.75,", ","), ("0.75,", '"1",'),
     ("0.75,", "0.75,1.0,"), ("1.5,", "1_5,"), ("1.5,", " 1.5,"), ("1.5,", "1.5e,"),
     ("1.5,", "1e9999999999,")],
)  # fmt: skip
def test_anything_but_plain_numbers_is_left_to_the_reader_that_explains(tmp_path, states, old, new):
    """Which refuses it, or takes it, in words of its own."""
    path = written(tmp_path / "rows.csv", states, repr)
    path.write_text(path.read_text().replace("\n" + old, "\n" + new, 1))
    with long_rows(path) as rows:
        assert rows == []


def test_windows_line_ends_and_a_missing_last_one_change_nothing(tmp_path, states):
    """The same rows."""
    one = written(tmp_path / "one.csv", states, repr)
    two = written(tmp_path / "two.csv", states, repr, end="\r\n")
    three = tmp_path / "three.csv"
    three.write_text(one.read_text().rstrip("\n"))
    blocks = []
    for path in (one, two, three):
        with long_rows(path) as (rows,):
            blocks.append(rows.block(0, rows.head.count).values["position"].tobytes())
    assert blocks[0] == blocks[1] == blocks[2]


def test_a_long_csv_gets_the_verdict_of_its_rows(tmp_path, monkeypatch):
    """Twelve thousand rows with nine decimals, one of them moved by a millionth."""
    monkeypatch.setattr(csv_rows, "_BYTES", 200_000)
    from truefall.reference.table import build_table

    orbit = Orbit(position=(10.0, 0, 0), velocity=(0, 0.34, 0.02))
    times = np.arange(12_000) * 0.5
    position, velocity, _ = build_table(orbit, 0.0, 1.0).at(times)
    position[7000, 2] += 1e-6
    path = written(
        tmp_path / "rows.csv", np.column_stack([times, position, velocity]), "{:.12f}".format
    )
    start = "start = {position = [10.0, 0.0, 0.0], velocity = [0.0, 0.34, 0.02]}"
    path.write_text(f"# {start}\n" + path.read_text())
    (result,) = check_file(path, budget={"position": 1e-8})

    assert result.verdict == "fail"
    assert result.samples == 12_000
    assert result.judgements[0].row == 7000
    assert result.judgements[0].failing_rows == 1
    assert result.floor.source == "digits of the file"
    assert result.floor.position == pytest.approx(0.5e-12 * 3**0.5, rel=0.01)


def test_the_rules_have_one_source():
    """The rule of short files says the same of a column with one zero and one number."""
    texts = {"x": ["0.0", "1.25"]}
    quanta = file_quanta(texts, {"x": np.array([0.0, 1.25])})

    assert quanta["x"].tolist() == [0.005, 0.005]
