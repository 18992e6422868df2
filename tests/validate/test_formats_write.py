"""Writing: nothing is lost between formats, whole files or none, the same bytes every time."""

from __future__ import annotations

import os
import stat
from dataclasses import replace
from itertools import product
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.errors import InputError, UsageError
from truefall.validate.formats import (
    read_trajectory,
    write_states,
    write_trajectory,
)
from truefall.validate.formats.files import replace_file
from truefall.validate.formats.hdf5_digest import content_digest
from truefall.validate.orbit_file import OrbitSpec, parse_orbit
from truefall.validate.trajectory import Trajectory

KEPT = ("csv", "npz", "h5", "parquet")
TIMES = np.array([0.0, 0.1, 1.0 / 3.0, 7.0, 100.0])
BASE: dict[str, Any] = {
    "name": "inner probe", "system": "geometric", "gm": 1.0, "particle": "massive",
    "chart": "areal", "clock": "coordinate",
    "start": {"time": 0.0, "position": [8.0, 0.0, 0.0], "velocity": [0.0, 0.4, 0.1]},
}  # fmt: skip
LIGHT = {
    **BASE, "particle": "light", "chart": "isotropic",
    "start": {"position": [20.0, 0.0, 0.0], "velocity": [-1.0, 0.3, 0.0]},
}  # fmt: skip
PROPER = {**BASE, "clock": "proper", "chart": "kerr-schild"}
SATELLITE = {
    **BASE, "name": "satellite", "system": "SI", "gm": 3.986004418e14,
    "start": {"position": [7.0e6, 0.0, 0.0], "velocity": [0.0, 7.5e3, 0.0]},
}  # fmt: skip


def _made(path: Path, mapping: dict[str, Any], **options: Any) -> tuple[OrbitSpec, Orbit]:
    spec = parse_orbit(mapping, path)
    orbit = spec.orbit()
    write_states(path, spec, orbit, orbit.at(TIMES), reproducible=True, **options)
    return spec, orbit


def _equal(obtained: Trajectory, expected: Trajectory) -> None:
    assert obtained.name == expected.name
    assert obtained.metadata == expected.metadata
    assert not obtained.quantisation.any
    for key in ("time", "position", "velocity", "proper_time", "coordinate_time", "affine"):
        left, right = getattr(obtained, key), getattr(expected, key)
        assert (left is None) == (right is None)
        assert left is None or left.tobytes() == right.tobytes()


@pytest.mark.parametrize("mapping", [BASE, LIGHT, PROPER, SATELLITE], ids="BLPS")
@pytest.mark.parametrize(("first", "second"), list(product(KEPT, KEPT)))
def test_conversion_loses_nothing(
    tmp_path: Path, mapping: dict[str, Any], first: str, second: str
) -> None:
    """Every pair of formats: values bit for bit, and all metadata."""
    source, target = tmp_path / f"a.{first}", tmp_path / f"b.{second}"
    spec, orbit = _made(source, mapping, extra={"ends_at": 200.0, "end_reason": "r = 0"})
    read = read_trajectory(source)
    write_trajectory(target, read)
    again = read_trajectory(target)

    _equal(again, read)
    assert read.metadata["start"]["position"] == list(orbit.position)
    assert read.metadata["start"]["velocity"] == list(orbit.velocity)
    assert read.metadata["ends_at"] == 200.0
    assert np.array_equal(read.position, orbit.at(TIMES).position)
    assert read.name == spec.name


@pytest.mark.parametrize(
    "changes",
    [
        {"name": "probe/7 ü", "budget": {"position": 1e-6, "per_revolution": {"clock": 2.0}}},
        {"name": "..", "start": {"semilatus_rectum": 12.0, "eccentricity": 0.3, "anomaly": 1.0}},
        {"start": {"time": -3.5}},
        {"name": "v1.2"},
    ],
)
@pytest.mark.parametrize("suffix", KEPT)
def test_metadata_survive(tmp_path: Path, changes: dict[str, Any], suffix: str) -> None:
    """Budgets, elements, starts at another time, names that HDF5 does not allow."""
    source = tmp_path / "a.csv"
    _made(source, BASE)
    plain = read_trajectory(source)
    metadata = {k: v for k, v in plain.metadata.items() if k != "name"} | changes
    name = str(changes.get("name", "run"))
    run = replace(plain, name=name, metadata={**metadata, "name": name})
    write_trajectory(tmp_path / f"b.{suffix}", run)
    again = read_trajectory(tmp_path / f"b.{suffix}")

    if name.isascii() or suffix != "h5":
        assert again.metadata == run.metadata
    else:  # attributes are ASCII for C and Fortran; group names are not
        assert again.name == "probe-7 ü"
    assert again.metadata["start"] == run.metadata["start"]


