"""HDF5 result sets: the layout of the documentation, written to last and read with care."""

from __future__ import annotations

import datetime
import hashlib
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import make_trajectory, single_precision
from truefall.validate.formats.hdf5_guard import GuardedFile
from truefall.validate.trajectory import Quantisation, StoredReference, Trajectory

__all__ = ["FORMAT", "FORMAT_VERSION", "read_all", "write"]

FORMAT, FORMAT_VERSION = "truefall-result-set", "1"
_SERIES = ("position", "velocity", "proper_time", "coordinate_time", "affine")
_STRINGS = ("system", "particle", "chart", "clock", "orbit_class", "end_reason", "name")
_NUMBERS = ("gm", "start_time", "ends_at")
_VECTORS = ("start_position", "start_velocity")
_CHUNK_ROWS = 8192

Floats = npt.NDArray[np.float64]


def _metadata(file: GuardedFile, group: Any, name: str) -> dict[str, Any]:
    found = file.attributes(group, (*_STRINGS, *_NUMBERS, *_VECTORS))
    start: dict[str, Any] = {}
    for key in ("start_time", "start_position", "start_velocity"):
        if key in found:
            start[key.removeprefix("start_")] = found.pop(key)
    if start:
        found["start"] = start
    found.setdefault("name", name)
    return found


def _trajectory(file: GuardedFile, group: Any, name: str) -> tuple[dict[str, Any], Trajectory]:
    raw = {key: file.numbers(group, key) for key in ("time", *_SERIES)}
    for key in ("time", "position"):
        if raw[key] is None:
            raise InputError(f"{group.name} has no dataset {key!r}", file.path)
    arrays = {k: v.astype(np.float64) for k, v in raw.items() if v is not None}
    quanta = {k: single_precision(v) for k, v in raw.items() if v is not None}
    stored: dict[str, Floats] = {}
    for key in arrays:
        for suffix in ("_low", "_bound"):
            values = file.numbers(group, key + suffix)
            if values is None:
                continue
            if values.shape != arrays[key].shape:
                raise InputError(
                    f"{group.name}/{key}{suffix} has not the shape of {key}", file.path
                )
            if suffix == "_bound" and not np.all(values >= 0):
                raise InputError(f"{group.name}/{key}_bound is negative or not a number", file.path)
            stored[key + suffix] = values.astype(np.float64)
    metadata = _metadata(file, group, name)
    clock = [q for k, q in quanta.items() if k in ("proper_time", "affine")]
    quantisation = Quantisation(
        time=float(quanta["time"].max(initial=0.0)),
        position=quanta["position"],
        velocity=quanta.get("velocity", np.zeros(3)),
        clock=max((float(q.max(initial=0.0)) for q in clock), default=0.0),
    )
    reference = StoredReference(stored) if stored else None
    return metadata, make_trajectory(file.path, name, arrays, metadata, quantisation, reference)


def read_all(path: str | Path) -> list[tuple[dict[str, Any], Trajectory]]:
    """Metadata and trajectory of every group under ``/trajectory``.

    Raises
    ------
    InputError
        For files that cannot be opened, are damaged, or hold anything but plain numbers.
    """
    with GuardedFile(path) as file:
        holder = file.group(file.root, "trajectory")
        if holder is None:
            raise InputError(
                "has no group /trajectory; expected /trajectory/<name>/ with datasets time (n,), "
                "position (n, 3), ...",
                path,
            )
        found = []
        for name in file.children(holder):
            group = file.group(holder, name)
            if group is None:
                raise InputError(f"/trajectory/{name} is not a group", path)
            found.append(_trajectory(file, group, name))
    if not found:
        raise InputError("holds no trajectory", path)
    return found


def _text(value: str) -> np.bytes_:
    """Fixed-length ASCII with a NUL: the only string that C and Fortran read without care."""
    return np.bytes_(value.encode("ascii", "replace") + b"\0")


def _units(system: str) -> dict[str, str]:
    from truefall.reference.units import SYSTEM

    unit = SYSTEM[system]
    return {
        "position": unit.length,
        "velocity": unit.speed,
        "affine": unit.length,
        "time": unit.time,
        "proper_time": unit.time,
        "coordinate_time": unit.time,
        "energy": "1",
        "energy_minus_one": "1",
        "angular_momentum": unit.momentum,
        "periapsis": unit.length,
        "apoapsis": unit.length,
        "radial_period": unit.time,
        "proper_radial_period": unit.time,
        "azimuth_per_radial_period": "rad",
    }


def _created(reproducible: bool) -> str:
    epoch = os.environ.get("SOURCE_DATE_EPOCH")
    if reproducible and epoch is None:
        epoch = "0"
    moment = (
        datetime.datetime.fromtimestamp(int(epoch), datetime.UTC)
        if epoch
        else datetime.datetime.now(datetime.UTC)
    )
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


