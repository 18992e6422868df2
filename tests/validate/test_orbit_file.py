"""Orbit files: every key, every default, the sentence for everything that is wrong."""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from truefall.validate.errors import InputError
from truefall.validate.orbit_file import merge, parse_orbit, read_mapping, read_orbit_file

GOOD = """
name = "inner probe"
system = "geometric"
gm = 1.0
particle = "massive"
chart = "areal"
clock = "coordinate"
[start]
time = 2.5
position = [8.0, 0, 0.0]
velocity = [0.0, 0.4, 0.0]
[samples]
times = [0.0, 10.0, 20]
[budget]
position = 1e-6
per_revolution = { position = 1e-9 }
"""


def _put(folder: Path, text: str | bytes, name: str = "orbit.toml") -> Path:
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def test_every_key(tmp_path: Path) -> None:
    """A whole orbit file, TOML with or without byte order mark, or JSON with the same keys."""
    path = _put(tmp_path, GOOD)
    marked = _put(tmp_path, b"\xef\xbb\xbf" + GOOD.encode(), "marked.toml")
    as_json = _put(tmp_path, json.dumps(read_mapping(path)), "orbit.json")
    for spec in map(read_orbit_file, (path, marked, as_json)):
        assert spec.name == "inner probe"
        assert (spec.system, spec.gm, spec.particle) == ("geometric", 1.0, "massive")
        assert (spec.chart, spec.clock, spec.start_time) == ("areal", "coordinate", 2.5)
        assert spec.position == (8.0, 0.0, 0.0)
        assert spec.velocity == (0.0, 0.4, 0.0)
        assert spec.elements is None
        assert spec.times == (0.0, 10.0, 20.0)
        assert spec.budget == {"position": 1e-6, "per_revolution": {"position": 1e-9}}


def test_defaults(tmp_path: Path) -> None:
    """The start is at time 0; the name is the file's; samples and budget may be absent."""
    text = GOOD.split("[samples]")[0].replace('name = "inner probe"', "").replace("time = 2.5", "")
    spec = read_orbit_file(_put(tmp_path, text))

    assert (spec.name, spec.start_time, spec.times, spec.budget) == ("orbit", 0.0, None, {})
    with pytest.raises(InputError, match=r"\[samples\] missing"):
        read_orbit_file(_put(tmp_path, text), need_samples=True)


def test_orbit(tmp_path: Path) -> None:
    """The exact orbit of the file, at its own start time."""
    orbit = read_orbit_file(_put(tmp_path, GOOD)).orbit()

    assert orbit.start_time == 2.5
    assert orbit.orbit_class == "bound"
    assert orbit.at([2.5]).position.tolist() == [[8.0, 0.0, 0.0]]


ELEMENTS = "semilatus_rectum = 12.0\neccentricity = 0.3\nperiapsis = 0.5"
VECTORS = "position = [8.0, 0, 0.0]\nvelocity = [0.0, 0.4, 0.0]"


def test_elements(tmp_path: Path) -> None:
    """Elements stand in place of position and velocity."""
    spec = read_orbit_file(_put(tmp_path, GOOD.replace(VECTORS, ELEMENTS)))

    assert spec.elements == {"semilatus_rectum": 12.0, "eccentricity": 0.3, "periapsis": 0.5}
    assert spec.position is None
    periapsis = spec.orbit().periapsis
    assert periapsis is not None
    assert periapsis.value == pytest.approx(12.0 / 1.3)


