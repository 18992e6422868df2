"""Writing HDF5 result sets that C, Fortran, Octave, Julia and xarray read without truefall."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.formats.hdf5_digest import content_digest
from truefall.validate.trajectory import SERIES

__all__ = ["FORMAT", "FORMAT_VERSION", "ascii_text", "put_trajectory", "write"]

FORMAT, FORMAT_VERSION = "truefall-result-set", "1"
_CHUNK_ROWS = 8192
_LONG = {
    "time": "time stamps on the trajectory's clock",
    "position": "Cartesian position in the chart",
    "velocity": "d position / d (chart time)",
    "proper_time": "proper time since the start",
    "coordinate_time": "chart time since the start",
    "affine": "affine parameter since the start, E = 1",
    "azimuth": "angle swept in the orbital plane since the start, not wrapped",
}

Floats = npt.NDArray[np.float64]
Words = tuple[float, float | None, float]


def ascii_text(value: str) -> np.bytes_:
    """Fixed-length ASCII with a NUL: the only string that C and Fortran read without care."""
    return np.bytes_(value.encode("ascii", "backslashreplace") + b"\0")


def _units(system: str) -> dict[str, str]:
    from truefall.reference.units import SYSTEM

    unit = SYSTEM[system]
    plain = unit.length == "1"
    return {
        "position": unit.length,
        "velocity": "1" if plain else f"{unit.length}/{unit.time}",
        "affine": unit.length,
        "time": unit.time,
        "proper_time": unit.time,
        "coordinate_time": unit.time,
        "energy": "1",
        "energy_minus_one": "1",
        "angular_momentum": "1" if plain else f"{unit.length}2/{unit.time}",
        "periapsis": unit.length,
        "apoapsis": unit.length,
        "radial_period": unit.time,
        "proper_radial_period": unit.time,
        "azimuth_per_radial_period": "rad",
        "azimuth": "rad",
    }


def _base(name: str) -> str:
    return name.removesuffix("_low").removesuffix("_bound")


def _long_name(name: str) -> str:
    base = _base(name)
    if name.endswith("_low"):
        return f"second word of {base}: value = {base} + {name}"
    if name.endswith("_bound"):
        return f"proven bound on the error of {base}, rounded up"
    return _LONG[base]


def _attributes(group: Any, attributes: Mapping[str, Any]) -> None:
    for key, value in sorted(attributes.items()):
        if isinstance(value, str):
            group.attrs[key] = ascii_text(value)
        else:
            group.attrs[key] = np.asarray(value, dtype="<f8")


def _dataset(group: Any, name: str, values: Floats, unit: str) -> Any:
    values = np.ascontiguousarray(values, dtype="<f8")
    dataset = group.create_dataset(
        name,
        data=values,
        chunks=(min(len(values), _CHUNK_ROWS), *values.shape[1:]),
        compression="gzip",
        compression_opts=4,
        shuffle=True,
        fletcher32=True,
        track_times=False,
    )
    dataset.attrs["units"] = ascii_text(unit)
    dataset.attrs["long_name"] = ascii_text(_long_name(name))
    return dataset


def _series(group: Any, series: Mapping[str, Floats], units: Mapping[str, str]) -> None:
    time = _dataset(group, "time", series["time"], units["time"])
    time.make_scale("time")
    component = group.create_dataset("component", data=np.arange(3, dtype="<i4"))
    component.attrs["units"] = ascii_text("1")
    component.attrs["long_name"] = ascii_text("Cartesian component: 0 x, 1 y, 2 z")
    component.make_scale("component")
    for name in (
        base + suffix for base in (*SERIES[1:], "azimuth") for suffix in ("", "_low", "_bound")
    ):
        if name not in series:
            continue
        values = series[name]
        dataset = _dataset(group, name, values, units[_base(name)])
        dataset.dims[0].attach_scale(time)
        if values.ndim == 2:
            dataset.dims[1].attach_scale(component)


def _invariants(group: Any, invariants: Mapping[str, Words], units: Mapping[str, str]) -> None:
    inner = group.create_group("invariants")
    for name, words in sorted(invariants.items()):
        for suffix, value in zip(("", "_low", "_bound"), words, strict=True):
            if value is None:
                continue
            scalar = inner.create_dataset(name + suffix, data=np.float64(value))
            scalar.attrs["units"] = ascii_text(units.get(name, "1"))


def put_trajectory(
    holder: Any,
    name: str,
    attributes: Mapping[str, Any],
    series: Mapping[str, Floats],
    invariants: Mapping[str, Words],
) -> None:
    """Make the group of one trajectory in an open file; see :func:`write`.

    ``series`` may be empty, for a trajectory of which there are words only.
    """
    units = _units(str(attributes["system"]))
    group = holder.create_group(name)
    _attributes(group, attributes)
    if series:
        _series(group, series, units)
    if invariants:
        _invariants(group, invariants, units)


def write(
    path: Path,
    name: str,
    attributes: Mapping[str, Any],
    series: Mapping[str, Floats],
    *,
    invariants: Mapping[str, Words],
    created: str,
    producer: str,
) -> None:
    """Write one trajectory as a result set, into ``path`` itself (see :mod:`.files`).

    Parameters
    ----------
    attributes : mapping
        gm, system, particle, chart, clock, start_time, start_position, start_velocity,
        orbit_class, ...; strings, numbers or lists of numbers.
    series : mapping
        Datasets by name: ``time`` (n,), ``position`` (n, 3), ..., with their ``_low`` and
        ``_bound``.
    invariants : mapping
        Scalars as (value, second word or None, bound).

    Raises
    ------
    OSError
        If the file cannot be written or does not read back as it was meant.
    """
    import h5py

    with h5py.File(path, "w", libver=("v108", "v110")) as file:
        put_trajectory(file.create_group("trajectory"), name, attributes, series, invariants)
        file.attrs["format"] = ascii_text(FORMAT)
        file.attrs["format_version"] = ascii_text(FORMAT_VERSION)
        file.attrs["producer"] = ascii_text(producer)
        file.attrs["created"] = ascii_text(created)
        file.attrs["content_digest"] = ascii_text(content_digest(file))
    with h5py.File(path, "r") as file:
        stored = file["trajectory"][name]
        for key, values in series.items():
            if not np.array_equal(stored[key][()], values):
                raise OSError(f"{key} did not read back as written")
        if file.attrs["content_digest"].rstrip(b"\0").decode() != content_digest(file):
            raise OSError("the content digest changed on reading back")
