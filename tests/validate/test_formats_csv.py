"""CSV files: what is read, and the sentence for everything that cannot be."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from truefall.validate.errors import InputError
from truefall.validate.formats import read_trajectories, read_trajectory
from truefall.validate.formats.csv_format import read_times, write_rows
from truefall.validate.formats.metadata import dump_toml

HEAD = (
    '# system = "geometric"\n# gm = 1.0\n# particle = "massive"\n'
    '# chart = "areal"\n# clock = "coordinate"\n'
)
ROWS = "time,x,y,z\n0.0,8.0,0.0,0.0\n1.0,7.9,0.4,0.0\n2.0,7.8,0.8,0.0\n"


def _put(folder: Path, text: str | bytes, name: str = "run.csv") -> Path:
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def test_reads_columns_and_metadata(tmp_path: Path) -> None:
    """Every column lands in its array; dotted keys become tables."""
    text = (
        HEAD + "# start.time = 0.0\n# start.position = [8.0, 0.0, 0.0]\n"
        "# start.velocity = [0.0, 0.4, 0.0]\n# budget.position = 1e-6\n# a remark: = is no key\n"
        "\nx, y ,z,time,vx,vy,vz,proper_time\n8,0,0,0,0,.4,0,0\n\n7.5,1.,-2e-1,1E0,+1,2,3,0.9\n"
    )
    run = read_trajectory(_put(tmp_path, text))

    assert run.name == "run"
    assert run.time.tolist() == [0.0, 1.0]
    assert run.position.tolist() == [[8.0, 0.0, 0.0], [7.5, 1.0, -0.2]]
    assert run.velocity is not None
    assert run.velocity.tolist() == [[0.0, 0.4, 0.0], [1.0, 2.0, 3.0]]
    assert run.proper_time is not None
    assert run.proper_time.tolist() == [0.0, 0.9]
    assert run.metadata["start"]["position"] == [8.0, 0.0, 0.0]
    assert run.metadata["budget"] == {"position": 1e-6}


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_line_ends_and_byte_order_mark(tmp_path: Path, ending: str, mark: bytes) -> None:
    """Files of other systems are read alike."""
    run = read_trajectory(_put(tmp_path, mark + (HEAD + ROWS).replace("\n", ending).encode()))

    assert run.metadata["chart"] == "areal"
    assert run.position[2].tolist() == [7.8, 0.8, 0.0]


BAD = {
    "empty": ("", "is empty"),
    "blank": (" \n\n", "is empty"),
    "only metadata": (HEAD, "no header line"),
    "only header": (HEAD + "time,x,y,z\n", "a header but no rows"),
    "no header": (HEAD + "0.0,8.0,0.0,0.0\n", "header line .* seems to be missing"),
    "unknown column": (HEAD + "time,x,y,z,vitesse\n0,1,2,3,4\n", "unknown column 'vitesse'; known"),
    "near column": (HEAD + "time,x,y,z,propertime\n0,1,2,3,4\n", "did you mean 'proper_time'"),
    "column twice": (HEAD + "time,x,y,z,x\n0,1,2,3,4\n", "column 'x' stands twice"),
    "no time": (HEAD + "x,y,z\n1,2,3\n", "column time missing"),
    "half a velocity": (HEAD + "time,x,y,z,vx\n0,1,2,3,4\n", "only vx of vx, vy, vz"),
    "semicolons": (HEAD + "time;x;y;z\n0;1;2;3\n", "separate columns by commas"),
    "tabs": (HEAD + "time\tx\ty\tz\n0\t1\t2\t3\n", "separate columns by commas"),
    "binary": (b"PK\x03\x04" + bytes(400), "no list of column names"),
    "latin": (HEAD.encode() + b"# \xe9t\xe9\n" + ROWS.encode(), "not UTF-8"),
    "short row": (HEAD + ROWS + "3.0,1.0\n", "line 10 has 2 entries, the header has 4"),
    "long row": (HEAD + ROWS + "3,1,2,3,4\n", "line 10 has 5 entries"),
    "decimal commas": (HEAD + ROWS + "3,0,1,0,2,0,3,0\n", "decimal commas"),
    "quoted comma": (HEAD + ROWS + '3,"1,5",0,0\n', "column 'x': '1,5' has a decimal comma"),
    "Fortran": (HEAD + ROWS + "3,1.5D+00,0,0\n", "line 10, column 'x': '1.5D\\+00' has a Fortran"),
    "text": (HEAD + ROWS + "3,1,north,0\n", "line 10, column 'y': 'north' is text"),
    "empty entry": (HEAD + ROWS + "3,1,,0\n", "line 10, column 'y': is empty"),
    "nan": (HEAD + ROWS + "3,1,nan,0\n", "line 10, column 'y': 'nan' is not finite"),
    "inf": (HEAD + ROWS + "3,1,-Inf,0\n", "line 10, column 'y': '-Inf' is not finite"),
    "overflow": (HEAD + ROWS + "3,1,1e400,0\n", "line 10, column 'y': '1e400' is too large"),
    "underscore": (HEAD + ROWS + "3,1,1_0,0\n", "'1_0' is text"),
    "hexadecimal": (HEAD + ROWS + "3,1,0x1p3,0\n", "'0x1p3' is text"),
    "other digits": (HEAD + ROWS + "3,1,١,0\n", "is text where a number belongs"),
    "lone point": (HEAD + ROWS + "3,1,.,0\n", "is text where a number belongs"),
    "open quote": (HEAD + ROWS + '3,1,"2,0\n', "is not CSV"),
    "time twice": (HEAD + ROWS + "2.0,1,1,1\n", "row 4 repeats the time 2.0 of row 3"),
    "time back": (HEAD + ROWS + "1.5,1,1,1\n", "row 4 .* turns back after row 3"),
    "bad assignment": (HEAD + "# name = probe\n" + ROWS, "line 6 is no TOML assignment"),
    "key twice": (HEAD + "# gm = 2.0\n" + ROWS, "line 6 gives gm a second time"),
    "unknown key": (HEAD + "# cart = 1\n" + ROWS, "unknown key 'cart' .* did you mean 'chart'"),
    "wrong value": (HEAD.replace("areal", "isotopic") + ROWS, "did you mean 'isotropic'"),
    "bad gm": (HEAD.replace("1.0", '"one"') + ROWS, "gm must be a number"),
    "nan gm": (HEAD.replace("1.0", "nan") + ROWS, "gm must be a finite number"),
    "start no table": (HEAD + "# start = 3\n" + ROWS, r"\[start\] must be a table"),
    "half a start": (HEAD + "# start.position = [1.0, 2.0, 3.0]\n" + ROWS, "lacks velocity"),
    "bad budget": (HEAD + "# budget.positon = 1e-6\n" + ROWS, "did you mean 'position'"),
}  # fmt: skip


@pytest.mark.parametrize("what", BAD)
def test_bad_files_get_one_sentence(tmp_path: Path, what: str) -> None:
    """The file, the line and the column are named, on one line."""
    text, sentence = BAD[what]
    path = _put(tmp_path, text)
    with pytest.raises(InputError, match=sentence) as caught:
        read_trajectories(path)

    message = str(caught.value)
    assert message.startswith(f"{path}: ")
    assert message.isprintable()
    assert len(message) < 400 + len(str(path))


def test_missing_metadata_are_listed_together(tmp_path: Path) -> None:
    """All that lacks, in one sentence that says where it may be written."""
    text = '# gm = 1.0\n# particle = "massive"\n' + ROWS
    with pytest.raises(InputError, match=r"system, chart, clock missing.*sidecar.*--system"):
        read_trajectories(_put(tmp_path, text))


@pytest.mark.parametrize("kind", ["missing", "folder", "pipe", "suffix"])
def test_what_is_no_file(tmp_path: Path, kind: str) -> None:
    """Folders, pipes and unknown suffixes are named as such."""
    import os

    path = tmp_path / ("run.dat" if kind == "suffix" else "run.csv")
    if kind == "folder":
        path.mkdir()
    if kind == "pipe":
        os.mkfifo(path)
    sentence = {
        "missing": "no such file", "folder": "is a folder", "pipe": "device or pipe",
        "suffix": "known are .csv, .h5",
    }[kind]  # fmt: skip
    with pytest.raises(InputError, match=sentence):
        read_trajectories(path)


def test_sentences_are_safe_to_print() -> None:
    """Whatever a file holds, its refusal is one line without control characters."""
    error = InputError("bad\x1b[31m name\nsecond " + "x" * 5000, "run.csv")

    assert str(error).isprintable()
    assert str(error).startswith("run.csv: bad [31m name second x")
    assert len(str(error)) < 700


def test_precedence_option_orbit_file_sidecar(tmp_path: Path) -> None:
    """Option before --orbit before the file before the sidecar, key by key."""
    path = _put(tmp_path, '# chart = "areal"\n# budget.position = 2.0\n' + ROWS)
    declared = 'system = "geometric"\ngm = 1.0\nparticle = "massive"\n'
    _put(
        tmp_path,
        declared + 'chart = "harmonic"\nclock = "coordinate"\n'
        "[budget]\nposition = 1.0\nvelocity = 1.0\n",
        "run.toml",
    )
    orbit = _put(tmp_path, 'clock = "proper"\n[budget]\nvelocity = 3.0\n', "orbit.toml")

    run = read_trajectory(path)
    assert run.metadata["chart"] == "areal"
    assert run.metadata["clock"] == "coordinate"
    assert run.metadata["budget"] == {"position": 2.0, "velocity": 1.0}

    run = read_trajectory(path, orbit_file=orbit, overrides={"budget": {"position": 4.0}})
    assert run.metadata["clock"] == "proper"
    assert run.metadata["budget"] == {"position": 4.0, "velocity": 3.0}


def test_a_wrong_key_names_the_file_it_stands_in(tmp_path: Path) -> None:
    """A mistake in the sidecar is not blamed on the trajectory."""
    path = _put(tmp_path, HEAD + ROWS)
    sidecar = _put(tmp_path, 'chrt = "areal"\n', "run.toml")
    with pytest.raises(InputError, match="unknown key 'chrt'") as caught:
        read_trajectories(path)

    assert caught.value.where == str(sidecar)


def test_a_start_without_time_is_at_zero(tmp_path: Path) -> None:
    """A whole start of an orbit file does not take its time from the file below it."""
    start = (
        "# start.time = 5.0\n# start.position = [8.0, 0.0, 0.0]\n"
        "# start.velocity = [0.0, 0.4, 0.0]\n"
    )
    path = _put(tmp_path, HEAD + start + ROWS)
    orbit = _put(
        tmp_path, "[start]\nposition = [9.0, 0.0, 0.0]\nvelocity = [0.0, 0.3, 0.0]\n", "o.toml"
    )

    assert read_trajectory(path).metadata["start"]["time"] == 5.0
    assert "time" not in read_trajectory(path, orbit_file=orbit).metadata["start"]


def test_times_file_ignores_other_columns(tmp_path: Path) -> None:
    """A column ``time`` is enough, wherever it stands."""
    path = _put(tmp_path, "label,time\nfirst,0.1\nsecond,0.30000000000000004\n")

    assert read_times(path) == [0.1, 0.30000000000000004]
    with pytest.raises(InputError, match="no column 'time'; its columns are t"):
        read_times(_put(tmp_path, "t\n1\n"))
    with pytest.raises(InputError, match="line 3, column 'time': 'soon' is text"):
        read_times(_put(tmp_path, "time\n1\nsoon\n"))


finite = st.floats(allow_nan=False, allow_infinity=False)


@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(st.lists(st.tuples(finite, finite, finite), min_size=1, max_size=30))
def test_every_float_survives(tmp_path: Path, rows: list[tuple[float, float, float]]) -> None:
    """What is written is read back bit for bit, signs of zeros included."""
    position = np.array(rows)
    columns = {"time": np.arange(float(len(rows)))}
    columns |= {name: position[:, k] for k, name in enumerate("xyz")}
    path = tmp_path / "run.csv"
    path.write_bytes(HEAD.encode() + write_rows({}, columns))

    assert read_trajectory(path).position.tobytes() == position.tobytes()


@settings(max_examples=60, deadline=None)
@given(
    st.dictionaries(
        st.text(min_size=1, max_size=8),
        st.one_of(
            finite, st.integers(), st.booleans(), st.text(max_size=12),
            st.lists(finite, max_size=3), st.dictionaries(st.text(min_size=1), finite, max_size=3),
        ),
        max_size=4,
    )
)  # fmt: skip
def test_metadata_text_is_toml(metadata: dict[str, object]) -> None:
    """Quotes, control characters and odd keys come back as they were."""
    import tomllib

    metadata = {k: v for k, v in metadata.items() if k not in ("samples", "case", "producer")}
    lines = dump_toml(metadata)

    assert all(line.isprintable() for line in lines)
    kept = {k: v for k, v in metadata.items() if v != {}}
    assert tomllib.loads("\n".join(lines)) == kept


def test_reading_is_fast(tmp_path: Path) -> None:
    """A hundred thousand rows take about a second; five would be felt."""
    import time

    table = np.random.default_rng(5).normal(size=(100_000, 7))
    table[:, 0] = np.arange(100_000)
    names = ("time", "x", "y", "z", "vx", "vy", "vz")
    path = tmp_path / "run.csv"
    path.write_bytes(HEAD.encode() + write_rows({}, dict(zip(names, table.T, strict=True))))
    begin = time.process_time()
    run = read_trajectory(path)

    assert time.process_time() - begin < 5.0
    assert np.array_equal(run.position, table[:, 1:4])
    assert not run.quantisation.any
