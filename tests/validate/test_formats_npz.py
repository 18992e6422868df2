"""NPZ files: plain arrays are read, everything else is refused before it is allocated."""

from __future__ import annotations

import io
import pickle
import warnings
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.validate.errors import InputError
from truefall.validate.formats import read_trajectories, read_trajectory

N = 20
TIME = np.arange(float(N))
POSITION = np.column_stack([np.full(N, 8.0), 0.1 * TIME, np.zeros(N)])
TOML = (
    'system = "geometric"\ngm = 1.0\nparticle = "massive"\nchart = "areal"\nclock = "coordinate"\n'
)
PLAIN: dict[str, Any] = {"time": TIME, "position": POSITION, "metadata": np.array(TOML)}


def _npy(array: Any) -> bytes:
    out = io.BytesIO()
    np.lib.format.write_array(out, np.asanyarray(array), allow_pickle=True)
    return out.getvalue()


def _zip(path: Path, members: list[tuple[str, bytes]]) -> Path:
    with zipfile.ZipFile(path, "w") as archive, warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)  # one file here repeats a name on purpose
        for name, data in members:
            archive.writestr(zipfile.ZipInfo(name), data)
    return path


def _header(shape: str, descr: str = "'<f8'", order: str = "False") -> bytes:
    text = f"{{'descr': {descr}, 'fortran_order': {order}, 'shape': {shape}, }}"
    text += " " * (-(len(text) + 11) % 64) + "\n"
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text.encode()


@pytest.mark.parametrize("save", [np.savez, np.savez_compressed])
def test_plain_files(tmp_path: Path, save: Any) -> None:
    """What NumPy writes is read: either byte order and array order, whole numbers, float32."""
    path = tmp_path / "run.npz"
    save(
        path,
        time=np.arange(N),
        position=np.asfortranarray(POSITION).astype(">f8"),
        velocity=POSITION.astype("f4"),
        metadata=np.array(TOML.encode()),
    )
    run = read_trajectory(path)

    assert np.array_equal(run.time, TIME)
    assert np.array_equal(run.position, POSITION)
    assert not run.quantisation.position.any()
    assert run.quantisation.velocity[0, 0] == 2.0**-21
    assert run.metadata["chart"] == "areal"


def test_metadata_from_the_sidecar(tmp_path: Path) -> None:
    """A file without metadata needs its sidecar."""
    path = tmp_path / "run.npz"
    np.savez(path, time=TIME, position=POSITION)
    with pytest.raises(InputError, match="system, gm, particle, chart, clock missing"):
        read_trajectories(path)

    (tmp_path / "run.toml").write_text(TOML)
    assert read_trajectory(path).metadata["gm"] == 1.0


class _Evil:
    def __reduce__(self) -> tuple[Any, tuple[str]]:
        return (print, ("unpickled",))


ODD: dict[str, tuple[dict[str, Any], str]] = {
    "objects": ({"position": np.array([_Evil()] * N)}, "'position' holds Python objects"),
    "structured": ({"position": np.zeros(N, dtype=[("x", "f8")])}, "'position' has type"),
    "dates": ({"time": np.zeros(N, dtype="M8[s]")}, "'time' has type"),
    "complex": ({"position": POSITION + 0j}, "'position' has type complex128"),
    "long double": ({"position": POSITION.astype("g")}, "'position' has type"),
    "half": ({"position": POSITION.astype("f2")}, "'position' has type float16"),
    "text": ({"position": np.array(["a"] * N)}, "'position' has type"),
    "transposed": ({"position": POSITION.T}, r"position has shape \(3, 20\); time has 20"),
    "no rows": ({"time": np.empty(0), "position": np.empty((0, 3))}, "holds no rows"),
    "nan": ({"position": np.where(POSITION == 0.1, np.nan, POSITION)}, "row 2 of position is nan"),
    "unknown": ({"velocities": POSITION}, "unknown array 'velocities'; known are time"),
    "large integers": ({"time": np.arange(N) + (1 << 60)}, "whole numbers beyond 2"),
    "repeated time": ({"time": np.zeros(N)}, "row 2 repeats the time 0.0 of row 1"),
    "metadata array": ({"metadata": np.array(["a", "b"])}, "must be one string of TOML"),
    "metadata number": ({"metadata": np.array(1.0)}, "must be one string of TOML"),
    "metadata no TOML": ({"metadata": np.array("chart: areal")}, "'metadata' is not TOML"),
    "large metadata": ({"metadata": np.array("#" * 300_000)}, "'metadata' is larger than 1 MB"),
}  # fmt: skip


