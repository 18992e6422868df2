"""Trajectory files: one module a format, one entrance for reading and one for writing."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from truefall.validate.errors import InputError

if TYPE_CHECKING:
    from truefall.reference import Orbit, States
    from truefall.validate.orbit_file import OrbitSpec
    from truefall.validate.streaming.rows import Rows
    from truefall.validate.trajectory import Trajectory

__all__ = [
    "SUFFIXES",
    "long_rows",
    "losses",
    "read_trajectories",
    "read_trajectory",
    "suffix_of",
    "write_states",
    "write_trajectory",
]

#: File name suffix to format.
SUFFIXES = {
    ".csv": "csv", ".h5": "hdf5", ".hdf5": "hdf5", ".npz": "npz", ".parquet": "parquet",
    ".oem": "oem",
}  # fmt: skip


#: Files below this size are read into memory as a whole.
_LONG_BYTES = 1 << 20


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
    from truefall.validate.formats.files import check_readable

    kind = suffix_of(path)
    check_readable(path)
    if kind == "hdf5":
        from truefall.validate.formats import hdf5_read

        return hdf5_read.read_all(path)
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
        If the file cannot be used or metadata are missing; a wrong key or value names the file
        that it stands in.
    """
    path = Path(path)
    before = _layers_before(overrides, orbit_file)
    raw = _read_raw(path)
    found = []
    for own, trajectory in raw:
        merged = _complete(path, before, own, need_metadata)
        found.append(replace(trajectory, metadata=merged))
    return found


def _layers_before(
    overrides: Mapping[str, Any] | None, orbit_file: str | Path | None
) -> list[dict[str, Any]]:
    """What wins over the file's own metadata."""
    before = [dict(overrides or {})]
    if orbit_file is not None:
        before.append(_layer(Path(orbit_file)))
    return before


def _complete(
    path: Path, before: list[dict[str, Any]], own: dict[str, Any], need_metadata: bool = True
) -> dict[str, Any]:
    """Metadata of a trajectory, from all layers."""
    from truefall.validate.orbit_file import check_layer, merge, parse_orbit

    sidecar = path.with_suffix(".toml")
    after = [_layer(sidecar)] if sidecar.is_file() else []
    check_layer(own, path)
    merged = merge(*before, own, *after)
    if need_metadata:
        parse_orbit(merged, path, need_start=False)
    return merged


@contextmanager
def long_rows(
    path: str | Path,
    *,
    overrides: Mapping[str, Any] | None = None,
    orbit_file: str | Path | None = None,
) -> Iterator[list[Rows]]:
    """The trajectories of a long file, to be read block by block; none for a short file.

    Raises
    ------
    InputError
        As :func:`read_trajectories`.
    """
    from truefall.validate.formats.files import check_readable

    path = Path(path)
    kind = suffix_of(path)
    check_readable(path)
    if path.stat().st_size < _LONG_BYTES or kind not in ("hdf5", "csv"):
        yield []
        return
    before = _layers_before(overrides, orbit_file)

    def complete(own: dict[str, Any]) -> dict[str, Any]:
        return _complete(path, before, own)

    with ExitStack() as stack:
        found: list[Rows] = []
        if kind == "hdf5":
            from truefall.validate.streaming.hdf5_rows import open_rows

            found += [stack.enter_context(part) for part in open_rows(path, complete)]
        else:
            from truefall.validate.streaming.csv_rows import open_csv

            rows = open_csv(path, complete)
            found += [] if rows is None else [rows]
        yield found


def read_trajectory(
    path: str | Path,
    *,
    trajectory: str | None = None,
    overrides: Mapping[str, Any] | None = None,
    orbit_file: str | Path | None = None,
) -> Trajectory:
    """The one trajectory of a file, or the one of the given name.

    Raises
    ------
    InputError
        Also if the file holds several and none is named, listing their names.
    """
    found = read_trajectories(path, overrides=overrides, orbit_file=orbit_file)
    names = ", ".join(t.name for t in found)
    if trajectory is not None:
        found = [t for t in found if t.name == trajectory]
        if not found:
            raise InputError(f"holds {names}; none of them is called {trajectory!r}", path)
    if len(found) > 1:
        raise InputError(f"holds {len(found)} trajectories ({names}): name one of them", path)
    return found[0]


def _layer(path: Path) -> dict[str, Any]:
    """An orbit file or sidecar as a layer of metadata: what it says of samples is its own."""
    from truefall.validate.orbit_file import check_layer, read_mapping

    mapping = read_mapping(path)
    check_layer(mapping, path)
    return {k: v for k, v in mapping.items() if k not in ("samples", "case", "name")}


def losses(path: str | Path, trajectory: Trajectory) -> list[str]:
    """What writing a trajectory to ``path`` would leave out, a sentence each; empty if nothing."""
    kind = suffix_of(path)
    found = []
    stored = trajectory.stored
    if kind != "hdf5" and stored is not None and (stored.arrays or stored.invariants):
        found.append("second words, proven bounds and invariants are kept in HDF5 only")
    if kind == "oem":
        kept = ("proper_time", "coordinate_time", "affine")
        gone = [name for name in kept if getattr(trajectory, name) is not None]
        if gone:
            found.append(f"an OEM has no column for {', '.join(gone)}")
        found.append("an OEM keeps 16 digits of positions and velocities")
        found.append(
            "an OEM names no gm, chart, clock, particle or start: keep them in a sidecar "
            f"({Path(path).with_suffix('.toml').name}) or give them as options"
        )
        if len(trajectory) > 1 and trajectory.time[1] < trajectory.time[0]:
            found.append("an OEM runs forwards in time: the rows are reversed")
    return found


