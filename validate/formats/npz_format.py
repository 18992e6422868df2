"""NPZ: arrays time, position, velocity, clocks, and a string array ``metadata`` (TOML)."""

from __future__ import annotations

import io
import tomllib
import zipfile
import zlib
from collections.abc import Mapping
from math import prod
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import make_trajectory, single_precision
from truefall.validate.formats.metadata import dump_toml
from truefall.validate.trajectory import SERIES, Trajectory

__all__ = ["read", "write_bytes"]

_MEMBERS = (*SERIES, "metadata")
_LIMIT = 1 << 31
_METADATA_LIMIT = 1 << 20
_EXACT_INTEGERS = 1 << 53

Floats = npt.NDArray[np.float64]


def _header(stream: Any, name: str, path: Path) -> tuple[tuple[int, ...], bool, np.dtype[Any]]:
    try:
        version = np.lib.format.read_magic(stream)
        if version == (1, 0):
            return np.lib.format.read_array_header_1_0(stream)
        if version == (2, 0):
            return np.lib.format.read_array_header_2_0(stream)
    except (ValueError, SyntaxError, TypeError, RecursionError) as error:
        text = str(error).splitlines()[0][:100]
        raise InputError(f"array {name!r} is not in NumPy's format ({text})", path) from None
    raise InputError(f"array {name!r} is in version {version} of NumPy's format", path)


def _load(archive: zipfile.ZipFile, info: zipfile.ZipInfo, path: Path) -> npt.NDArray[Any]:
    """One member, its size checked against its header before anything is allocated."""
    name = info.filename.removesuffix(".npy")
    with archive.open(info) as stream:
        shape, fortran, dtype = _header(stream, name, path)
        if dtype.hasobject:
            raise InputError(f"array {name!r} holds Python objects; save plain numbers", path)
        size = prod(shape) * dtype.itemsize
        if any(extent < 0 for extent in shape) or stream.tell() + size != info.file_size:
            raise InputError(f"array {name!r} is not as long as its header says", path)
        if dtype.kind not in "fiuSU":
            raise InputError(f"array {name!r} has type {dtype}; expected float64", path)
        if name == "metadata" and size > _METADATA_LIMIT:
            raise InputError("array 'metadata' is larger than 1 MB", path)
        flat = np.frombuffer(stream.read(size), dtype=dtype) if size else np.empty(0, dtype)
    return flat.reshape(shape, order="F" if fortran else "C")


def _numbers(name: str, array: npt.NDArray[Any], path: Path) -> tuple[Floats, Floats]:
    """Values as float64, and half a unit in the last place of what was stored."""
    if array.dtype.kind in "iu":
        if array.size and max(abs(int(array.max())), abs(int(array.min()))) > _EXACT_INTEGERS:
            raise InputError(f"array {name!r} has whole numbers beyond 2^53; save float64", path)
        return array.astype(np.float64), np.zeros(array.shape)
    if array.dtype.kind != "f" or array.dtype.itemsize not in (4, 8):
        raise InputError(
            f"array {name!r} has type {array.dtype}; expected float64 (or float32)", path
        )
    return array.astype(np.float64), single_precision(name, array)


def _members(archive: zipfile.ZipFile, path: Path) -> dict[str, zipfile.ZipInfo]:
    found: dict[str, zipfile.ZipInfo] = {}
    for info in archive.infolist():
        name = info.filename.removesuffix(".npy")
        if name not in _MEMBERS:
            raise InputError(f"unknown array {name!r}; known are {', '.join(_MEMBERS)}", path)
        if name in found:
            raise InputError(f"array {name!r} is there twice", path)
        found[name] = info
    for name in ("time", "position"):
        if name not in found:
            raise InputError(f"array {name!r} missing; expected time (n,), position (n, 3)", path)
    if sum(info.file_size for info in found.values()) > _LIMIT:
        raise InputError("claims more than 2 GB; use HDF5 for trajectories of that size", path)
    return found


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
            members = _members(archive, path)
            arrays = {name: _load(archive, info, path) for name, info in members.items()}
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", path) from None
    except (zipfile.BadZipFile, EOFError, ValueError, RuntimeError, zlib.error) as error:
        # RuntimeError: encrypted members, and compression that zipfile does not know
        raise InputError(f"is not a readable NPZ archive ({error})", path) from None
    metadata = _metadata(arrays.pop("metadata", None), path)
    values: dict[str, Floats] = {}
    quanta: dict[str, Floats] = {}
    for name, array in arrays.items():
        values[name], quanta[name] = _numbers(name, array, path)
    name = str(metadata.get("name", path.stem))
    return metadata, make_trajectory(path, name, values, quanta, metadata)


def _metadata(array: npt.NDArray[Any] | None, path: Path) -> dict[str, Any]:
    if array is None:
        return {}
    if array.dtype.kind not in "SU" or array.size != 1:
        raise InputError("array 'metadata' must be one string of TOML", path)
    single: Any = array.reshape(())[()]
    try:
        return tomllib.loads(single.decode() if isinstance(single, bytes) else str(single))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, RecursionError) as error:
        raise InputError(f"array 'metadata' is not TOML: {error}", path) from None


def write_bytes(metadata: Mapping[str, Any], arrays: Mapping[str, Floats]) -> bytes:
    """The bytes of an NPZ file (member dates fixed, so equal input gives equal bytes)."""
    out = io.BytesIO()
    members: dict[str, npt.NDArray[Any]] = dict(arrays)
    members["metadata"] = np.array("\n".join(dump_toml(metadata)))
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, array in members.items():
            buffer = io.BytesIO()
            np.lib.format.write_array(buffer, np.ascontiguousarray(array), allow_pickle=False)
            info = zipfile.ZipInfo(f"{name}.npy", date_time=(1980, 1, 1, 0, 0, 0))
            info.compress_type = zipfile.ZIP_DEFLATED
            archive.writestr(info, buffer.getvalue())
    return out.getvalue()