@pytest.mark.parametrize("suffix", KEPT)
def test_elements_stay_elements(tmp_path: Path, suffix: str) -> None:
    """Rounded to position and velocity, a circle would be one no more."""
    start = {"time": 0.0, "semilatus_rectum": 8.0, "eccentricity": 0.0}
    path = tmp_path / f"a.{suffix}"
    _, orbit = _made(path, {**BASE, "start": start})

    assert read_trajectory(path).metadata["start"] == start
    if suffix == "h5":  # readers that know no elements find the rounded state beside them
        with h5py.File(path) as file:
            attributes = file["trajectory/inner probe"].attrs
            assert attributes["start_position"].tolist() == list(orbit.position)
            assert attributes["start_velocity"].tolist() == list(orbit.velocity)


@pytest.mark.parametrize("certified", [False, True])
def test_words_and_bounds_survive(tmp_path: Path, certified: bool) -> None:
    """Bounds always, second words in certified sets; both through HDF5 to HDF5."""
    source, target = tmp_path / "a.h5", tmp_path / "b.h5"
    _, orbit = _made(source, BASE, certified=certified)
    states = orbit.at(TIMES)
    write_trajectory(target, read_trajectory(source), reproducible=True)
    stored = read_trajectory(target).stored

    assert stored is not None
    for key in ("position", "velocity", "proper_time"):
        assert np.array_equal(stored.arrays[key + "_bound"], getattr(states, key + "_bound"))
        assert (key + "_low" in stored.arrays) == certified
        if certified:
            assert np.array_equal(stored.arrays[key + "_low"], getattr(states, key + "_low"))
    low = orbit.energy.low if certified else None
    assert stored.invariants["energy"] == (orbit.energy.value, low, orbit.energy.bound)
    assert set(stored.invariants) >= {"energy_minus_one", "angular_momentum", "periapsis"}
    assert source.read_bytes() == target.read_bytes()


def test_layout(tmp_path: Path) -> None:
    """What other programs rely on: names, types, units, scales, fixed ASCII attributes."""
    path = tmp_path / "a.h5"
    _made(path, SATELLITE, certified=True)
    with h5py.File(path) as file:
        group = file["trajectory/satellite"]
        assert file.attrs["format"] == b"truefall-result-set"
        assert set(file.attrs) == {
            "format", "format_version", "producer", "created", "content_digest",
        }  # fmt: skip
        units = {
            name: group[name].attrs["units"].rstrip(b"\0") for name in group if name != "invariants"
        }
        assert units == {
            "time": b"s", "component": b"1", "proper_time": b"s", "proper_time_low": b"s",
            "proper_time_bound": b"s", "position": b"m", "position_low": b"m",
            "position_bound": b"m", "velocity": b"m/s", "velocity_low": b"m/s",
            "velocity_bound": b"m/s", "azimuth": b"rad", "azimuth_low": b"rad",
            "azimuth_bound": b"rad",
        }  # fmt: skip
        for name in units:
            dataset = group[name]
            if name in ("time", "component"):
                assert dataset.is_scale
                continue
            assert dataset.dtype == np.dtype("<f8")
            assert dataset.shape == ((5, 3) if name[0] in "v" or "position" in name else (5,))
            assert dataset.dims[0][0].name == group["time"].name
            assert dataset.ndim == 1 or dataset.dims[1][0].name == group["component"].name
            assert dataset.fletcher32
            assert dataset.shuffle
            assert dataset.compression == "gzip"
        for name in ("system", "chart", "orbit_class"):
            kind = h5py.h5a.open(group.id, name.encode()).get_type()
            assert not kind.is_variable_str()
            assert kind.get_cset() == h5py.h5t.CSET_ASCII
            value = np.empty((), dtype=f"S{kind.get_size()}")
            h5py.h5a.open(group.id, name.encode()).read(value)
            assert value.tobytes().endswith(b"\0")
        assert group.attrs["gm"] == 3.986004418e14
        assert group.attrs["start_position"].tolist() == [7.0e6, 0.0, 0.0]
        assert group["invariants/energy_minus_one"].attrs["units"].rstrip(b"\0") == b"1"
        assert group["invariants/energy_minus_one_bound"][()] > 0


@pytest.mark.parametrize(
    ("system", "length", "speed"), [("geometric", b"1", b"1"), ("astronomical", b"km", b"km/s")]
)
def test_units_by_system(tmp_path: Path, system: str, length: bytes, speed: bytes) -> None:
    """Dimensionless is "1"."""
    mapping = BASE
    if system == "astronomical":
        start = {"position": [7.0e3, 0.0, 0.0], "velocity": [0.0, 7.5, 0.0]}
        mapping = {**BASE, "system": system, "gm": 3.986004418e5, "start": start}
    _made(tmp_path / "a.h5", mapping)
    with h5py.File(tmp_path / "a.h5") as file:
        group = file["trajectory/inner probe"]
        assert group["position_bound"].attrs["units"].rstrip(b"\0") == length
        assert group["velocity"].attrs["units"].rstrip(b"\0") == speed