def _write(
    path: Path,
    metadata: Mapping[str, Any],
    series: Mapping[str, Any],
    invariants: Mapping[str, tuple[float, float | None, float]],
    reproducible: bool,
) -> None:
    from truefall.validate.formats.assemble import columns_of
    from truefall.validate.formats.files import creation_date, producer, replace_file
    from truefall.validate.formats.metadata import flatten
    from truefall.validate.trajectory import SERIES

    kind = suffix_of(path)
    created = creation_date(reproducible)
    plain = {k: v for k, v in series.items() if k in SERIES}
    if kind == "hdf5":
        from truefall.validate.formats import hdf5_write

        group, attributes = _group_name(metadata, path), flatten(_with_state(metadata, path))
        if group != metadata.get("name", group) and str(metadata["name"]).isascii():
            attributes["name"] = metadata["name"]
        replace_file(
            path,
            lambda p: hdf5_write.write(
                p, group, attributes, series, invariants=invariants, created=created,
                producer=producer(),
            ),
        )  # fmt: skip
        return
    if kind == "parquet":
        from truefall.validate.formats import parquet_format

        replace_file(path, lambda p: parquet_format.write(p, metadata, columns_of(plain)))
        return
    if kind == "csv":
        from truefall.validate.formats import csv_format

        data = csv_format.write_rows(metadata, columns_of(plain))
    elif kind == "npz":
        from truefall.validate.formats import npz_format

        data = npz_format.write_bytes(metadata, plain)
    else:
        from truefall.validate.formats import oem_format

        data = oem_format.text(
            path, metadata, plain["position"], plain.get("velocity"), plain["time"], created
        )
    replace_file(path, lambda p: _put(p, data))


def _with_state(metadata: Mapping[str, Any], path: Path) -> Mapping[str, Any]:
    """Metadata whose start has position and velocity beside its elements, for other readers."""
    from truefall.validate.orbit_file import parse_orbit

    start = metadata.get("start", {})
    if "semilatus_rectum" not in start:
        return metadata
    orbit = parse_orbit({k: v for k, v in metadata.items() if k != "samples"}, path).orbit()
    state = {"position": list(orbit.position), "velocity": list(orbit.velocity)}
    return {**metadata, "start": {**start, **state}}


def _put(path: Path, data: bytes) -> None:
    path.write_bytes(data)


def _group_name(metadata: Mapping[str, Any], path: Path) -> str:
    """The trajectory's name as HDF5 allows it: no slash, and neither "." nor ".."."""
    name = str(metadata.get("name", path.stem)).replace("/", "-")
    return name.replace(".", "-") if set(name) <= {"."} else name


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

    Parameters
    ----------
    extra : mapping
        Further metadata: ``ends_at``, ``end_reason``.
    certified : bool
        Second words beside the bounds (HDF5).
    reproducible : bool
        A fixed date, so that repeated writing gives the same bytes.

    Raises
    ------
    InputError
        If the file cannot be written; nothing is left behind.
    """
    # the start as it was given: a light ray's direction or elements rounded to a position and a
    # velocity would be another orbit, no longer exactly critical or circular
    start: dict[str, Any] = {"time": spec.start_time, **(spec.elements or {})}
    if spec.elements is None:
        start |= {"position": list(orbit.position), "velocity": list(orbit.velocity)}
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
    if certified:
        for name in ("azimuth", "azimuth_low", "azimuth_bound"):
            series[name] = getattr(states, name)
    _write(Path(path), metadata, series, _invariants(orbit, certified), reproducible)


def _invariants(orbit: Orbit, certified: bool) -> dict[str, tuple[float, float | None, float]]:
    names = (
        "energy", "energy_minus_one", "angular_momentum", "periapsis", "apoapsis",
        "radial_period", "proper_radial_period", "azimuth_per_radial_period",
    )  # fmt: skip
    found: dict[str, tuple[float, float | None, float]] = {}
    for name in names:
        value = getattr(orbit, name)
        if value is not None:
            found[name] = (value.value, value.low if certified else None, value.bound)
    return found


def write_trajectory(
    path: str | Path, trajectory: Trajectory, *, reproducible: bool = False
) -> None:
    """Write a trajectory as read; :func:`losses` tells what a format cannot keep.

    Raises
    ------
    InputError
        If the file cannot be written; nothing is left behind.
    """
    series: dict[str, Any] = {"time": trajectory.time}
    for key in ("position", "velocity", "proper_time", "coordinate_time", "affine"):
        values = getattr(trajectory, key)
        if values is not None:
            series[key] = values
    stored = trajectory.stored
    if stored is not None:
        series |= stored.arrays
    metadata = {"name": trajectory.name, **trajectory.metadata}
    _write(Path(path), metadata, series, {} if stored is None else stored.invariants, reproducible)