BAD: dict[str, tuple[str, str, str]] = {
    "unknown key": ("gm = 1.0", "gm = 1.0\ngmm = 2", "unknown key 'gmm'.*did you mean 'gm'"),
    "far key": ("gm = 1.0", "gm = 1.0\nqqq = 2", "unknown key 'qqq'.*known are system, gm"),
    "start key": ("time = 2.5", "tine = 2.5", r"'tine' in \[start\]; did you mean 'time'"),
    "samples key": ("times =", "time =", r"'time' in \[samples\]; did you mean 'times'"),
    "budget key": ("position = 1e-6", "positon = 1e-6", "'positon'.*did you mean 'position'"),
    "budget value": ("position = 1e-6", "position = -1.0", "budget position must be positive"),
    "budget unit": ("position = 1e-6", 'position = "1 mm"', "geometric units have no mm"),
    "missing": ('system = "geometric"\ngm = 1.0', "", "system, gm missing.*--system --gm"),
    "no position": ("position = [8.0, 0, 0.0]", "", r"\[start\] lacks position:"),
    "no start": (GOOD[GOOD.index("[start]") : GOOD.index("[samples]")], "",
                 r"\[start\] lacks position and velocity"),
    "system": ('"geometric"', '"Si"', "system is 'Si'; allowed are .*did you mean 'SI'"),
    "chart": ('"areal"', '"schwarzschild"', "chart is 'schwarzschild'; allowed are areal"),
    "chart list": ('"areal"', '["areal"]', r"chart is \['areal'\]; allowed"),
    "geometric gm": ("gm = 1.0", "gm = 2.0", "gm is 2.0, but geometric units mean gm = 1"),
    "gm sign": ('"geometric"\ngm = 1.0', '"SI"\ngm = -1.0', "gm must be positive"),
    "gm text": ("gm = 1.0", 'gm = "1"', "gm must be a number, not '1'"),
    "gm truth": ("gm = 1.0", "gm = true", "gm must be a number, not True"),
    "gm large": ("gm = 1.0", "gm = 1" + "0" * 400, "gm must be a finite number"),
    "light proper": ('"massive"', '"light"\nclock = "proper"', "light has no proper time"),
    "nan": ("8.0, 0, 0.0", "nan, 0, 0.0", r"start.position\[0\] must be a finite number"),
    "two numbers": ("8.0, 0, 0.0", "8.0, 0", "start.position must be a list of three numbers"),
    "position text": ("[8.0, 0, 0.0]", '"8 0 0"', "start.position must be a list of three"),
    "start value": (GOOD[GOOD.index("[start]") : GOOD.index("[samples]")], "start = 3\n",
                    r"\[start\] must be a table, not 3"),
    "both": (VECTORS, VECTORS + "\n" + ELEMENTS, "mixes elements with position"),
    "half elements": (VECTORS, "eccentricity = 0.3", r"\[start\] lacks semilatus_rectum"),
    "times text": ("[0.0, 10.0, 20]", '["0", "1"]', r"samples.times\[0\] must be a number"),
    "times empty": ("[0.0, 10.0, 20]", "[]", "samples.times must be a list of numbers"),
    "times inf": ("[0.0, 10.0, 20]", "[0.0, inf]", r"samples.times\[1\] must be a finite"),
    "times repeat": ("[0.0, 10.0, 20]", "[0.0, 10.0, 10.0]",
                     "samples.times: row 3 repeats the time 10.0 of row 2"),
    "times turn": ("[0.0, 10.0, 20]", "[0.0, 10.0, 5.0]",
                   "row 3 .5.0. turns back after row 2 .10.0."),
    "two ways": ("times = [0.0, 10.0, 20]", "times = [0.0]\nfirst = 0.0", "exactly one of"),
    "no way": ("times = [0.0, 10.0, 20]", "", "exactly one of"),
    "no count": ("times = [0.0, 10.0, 20]", "first = 0.0\nlast = 1.0", "lacks count"),
    "count 1": ("times = [0.0, 10.0, 20]", "first = 0.0\nlast = 1.0\ncount = 1", "from 2 to"),
    "count 2.0": ("times = [0.0, 10.0, 20]", "first = 0.0\nlast = 1.0\ncount = 2.0", "from 2 to"),
    "count huge": ("times = [0.0, 10.0, 20]", "first = 0.0\nlast = 1.0\ncount = 10000000000000",
                   "from 2 to"),
    "equal ends": ("times = [0.0, 10.0, 20]", "first = 1.0\nlast = 1.0\ncount = 3", "must differ"),
    "too dense": ("times = [0.0, 10.0, 20]", "first = 1.0\nlast = 1.0000000000000002\ncount = 4",
                  "repeats the time 1.0"),
    "file number": ("times = [0.0, 10.0, 20]", "from_file = 3", "from_file must be a path"),
    "file missing": ("times = [0.0, 10.0, 20]", 'from_file = "t.csv"', "t.csv: there is no such"),
    "name": ('"inner probe"', '"a\\u001bb"', "name must be a line of text"),
    "name number": ('"inner probe"', "3", "name must be a line of text, not 3"),
    "syntax": ("gm = 1.0", "gm 1.0", "is not valid TOML: .*line 4"),
    "twice": ("gm = 1.0", "gm = 1.0\ngm = 1.0", "is not valid TOML"),
    "deep": ("gm = 1.0", "gm = " + "[" * 100_000, "is not valid TOML"),
}  # fmt: skip


@pytest.mark.parametrize("what", BAD)
def test_bad_files_get_one_sentence(tmp_path: Path, what: str) -> None:
    """File and key are named, on one line, of readable length."""
    old, new, sentence = BAD[what]
    assert old in GOOD
    text = GOOD.replace(old, new, 1)
    if what == "light proper":
        text = text.replace('clock = "coordinate"\n', "")
    path = _put(tmp_path, text)
    with pytest.raises(InputError, match=sentence) as caught:
        read_orbit_file(path)

    message = str(caught.value)
    assert message.startswith(str(tmp_path))
    assert message.isprintable()
    assert len(message) < 400 + len(str(path))