@pytest.mark.parametrize("what", ODD)
def test_odd_arrays_are_refused(
    tmp_path: Path, what: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """One sentence naming the array; nothing is unpickled."""
    change, sentence = ODD[what]
    path = tmp_path / "run.npz"
    np.savez(path, **{**PLAIN, **change})
    with pytest.raises(InputError, match=sentence) as caught:
        read_trajectories(path)

    assert str(caught.value).isprintable()
    assert capsys.readouterr().out == ""


TIME_NPY = ("time.npy", _npy(TIME))
FORGED: dict[str, tuple[list[tuple[str, bytes]], str]] = {
    "missing": ([TIME_NPY], "array 'position' missing"),
    "twice": ([TIME_NPY, TIME_NPY, ("position.npy", _npy(POSITION))], "'time' is there twice"),
    "path": ([TIME_NPY, ("../position.npy", _npy(POSITION))], "unknown array '../position'"),
    "pickle": ([TIME_NPY, ("position.npy", pickle.dumps(_Evil()))], "not in NumPy's format"),
    "huge claim": ([TIME_NPY, ("position.npy", _header("(10**13, 3)"))], "not in NumPy's format"),
    "large claim": (
        [TIME_NPY, ("position.npy", _header("(10000000000000, 3)") + bytes(48))],
        "not as long as its header says",
    ),
    "negative": (
        [TIME_NPY, ("position.npy", _header("(-2, -3)") + bytes(48))],
        "not as long as its header",
    ),
    "short": ([TIME_NPY, ("position.npy", _npy(POSITION)[:-8])], "not as long as its header"),
    "long": ([TIME_NPY, ("position.npy", _npy(POSITION) + b"more")], "not as long as its header"),
    "version": ([TIME_NPY, ("position.npy", b"\x93NUMPY\x07\x00" + bytes(90))], "version"),
    "code": (
        [TIME_NPY, ("position.npy", _header("__import__('os').getpid()"))],
        "not in NumPy's format",
    ),
    "empty member": ([TIME_NPY, ("position.npy", b"")], "not in NumPy's format|not a readable"),
}


@pytest.mark.parametrize("what", FORGED)
def test_forged_archives_are_refused(tmp_path: Path, what: str) -> None:
    """Headers that lie, members that are no arrays."""
    members, sentence = FORGED[what]
    path = _zip(tmp_path / "run.npz", members)
    with pytest.raises(InputError, match=sentence) as caught:
        read_trajectories(path)

    assert str(caught.value).isprintable()


def test_bomb_is_refused_by_its_claim(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The size that the directory claims is held against a limit before anything is inflated."""
    from truefall.validate.formats import npz_format

    path = tmp_path / "run.npz"
    np.savez_compressed(path, time=np.arange(1e6), position=np.zeros((10**6, 3)))
    assert path.stat().st_size < 4e6
    monkeypatch.setattr(npz_format, "_LIMIT", 10_000_000)
    with pytest.raises(InputError, match="claims more than"):
        read_trajectories(path)


@pytest.mark.parametrize("what", ["text", "empty", "cut", "flipped", "unknown compression"])
def test_damaged_archives(tmp_path: Path, what: str) -> None:
    """Damage is found by the archive's own checksums."""
    path = tmp_path / "run.npz"
    np.savez_compressed(path, **PLAIN)
    data = bytearray(path.read_bytes())
    if what == "text":
        data = bytearray(b"time,x,y,z\n")
    elif what == "empty":
        data = bytearray()
    elif what == "cut":
        del data[len(data) // 2 :]
    elif what == "flipped":
        data[data.index(b"time.npy") + 80] ^= 0xFF
    else:
        for mark, offset in ((b"PK\x03\x04", 8), (b"PK\x01\x02", 10)):
            at = data.index(mark) + offset
            data[at : at + 2] = (97).to_bytes(2, "little")
    path.write_bytes(data)
    with pytest.raises(InputError, match=r"not a readable NPZ archive|not in NumPy's format"):
        read_trajectories(path)
