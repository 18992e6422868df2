"""Trajectory files: one module a format, one entrance for reading and one for writing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.reference import Orbit, States
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.trajectory import Trajectory

__all__ = ["SUFFIXES", "read_trajectories", "suffix_of", "write_states", "write_trajectory"]

#: File name suffix to format.
SUFFIXES = {
    ".csv": "csv", ".h5": "hdf5", ".hdf5": "hdf5", ".npz": "npz", ".parquet": "parquet",
    ".oem": "oem",
}  # fmt: skip


def suffix_of(path: str | Path) -> str:
    """The format of a file by its suffix.

    Raises
    ------
    InputError
        For a suffix that is not known.
    """
    kind = SUFFIXES.get(Path(path).suffix.lower())
    if kind is None:
        raise InputError(
            f"has the suffix {Path(path).suffix!r}; known are {', '.join(SUFFIXES)}", path
        )
    return kind


def _read_raw(path: Path) -> list[tuple[dict[str, Any], Trajectory]]:
    kind = suffix_of(path)
    if path.is_dir():
        raise InputError("is a folder; name a file", path)
    if not path.exists():
        raise InputError("there is no such file", path)
    if kind == "hdf5":
        from truefall.validate.formats import hdf5_format

        return hdf5_format.read_all(path)
    if kind == "csv":
        from truefall.validate.formats import csv_format

        return [csv_format.read(path)]
    if kind == "npz":
        from truefall.validate.formats import npz_format

        return [npz_format.read(path)]
    if kind == "parquet":
        from truefall.validate.formats import parquet_format

        return [parquet_format.read(path)]
    from truefall.validate.formats import oem_format

    return [oem_format.read(path)]


def read_trajectories(
    path: str | Path,
    *,
    overrides: Mapping[str, Any] | None = None,
    orbit_file: str | Path | None = None,
    need_metadata: bool = True,
) -> list[Trajectory]:
    """All trajectories of a file, with their metadata complete.

    Precedence, key by key: ``overrides`` (options), ``orbit_file``, the file itself, its
    sidecar (the same name with suffix .toml).

    Raises
    ------
    InputError
        If the file cannot be used or metadata are missing.
    """
    from truefall.validate.orbit_file import merge, parse_orbit, read_mapping

    path = Path(path)
    raw = _read_raw(path)
    sidecar = path.with_suffix(".toml")
    layers_before = [dict(overrides or {})]
    if orbit_file is not None:
        layers_before.append(_without_samples(read_mapping(orbit_file)))
    layers_after = [_without_samples(read_mapping(sidecar))] if sidecar.is_file() else []
    found = []
    for own, trajectory in raw:
        merged = merge(*layers_before, own, *layers_after)
        if need_metadata:
            parse_orbit(merged, path, need_start=False)
        found.append(replace(trajectory, metadata=merged))
    return found


def _without_samples(mapping: Mapping[str, Any]) -> dict[str, Any]:
    return {k: v for k, v in mapping.items() if k not in ("samples", "case", "name")}


def _columns(series: Mapping[str, Any]) -> dict[str, Any]:
    from truefall.validate.trajectory import VECTORS

    columns: dict[str, Any] = {}
    for key, values in series.items():
        if key.endswith(("_low", "_bound")):
            continue
        if key in VECTORS:
            columns |= {name: values[:, k] for k, name in enumerate(VECTORS[key])}
        else:
            columns[key] = values
    return columns


def _write(
    path: Path,
    metadata: Mapping[str, Any],
    series: Mapping[str, Any],
    invariants: Mapping[str, tuple[float, float, float]] | None,
    certified: bool,
    reproducible: bool,
) -> None:
    from truefall.validate.formats.files import replace_file
    from truefall.validate.formats.hdf5_format import _created

    kind = suffix_of(path)
    plain = {k: v for k, v in series.items() if not k.endswith(("_low", "_bound"))}
    if kind == "hdf5":
        from truefall.validate.formats import hdf5_format

        name = str(metadata.get("name", path.stem)).replace("/", "-").replace(".", "-")
        attributes = _flat(metadata)
        replace_file(
            path,
            lambda p: hdf5_format.write(
                p, name, attributes, series, invariants=invariants, certified=certified,
                reproducible=reproducible,
            ),
        )  # fmt: skip
        return
    if kind == "parquet":
        from truefall.validate.formats import parquet_format

        replace_file(path, lambda p: parquet_format.write(p, metadata, _columns(plain)))
        return
    if kind == "csv":
        from truefall.validate.formats import csv_format

        data = csv_format.write_rows(metadata, _columns(plain))
    elif kind == "npz":
        from truefall.validate.formats import npz_format

        data = npz_format.write_bytes(metadata, plain)
    else:
        from truefall.validate.formats import oem_format

        data = oem_format.text(
            path, metadata, plain["position"], plain.get("velocity"), plain["time"],
            _created(reproducible),
        )  # fmt: skip
    replace_file(path, lambda p: _put(p, data))


def _put(path: Path, data: bytes) -> None:
    path.write_bytes(data)


def _flat(metadata: Mapping[str, Any]) -> dict[str, Any]:
    """Metadata as HDF5 attributes: start.position becomes start_position."""
    flat = {k: v for k, v in metadata.items() if k not in ("start", "budget", "name", "producer")}
    for key, value in dict(metadata.get("start", {})).items():
        flat[f"start_{key}"] = value
    return flat


def write_states(
    path: str | Path,
    spec: OrbitSpec,
    orbit: Orbit,
    states: States,
    *,
    extra: Mapping[str, Any] | None = None,
    certified: bool = False,
    reproducible: bool = False,
) -> None:
    """Write the reference trajectory of an orbit; format by suffix.

    Raises
    ------
    InputError
        If the file cannot be written; nothing is left behind.
    """
    start: dict[str, Any] = {"time": spec.start_time}
    start["position"] = list(orbit.position)
    start["velocity"] = list(orbit.velocity_used)
    metadata: dict[str, Any] = {
        "name": spec.name, "system": spec.system, "gm": spec.gm, "particle": spec.particle,
        "chart": spec.chart, "clock": spec.clock, "start": start,
        "orbit_class": orbit.orbit_class,
    }  # fmt: skip
    metadata |= extra or {}
    series: dict[str, Any] = {"time": states.time}
    for key in ("position", "velocity", "proper_time", "coordinate_time", "affine"):
        values = getattr(states, key)
        if values is None:
            continue
        series[key] = values
        series[key + "_bound"] = getattr(states, key + "_bound")
        if certified:
            series[key + "_low"] = getattr(states, key + "_low")
    _write(Path(path), metadata, series, _invariants(orbit), certified, reproducible)


def _invariants(orbit: Orbit) -> dict[str, tuple[float, float, float]]:
    names = (
        "energy", "energy_minus_one", "angular_momentum", "periapsis", "apoapsis",
        "radial_period", "proper_radial_period", "azimuth_per_radial_period",
    )  # fmt: skip
    found = {}
    for name in names:
        value = getattr(orbit, name)
        if value is not None:
            found[name] = (value.value, value.low, value.bound)
    return found


def write_trajectory(
    path: str | Path, trajectory: Trajectory, *, reproducible: bool = False
) -> None:
    """Write a trajectory as read, second words and bounds included where the format has them."""
    series: dict[str, Any] = {"time": trajectory.time}
    for key in ("position", "velocity", "proper_time", "coordinate_time", "affine"):
        values = getattr(trajectory, key)
        if values is not None:
            series[key] = values
    certified = False
    if trajectory.stored is not None:
        series |= trajectory.stored.arrays
        certified = any(k.endswith("_low") for k in trajectory.stored.arrays)
    metadata = {"name": trajectory.name, **trajectory.metadata}
    _write(Path(path), metadata, series, None, certified, reproducible)