@pytest.mark.parametrize("suffix", [*KEPT, "oem"])
def test_reproducible_bytes(tmp_path: Path, suffix: str) -> None:
    """Two runs give byte-identical files."""
    for name in ("a", "b"):
        _made(tmp_path / f"{name}.{suffix}", SATELLITE)

    assert (tmp_path / f"a.{suffix}").read_bytes() == (tmp_path / f"b.{suffix}").read_bytes()


def test_source_date_epoch_and_digest(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The date is taken from the environment; the digest does not depend on it."""
    digests = {}
    run = tmp_path / "a.h5"
    _made(run, BASE)
    for epoch in ("0", "86400", None):
        if epoch is None:
            monkeypatch.delenv("SOURCE_DATE_EPOCH")
        else:
            monkeypatch.setenv("SOURCE_DATE_EPOCH", epoch)
        target = tmp_path / "b.h5"
        write_trajectory(target, read_trajectory(run))
        with h5py.File(target) as file:
            digest = file.attrs["content_digest"].rstrip(b"\0").decode()
            assert digest == content_digest(file)
            digests[file.attrs["created"].rstrip(b"\0")] = digest
    assert b"1970-01-01T00:00:00Z" in digests
    assert b"1970-01-02T00:00:00Z" in digests
    assert len(digests) == 3
    assert len(set(digests.values())) == 1


@pytest.mark.parametrize(
    "change",
    [
        lambda g: g["position"].__setitem__((0, 0), 8.5),
        lambda g: g.attrs.__setitem__("gm", 1.5),
        lambda g: g["position"].attrs.__setitem__("units", np.bytes_("m")),
        lambda g: g.move("velocity", "speed"),
        lambda g: g["invariants/energy"].__setitem__((), 1.0),
    ],
)
def test_digest_sees_every_change(tmp_path: Path, change: Any) -> None:
    """Values, attributes, units, names."""
    _made(tmp_path / "a.h5", BASE)
    with h5py.File(tmp_path / "a.h5", "r+") as file:
        before = content_digest(file)
        change(file["trajectory/inner probe"])

        assert content_digest(file) != before


@pytest.mark.parametrize("epoch", ["soon", "1e9", "99999999999999999999"])
def test_bad_source_date_epoch(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, epoch: str) -> None:
    """The environment variable is named."""
    _made(tmp_path / "a.csv", BASE)
    run = read_trajectory(tmp_path / "a.csv")
    monkeypatch.setenv("SOURCE_DATE_EPOCH", epoch)
    with pytest.raises(UsageError, match=r"SOURCE_DATE_EPOCH"):
        write_trajectory(tmp_path / "b.h5", run)

    assert not (tmp_path / "b.h5").exists()


def test_a_failed_write_leaves_the_old_file(tmp_path: Path) -> None:
    """Whatever goes wrong half-way, the old content stays and no temporary file does."""
    path = tmp_path / "a.csv"
    path.write_text("old")

    def fail(temporary: Path, error: BaseException) -> None:
        temporary.write_text("half")
        raise error

    for error, seen in (
        (OSError(28, "No space left on device"), InputError),
        (KeyboardInterrupt(), KeyboardInterrupt),
        (ValueError("fault"), ValueError),
    ):
        with pytest.raises(seen):
            replace_file(path, lambda p, e=error: fail(p, e))  # type: ignore[misc]
        assert path.read_text() == "old"
        assert [p.name for p in tmp_path.iterdir()] == ["a.csv"]


def test_mode_follows_the_umask(tmp_path: Path) -> None:
    """Not the 0600 of temporary files."""
    old = os.umask(0o027)
    try:
        replace_file(tmp_path / "a.csv", lambda p: p.write_text("new") and None)  # type: ignore[arg-type]
    finally:
        os.umask(old)

    assert stat.S_IMODE((tmp_path / "a.csv").stat().st_mode) == 0o640


@pytest.mark.parametrize("where", ["no folder", "a folder", "suffix"])
def test_where_nothing_can_be_written(tmp_path: Path, where: str) -> None:
    """The path and the reason."""
    _made(tmp_path / "a.csv", BASE)
    run = read_trajectory(tmp_path / "a.csv")
    target = {"no folder": tmp_path / "none" / "b.csv", "a folder": tmp_path / "b.csv",
              "suffix": tmp_path / "b.dat"}[where]  # fmt: skip
    if where == "a folder":
        target.mkdir()
    before = sorted(tmp_path.iterdir())
    with pytest.raises(InputError, match=r"cannot be written|has the suffix") as caught:
        write_trajectory(target, run)

    assert str(target) in str(caught.value)
    assert sorted(tmp_path.iterdir()) == before
