"""NPZ: arrays time, position, velocity, clocks, and a string array ``metadata`` (TOML)."""

from __future__ import annotations

import io
import tomllib
import zipfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import make_trajectory, single_precision
from truefall.validate.formats.csv_format import dump_toml
from truefall.validate.trajectory import Quantisation, Trajectory

__all__ = ["read", "write_bytes"]

_MEMBERS = (
    "time", "position", "velocity", "proper_time", "coordinate_time", "affine", "metadata",
)  # fmt: skip
_LIMIT = 1 << 32

Floats = npt.NDArray[np.float64]


def _load(archive: zipfile.ZipFile, info: zipfile.ZipInfo, path: Path) -> npt.NDArray[Any]:
    """One member, its size checked against its header before anything is allocated."""
    name = info.filename.removesuffix(".npy")
    if info.file_size > _LIMIT:
        raise InputError(f"array {name!r} claims more than 4 GB", path)
    with archive.open(info) as stream:
        try:
            version = np.lib.format.read_magic(stream)
            header = (
                np.lib.format.read_array_header_1_0
                if version == (1, 0)
                else np.lib.format.read_array_header_2_0
            )
            shape, _, dtype = header(stream)
        except ValueError as error:
            raise InputError(f"array {name!r} is not in NumPy's format: {error}", path) from None
        if dtype.hasobject:
            raise InputError(f"array {name!r} holds Python objects; save plain numbers", path)
        size = int(np.prod(shape, dtype=object)) * dtype.itemsize if shape else dtype.itemsize
        if stream.tell() + size != info.file_size:
            raise InputError(f"array {name!r} is not as long as its header says", path)
    with archive.open(info) as stream:
        array: npt.NDArray[Any] = np.load(io.BytesIO(stream.read()), allow_pickle=False)
    return array


def _numbers(name: str, array: npt.NDArray[Any], path: Path) -> tuple[Floats, Floats]:
    if array.dtype.kind != "f" or array.dtype.itemsize not in (4, 8):
        if array.dtype.kind in "iu" and name == "time":
            return array.astype(np.float64), np.zeros(array.shape)
        raise InputError(
            f"array {name!r} has type {array.dtype}; expected float64 (or float32)", path
        )
    return array.astype(np.float64), single_precision(array)


def read(path: str | Path) -> tuple[dict[str, Any], Trajectory]:
    """Metadata and trajectory of an NPZ file.

    Raises
    ------
    InputError
        For anything but plain arrays of the known names; nothing is unpickled.
    """
    path = Path(path)
    try:
        with zipfile.ZipFile(path) as archive:
            infos = archive.infolist()
            names = [i.filename.removesuffix(".npy") for i in infos]
            for name in names:
                if name not in _MEMBERS:
                    raise InputError(
                        f"unknown array {name!r}; known are {', '.join(_MEMBERS)}", path
                    )
                if names.count(name) > 1:
                    raise InputError(f"array {name!r} is there twice", path)
            arrays = {n: _load(archive, i, path) for n, i in zip(names, infos, strict=True)}
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    except (zipfile.BadZipFile, EOFError, ValueError) as error:
        raise InputError(f"is not a readable NPZ archive: {error}", path) from None
    for name in ("time", "position"):
        if name not in arrays:
            raise InputError(f"array {name!r} missing; expected time (n,), position (n, 3)", path)
    metadata = _metadata(arrays.pop("metadata", None), path)
    values: dict[str, Floats] = {}
    quanta: dict[str, Floats] = {}
    for name, array in arrays.items():
        values[name], quanta[name] = _numbers(name, array, path)
    clock = [quanta[n] for n in ("proper_time", "affine") if n in quanta]
    quantisation = Quantisation(
        time=float(quanta["time"].max(initial=0.0)),
        position=quanta["position"],
        velocity=quanta.get("velocity", np.zeros(3)),
        clock=max((float(q.max(initial=0.0)) for q in clock), default=0.0),
    )
    name = str(metadata.get("name", path.stem))
    return metadata, make_trajectory(path, name, values, metadata, quantisation)


def _metadata(array: npt.NDArray[Any] | None, path: Path) -> dict[str, Any]:
    if array is None:
        return {}
    if array.dtype.kind != "U" or array.size != 1:
        raise InputError("array 'metadata' must be one string of TOML", path)
    try:
        return tomllib.loads(str(array.reshape(())[()]))
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"array 'metadata' is not TOML: {error}", path) from None


def write_bytes(metadata: Mapping[str, Any], arrays: Mapping[str, Floats]) -> bytes:
    """The bytes of an NPZ file (member dates fixed, so equal input gives equal bytes)."""
    out = io.BytesIO()
    members: dict[str, npt.NDArray[Any]] = dict(arrays)
    members["metadata"] = np.array("\n".join(dump_toml(metadata)))
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, array in members.items():
            buffer = io.BytesIO()
            np.lib.format.write_array(buffer, array, allow_pickle=False)
            info = zipfile.ZipInfo(f"{name}.npy", date_time=(1980, 1, 1, 0, 0, 0))
            info.compress_type = zipfile.ZIP_DEFLATED
            archive.writestr(info, buffer.getvalue())
    return out.getvalue()
