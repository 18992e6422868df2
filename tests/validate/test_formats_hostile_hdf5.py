"""HDF5 files made to mislead or to harm: all are refused before their data are used."""

from __future__ import annotations

import zlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from truefall.validate.errors import InputError
from truefall.validate.formats import read_trajectories, read_trajectory

N = 50
TIME = np.arange(float(N))
POSITION = np.column_stack([np.full(N, 8.0), 0.1 * TIME, np.zeros(N)])
DECLARED = {
    "system": "geometric", "gm": 1.0, "particle": "massive", "chart": "areal",
    "clock": "coordinate",
}  # fmt: skip


def _file(path: Path, change: Callable[[Any], None] | None = None, **options: Any) -> Path:
    """A plain file by plain h5py (variable-length attributes, contiguous data), then changed."""
    with h5py.File(path, "w") as file:
        group = file.create_group("trajectory/run")
        group.attrs.update(DECLARED)
        group.create_dataset("time", data=TIME, **options)
        group.create_dataset("position", data=POSITION, **options)
        if change is not None:
            change(group)
    return path


def _replace(group: Any, name: str = "position", **options: Any) -> Any:
    del group[name]
    return group.create_dataset(name, **options)


@pytest.mark.parametrize(
    "options",
    [{}, {"chunks": True}, {"compression": "gzip", "shuffle": True, "fletcher32": True}],
    ids=["contiguous", "chunked", "filtered"],
)
@pytest.mark.parametrize("kind", ["<f8", ">f8"])
def test_plain_files_are_read(tmp_path: Path, options: dict[str, Any], kind: str) -> None:
    """Whoever writes the layout with plain h5py is understood, in either byte order."""
    path = _file(
        tmp_path / "run.h5",
        lambda g: _replace(g, data=POSITION.astype(kind), **options),
        **options,
    )
    run = read_trajectory(path)

    assert np.array_equal(run.position, POSITION)
    assert run.metadata["chart"] == "areal"
    assert not run.quantisation.any


def test_single_precision_carries_half_an_ulp(tmp_path: Path) -> None:
    """float32 positions are read with their quantisation; whole float32 stamps are exact."""
    path = _file(tmp_path / "run.h5", lambda g: _replace(g, data=POSITION.astype("f4")))
    run = read_trajectory(path)

    assert run.quantisation.position[3, 0] == 2.0**-21  # half of 2^-20, the spacing at 8
    assert run.quantisation.time == 0.0


def _secret(tmp_path: Path) -> Path:
    secret = tmp_path / "secret.bin"
    secret.write_bytes(POSITION.tobytes())
    return secret


def _external_link(group: Any, folder: Path) -> None:
    _file(folder / "other.h5")
    del group["position"]
    group["position"] = h5py.ExternalLink(str(folder / "other.h5"), "/trajectory/run/position")


def _soft_link(group: Any, _: Path) -> None:
    group["hidden"] = POSITION
    del group["position"]
    group["position"] = h5py.SoftLink("/trajectory/run/hidden")


def _soft_cycle(group: Any, _: Path) -> None:
    del group["position"]
    group["position"] = h5py.SoftLink("/trajectory/run/position")


def _linked_group(group: Any, folder: Path) -> None:
    _file(folder / "other.h5")
    group.parent["other"] = h5py.ExternalLink(str(folder / "other.h5"), "/trajectory/run")


def _external_storage(group: Any, folder: Path) -> None:
    _replace(
        group, shape=(N, 3), dtype="f8",
        external=[(str(_secret(folder)), 0, h5py.h5f.UNLIMITED)],
    )  # fmt: skip


def _virtual(group: Any, folder: Path) -> None:
    _file(folder / "other.h5")
    layout = h5py.VirtualLayout((N, 3), "f8")
    layout[...] = h5py.VirtualSource(str(folder / "other.h5"), "trajectory/run/position", (N, 3))
    del group["position"]
    group.create_virtual_dataset("position", layout)