class _Writer:
    """Writes datasets and keeps the running digest of what they hold."""

    def __init__(self, group: Any, system: str) -> None:
        self.group, self.units = group, _units(system)
        self.digest = hashlib.sha256()

    def dataset(self, name: str, values: Floats, long_name: str) -> Any:
        values = np.ascontiguousarray(values, dtype="<f8")
        chunks = (min(len(values), _CHUNK_ROWS), *values.shape[1:])
        dataset = self.group.create_dataset(
            name,
            data=values,
            chunks=chunks,
            compression="gzip",
            compression_opts=4,
            shuffle=True,
            fletcher32=True,
            track_times=False,
        )
        base = name.removesuffix("_low").removesuffix("_bound")
        if base in self.units:
            dataset.attrs["units"] = _text(self.units[base])
        dataset.attrs["long_name"] = _text(long_name)
        self.feed(name, str(values.shape), values.tobytes())
        return dataset

    def feed(self, *parts: str | bytes) -> None:
        for part in parts:
            data = part.encode() if isinstance(part, str) else part
            self.digest.update(len(data).to_bytes(8, "little"))
            self.digest.update(data)

    def attribute(self, name: str, value: Any) -> None:
        if isinstance(value, str):
            self.group.attrs[name] = _text(value)
        else:
            self.group.attrs[name] = np.asarray(value, dtype="<f8")
        self.feed(name, repr(value))


_LONG = {
    "time": "time stamps on the trajectory's clock",
    "position": "Cartesian position in the chart",
    "velocity": "d position / d (chart time)",
    "proper_time": "proper time since the start",
    "coordinate_time": "chart time since the start",
    "affine": "affine parameter since the start, E = 1",
}


def _write_group(
    holder: Any,
    name: str,
    attributes: Mapping[str, Any],
    series: Mapping[str, Floats],
    invariants: Mapping[str, tuple[float, float, float]],
    certified: bool,
) -> str:
    group = holder.create_group(name)
    writer = _Writer(group, str(attributes["system"]))
    for key, value in attributes.items():
        writer.attribute(key, value)
    time = writer.dataset("time", series["time"], _LONG["time"])
    time.make_scale("time")
    component = group.create_dataset("component", data=np.arange(3, dtype="<i4"))
    component.attrs["long_name"] = _text("Cartesian component: x, y, z")
    component.make_scale("component")
    for key, values in series.items():
        if key == "time":
            continue
        base = key.removesuffix("_low").removesuffix("_bound")
        text = _LONG[base]
        if key.endswith("_low"):
            text = f"second word of {base}: value = {base} + {key}"
        if key.endswith("_bound"):
            text = f"proven bound on the error of {base}, rounded up"
        dataset = writer.dataset(key, values, text)
        dataset.dims[0].attach_scale(time)
        if values.ndim == 2:
            dataset.dims[1].attach_scale(component)
    if invariants:
        scalars = group.create_group("invariants")
        for key, words in invariants.items():
            kept = {"": words[0], "_low": words[1], "_bound": words[2]}
            for suffix, value in kept.items():
                if suffix == "_low" and not certified:
                    continue
                scalar = scalars.create_dataset(key + suffix, data=np.float64(value))
                scalar.attrs["units"] = _text(writer.units[key])
                writer.feed("invariants/" + key + suffix, value.hex())
    return writer.digest.hexdigest()


def write(
    path: Path,
    name: str,
    attributes: Mapping[str, Any],
    series: Mapping[str, Floats],
    *,
    invariants: Mapping[str, tuple[float, float, float]] | None = None,
    certified: bool = False,
    reproducible: bool = False,
    producer: str = "truefall",
) -> None:
    """Write one trajectory as a result set, into ``path`` itself (see :mod:`.files`).

    Parameters
    ----------
    attributes : mapping
        gm, system, particle, chart, clock, start_time, start_position, start_velocity,
        orbit_class, ...; strings or numbers.
    series : mapping
        Datasets by name, ``time`` first.
    invariants : mapping
        Scalars as (value, low, bound).
    """
    import h5py

    with h5py.File(path, "w", libver=("v108", "v110")) as file:
        holder = file.create_group("trajectory")
        digest = _write_group(holder, name, attributes, series, invariants or {}, certified)
        file.attrs["format"] = _text(FORMAT)
        file.attrs["format_version"] = _text(FORMAT_VERSION)
        file.attrs["producer"] = _text(producer)
        file.attrs["created"] = _text(_created(reproducible))
        file.attrs["content_digest"] = _text(f"sha256:{digest}")
    with h5py.File(path, "r") as file:
        stored = file["trajectory"][name]
        for key, values in series.items():
            if not np.array_equal(stored[key][()], values):
                raise OSError(f"{key} did not read back as written")