@pytest.mark.parametrize(
    ("name", "data", "sentence"),
    [
        ("o.toml", b"gm = \xff", "is not UTF-8"),
        ("o.json", b"{", "is not valid JSON: .*line 1"),
        ("o.json", b"[1, 2]", "must hold a table of keys"),
        ("o.json", b'{"gm": 1.0, "gm": 2.0}', "key 'gm' stands twice"),
        ("o.json", b'{"gm": NaN}', "missing"),
        ("o.json", b"[" * 200_000, "is not valid JSON"),
        ("o.toml", b"", "system, gm, particle, chart, clock missing.*lacks position and velocity"),
    ],
)
def test_bad_documents(tmp_path: Path, name: str, data: bytes, sentence: str) -> None:
    """Files that are no table of keys."""
    with pytest.raises(InputError, match=sentence):
        read_orbit_file(_put(tmp_path, data, name))


@pytest.mark.parametrize("kind", ["folder", "missing", "device"])
def test_what_is_no_file(tmp_path: Path, kind: str) -> None:
    """A device would never end."""
    path = {"folder": tmp_path, "missing": tmp_path / "o.toml", "device": Path("/dev/zero")}[kind]
    with pytest.raises(InputError, match=r"is a folder|no such file|device or pipe"):
        read_orbit_file(path)


@pytest.mark.parametrize(
    ("changes", "key"),
    [
        ({"velocity": [0.0, 2.0, 0.0]}, "start.velocity"),
        ({"position": [1.5, 0.0, 0.0]}, "start.position"),
        ({"position": [0.0, 0.0, 0.0]}, "start.position"),
    ],
)
def test_a_start_that_is_no_orbit(tmp_path: Path, changes: dict[str, Any], key: str) -> None:
    """The file and the key at fault are named."""
    mapping = read_mapping(_put(tmp_path, GOOD))
    mapping["start"] |= changes
    with pytest.raises(InputError, match=f"^orbit.toml: {key}: "):
        parse_orbit(mapping, "orbit.toml").orbit()


def test_elements_are_areal(tmp_path: Path) -> None:
    """Elements in another chart are refused."""
    text = GOOD.replace(VECTORS, ELEMENTS).replace('"areal"', '"harmonic"')
    with pytest.raises(InputError, match=r"elements are areal; chart is 'harmonic'"):
        read_orbit_file(_put(tmp_path, text))


def test_times_from_file(tmp_path: Path) -> None:
    """The path is relative to the orbit file; other columns are ignored."""
    (tmp_path / "data").mkdir()
    _put(tmp_path, "n,time\n1,0.1\n2,0.7\n", "data/t.csv")
    text = GOOD.replace("times = [0.0, 10.0, 20]", 'from_file = "data/t.csv"')

    assert read_orbit_file(_put(tmp_path, text)).times == (0.1, 0.7)
    _put(tmp_path, "n,time\n1,0.1\n2,0.1\n", "data/t.csv")
    with pytest.raises(InputError, match=r"row 2 repeats the time 0.1 of row 1"):
        read_orbit_file(_put(tmp_path, text))


bounded = st.floats(min_value=-1e300, max_value=1e300)


@settings(max_examples=100, deadline=None)
@given(bounded, bounded, st.integers(2, 40))
def test_regular_times_are_the_nearest_floats(first: float, last: float, count: int) -> None:
    """Time i is the float64 nearest to first + i (last - first)/(count - 1), taken exactly."""
    mapping = {
        "system": "geometric", "gm": 1, "particle": "massive", "chart": "areal",
        "clock": "coordinate", "samples": {"first": first, "last": last, "count": count},
    }  # fmt: skip
    step = (Fraction(last) - Fraction(first)) / (count - 1)
    expected = tuple(float(Fraction(first) + k * step) for k in range(count))
    if len(set(expected)) < count:
        with pytest.raises(InputError, match=r"must differ|repeats"):
            parse_orbit(mapping, "o", need_start=False)
        return
    times = parse_orbit(mapping, "o", need_start=False).times

    assert times == expected
    assert times[0] == first
    assert times[-1] == last


def test_merge_by_precedence() -> None:
    """Earlier layers win key by key, also inside tables; starts are not mixed."""
    option = {"chart": "harmonic", "start": {"time": 1.0}}
    orbit = {"chart": "areal", "gm": 2.0, "start": {"position": [1.0], "velocity": [2.0]}}
    file = {"gm": 3.0, "budget": {"position": 1.0}, "start": {"time": 9.0, "eccentricity": 0.1}}

    assert merge(option, orbit, file) == {
        "chart": "harmonic", "gm": 2.0, "budget": {"position": 1.0},
        "start": {"time": 1.0, "position": [1.0], "velocity": [2.0]},
    }  # fmt: skip
    assert file["start"] == {"time": 9.0, "eccentricity": 0.1}