def _huge(group: Any, _: Path) -> None:
    _replace(group, shape=(10**12, 3), chunks=(1000, 3), dtype="f8")


def _never_written(group: Any, _: Path) -> None:
    _replace(group, shape=(N, 3), dtype="f8")


def _partly_written(group: Any, _: Path) -> None:
    _replace(group, shape=(N, 3), chunks=(10, 3), dtype="f8")[:20] = 1.0


def _large_chunk(group: Any, _: Path) -> None:
    _replace(group, shape=(N, 3), chunks=(4_000_000, 3), maxshape=(None, 3), dtype="f8")


def _other_filter(group: Any, _: Path) -> None:
    _replace(group, data=POSITION, chunks=(N, 3), compression="lzf")


def _scale_offset(group: Any, _: Path) -> None:
    _replace(group, data=POSITION, chunks=(N, 3), scaleoffset=4)


def _deflate_twice(group: Any, _: Path) -> None:
    properties = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    properties.set_chunk((N, 3))
    properties.set_deflate(9)
    properties.set_deflate(9)
    del group["position"]
    space = h5py.h5s.create_simple((N, 3))
    h5py.h5d.create(group.id, b"position", h5py.h5t.IEEE_F64LE, space, properties)


def _bomb(group: Any, _: Path) -> None:
    dataset = _replace(group, shape=(N, 3), chunks=(N, 3), dtype="f8", compression="gzip")
    dataset.id.write_direct_chunk((0, 0), zlib.compress(bytes(1_000_000), 9))


def _stuffed(group: Any, _: Path) -> None:
    dataset = _replace(group, shape=(N, 3), chunks=(N, 3), dtype="f8", compression="gzip")
    noise = np.random.default_rng(3).bytes(100_000)
    dataset.id.write_direct_chunk((0, 0), zlib.compress(noise))


def _cut_stream(group: Any, _: Path) -> None:
    dataset = _replace(group, shape=(N, 3), chunks=(N, 3), dtype="f8", compression="gzip")
    dataset.id.write_direct_chunk((0, 0), zlib.compress(POSITION.tobytes())[:-30])


def _no_stream(group: Any, _: Path) -> None:
    dataset = _replace(group, shape=(N, 3), chunks=(N, 3), dtype="f8", compression="gzip")
    dataset.id.write_direct_chunk((0, 0), b"no zlib stream at all")


def _strings(group: Any, _: Path) -> None:
    _replace(group, data=["a"] * N, dtype=h5py.string_dtype())


def _ragged(group: Any, _: Path) -> None:
    _replace(group, shape=(N,), dtype=h5py.vlen_dtype("f8"))


def _references(group: Any, _: Path) -> None:
    _replace(group, shape=(N,), dtype=h5py.ref_dtype)


def _compound(group: Any, _: Path) -> None:
    _replace(group, data=np.zeros(N, dtype=[("x", "f8"), ("y", "f8")]))


def _array_type(group: Any, _: Path) -> None:
    _replace(group, shape=(N,), dtype=np.dtype(("f8", (3,))))


def _half(group: Any, _: Path) -> None:
    _replace(group, data=POSITION.astype("f2"))


def _integers(group: Any, _: Path) -> None:
    _replace(group, data=POSITION.astype("i4"))


def _null(group: Any, _: Path) -> None:
    _replace(group, data=h5py.Empty("f8"))


def _cube(group: Any, _: Path) -> None:
    _replace(group, data=np.zeros((N, 3, 2)))


def _group_as_data(group: Any, _: Path) -> None:
    del group["position"]
    group.create_group("position")


def _type_as_data(group: Any, _: Path) -> None:
    del group["position"]
    group["position"] = np.dtype("f8")


def _escape_in_name(group: Any, _: Path) -> None:
    group["\x1b[31mred"] = 1.0


def _long_attribute(group: Any, _: Path) -> None:
    group.attrs["start_position"] = np.zeros(8000)


def _many_strings(group: Any, _: Path) -> None:
    group.attrs["chart"] = np.array(["areal"] * 2000, dtype=object)


def _reference_attribute(group: Any, _: Path) -> None:
    group.attrs["chart"] = group.ref


def _empty_attribute(group: Any, _: Path) -> None:
    group.attrs["chart"] = h5py.Empty("f8")


def _text_gm(group: Any, _: Path) -> None:
    group.attrs["gm"] = "heavy"


def _negative_bound(group: Any, _: Path) -> None:
    group["position_bound"] = np.full((N, 3), -1.0)


def _wrong_bound(group: Any, _: Path) -> None:
    group["position_bound"] = np.zeros(N)


def _nan(group: Any, _: Path) -> None:
    group["position"][7, 1] = np.nan


def _short(group: Any, _: Path) -> None:
    _replace(group, data=POSITION[:-1])


def _no_position(group: Any, _: Path) -> None:
    del group["position"]


def _bad_budget(group: Any, _: Path) -> None:
    group.attrs["budget"] = "{ position = "


HOSTILE: dict[str, tuple[Callable[[Any, Path], None], str]] = {
    "external link": (_external_link, "position is a soft or external link"),
    "soft link": (_soft_link, "position is a soft or external link"),
    "soft cycle": (_soft_cycle, "soft or external link"),
    "linked group": (_linked_group, "/trajectory/other is a soft or external link"),
    "external storage": (_external_storage, "outside this file"),
    "virtual": (_virtual, "outside this file"),
    "huge": (_huge, "more than 4 GB"),
    "never written": (_never_written, "never wholly written"),
    "partly written": (_partly_written, "only partly written"),
    "large chunk": (_large_chunk, "chunks of more than 64 MB"),
    "other filter": (_other_filter, "HDF5 filter 32000; allowed are shuffle, deflate"),
    "scale-offset": (_scale_offset, "HDF5 filter 6"),
    "deflate twice": (_deflate_twice, "filters out of order"),
    "bomb": (_bomb, "inflates beyond its size"),
    "stuffed chunk": (_stuffed, "oversized compressed chunk"),
    "cut stream": (_cut_stream, "cut short"),
    "no stream": (_no_stream, "damaged"),
    "strings": (_strings, "another type than float64"),
    "ragged": (_ragged, "another type than float64"),
    "references": (_references, "another type than float64"),
    "compound": (_compound, "another type than float64"),
    "array type": (_array_type, "another type than float64"),
    "half precision": (_half, "another type than float64"),
    "integers": (_integers, "another type than float64"),
    "null": (_null, "no shape of one or two axes"),
    "cube": (_cube, "no shape of one or two axes"),
    "group as data": (_group_as_data, "position is not a dataset"),
    "type as data": (_type_as_data, "position is not a dataset"),
    "escape in a name": (_escape_in_name, "control characters"),
    "long attribute": (_long_attribute, "attribute 'start_position' .* is too large"),
    "many strings": (_many_strings, "attribute 'chart' .* is not one string"),
    "reference attribute": (_reference_attribute, "attribute 'chart' .* neither number nor text"),
    "empty attribute": (_empty_attribute, "attribute 'chart' .* is empty"),
    "text for gm": (_text_gm, "gm must be a number, not 'heavy'"),
    "negative bound": (_negative_bound, "position_bound holds negative"),
    "wrong bound": (_wrong_bound, "position_bound has shape"),
    "nan": (_nan, "row 8 of position is nan"),
    "short": (_short, r"position has shape \(49, 3\)"),
    "no position": (_no_position, "has no dataset 'position'"),
    "bad budget": (_bad_budget, "attribute budget .* is not TOML"),
}


@pytest.mark.parametrize("what", HOSTILE)
def test_hostile_files_are_refused(tmp_path: Path, what: str) -> None:
    """One sentence, naming the object, and no data of another file."""
    change, sentence = HOSTILE[what]
    path = _file(tmp_path / "run.h5", lambda g: change(g, tmp_path))
    with pytest.raises(InputError, match=sentence) as caught:
        read_trajectories(path)

    assert str(caught.value).startswith(f"{path}: ")
    assert str(caught.value).isprintable()
    assert len(str(caught.value)) < 300 + len(str(path))


def test_other_members_are_not_opened(tmp_path: Path) -> None:
    """A member that no trajectory needs may be anything but a link elsewhere."""
    path = _file(tmp_path / "run.h5", lambda g: g.create_dataset("notes", data=["a", "b"]))

    assert len(read_trajectory(path)) == N


def test_hard_link_cycles_end(tmp_path: Path) -> None:
    """A group that holds its own ancestor is read once."""
    path = _file(tmp_path / "run.h5", lambda g: g.__setitem__("again", g.file["/trajectory"]))

    assert [t.name for t in read_trajectories(path)] == ["run"]


@pytest.mark.parametrize("what", ["text", "empty", "cut", "no group", "no trajectory"])
def test_what_is_no_result_set(tmp_path: Path, what: str) -> None:
    """Files that HDF5 cannot open, and files without /trajectory."""
    path = tmp_path / "run.h5"
    if what == "text":
        path.write_text("time,x,y,z\n")
    elif what == "empty":
        path.touch()
    elif what == "cut":
        _file(path)
        path.write_bytes(path.read_bytes()[:3000])
    else:
        with h5py.File(path, "w") as file:
            file.create_group("other" if what == "no group" else "trajectory")
    sentence = {"no group": "no group /trajectory", "no trajectory": "holds no trajectory"}
    with pytest.raises(InputError, match=sentence.get(what, "cannot be opened as HDF5")):
        read_trajectories(path)


@pytest.mark.parametrize("variable", ["HDF5_VOL_CONNECTOR", "HDF5_DRIVER"])
def test_environment_that_loads_foreign_code(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, variable: str
) -> None:
    """The library would load a plugin by these before any file is looked at."""
    path = _file(tmp_path / "run.h5")
    monkeypatch.setenv(variable, "foreign")
    with pytest.raises(InputError, match=f"{variable} is set.*unset it"):
        read_trajectories(path)


def test_several_trajectories_must_be_named(tmp_path: Path) -> None:
    """One by name, all in order, or the list of names."""
    path = _file(tmp_path / "run.h5", lambda g: g.copy(g, g.parent, name="second"))

    assert [t.name for t in read_trajectories(path)] == ["run", "second"]
    assert read_trajectory(path, trajectory="second").name == "second"
    with pytest.raises(InputError, match=r"2 trajectories \(run, second\): name one"):
        read_trajectory(path)
    with pytest.raises(InputError, match="none of them is called 'third'"):
        read_trajectory(path, trajectory="third")


def test_every_flipped_byte_is_noticed_or_harmless(tmp_path: Path) -> None:
    """Damage gives a sentence or the true values: never other values, never a crash."""
    from truefall.validate.formats import write_trajectory

    path = _file(tmp_path / "plain.h5")
    run = read_trajectory(path)
    whole = tmp_path / "whole.h5"
    write_trajectory(whole, run, reproducible=True)
    data = bytearray(whole.read_bytes())
    damaged = tmp_path / "damaged.h5"
    refused = 0
    for k in np.random.default_rng(8).integers(0, len(data), 150).tolist():
        data[k] ^= 0x10
        damaged.write_bytes(data)
        data[k] ^= 0x10
        try:
            again = read_trajectory(damaged)
        except InputError:
            refused += 1
            continue
        assert np.array_equal(again.position, run.position)
        assert np.array_equal(again.time, run.time)
        assert again.metadata == run.metadata
    assert refused > 10
