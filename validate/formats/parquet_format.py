"""Parquet: float64 columns of the CSV names, metadata as TOML under the key ``truefall``."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import check_columns, make_trajectory, single_precision
from truefall.validate.formats.csv_format import dump_toml
from truefall.validate.trajectory import VECTORS, Quantisation, Trajectory

__all__ = ["read", "write"]

_MAX_ROWS = 200_000_000
Floats = npt.NDArray[np.float64]


def _pyarrow() -> Any:
    try:
        import pyarrow.parquet
    except ImportError:
        raise InputError(
            "Parquet files need pyarrow, which is not installed; pip install 'truefall[parquet]', "
            "or use .h5, .npz or .csv"
        ) from None
    return pyarrow


def read(path: str | Path) -> tuple[dict[str, Any], Trajectory]:
    """Metadata and trajectory of a Parquet file."""
    path = Path(path)
    arrow = _pyarrow()
    try:
        with arrow.parquet.ParquetFile(path) as file:
            if file.metadata.num_rows > _MAX_ROWS:
                raise InputError(f"claims {file.metadata.num_rows} rows", path)
            names = file.schema_arrow.names
            check_columns(list(names), path)
            raw = (file.schema_arrow.metadata or {}).get(b"truefall", b"")
            table = file.read(columns=list(names))
    except (OSError, arrow.ArrowException) as error:
        text = str(error).splitlines()[0][:120]
        raise InputError(f"is not a readable Parquet file: {text}", path) from None
    columns: dict[str, Floats] = {}
    quanta: dict[str, Floats] = {}
    for name in names:
        column = table.column(name)
        if column.null_count:
            raise InputError(f"column {name!r} has {column.null_count} empty entries", path)
        if str(column.type) not in ("double", "float"):
            raise InputError(f"column {name!r} has type {column.type}; expected double", path)
        values = column.to_numpy()
        columns[name] = values.astype(np.float64)
        quanta[name] = single_precision(values)
    try:
        metadata = tomllib.loads(raw.decode())
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(
            f"the metadata under the key 'truefall' are not TOML: {error}", path
        ) from None
    arrays = {"time": columns["time"]}
    for vector, parts in VECTORS.items():
        if parts[0] in columns:
            arrays[vector] = np.column_stack([columns[p] for p in parts])
    arrays |= {k: columns[k] for k in ("proper_time", "coordinate_time", "affine") if k in columns}
    quantisation = Quantisation(
        time=float(quanta["time"].max(initial=0.0)),
        position=np.column_stack([quanta[p] for p in VECTORS["position"]]),
        velocity=np.column_stack([quanta[p] for p in VECTORS["velocity"]])
        if "vx" in quanta
        else np.zeros(3),
    )
    name = str(metadata.get("name", path.stem))
    return metadata, make_trajectory(path, name, arrays, metadata, quantisation)


def write(path: Path, metadata: Mapping[str, Any], columns: Mapping[str, Floats]) -> None:
    """Write float64 columns and metadata."""
    arrow = _pyarrow()
    table = arrow.table({k: arrow.array(v) for k, v in columns.items()})
    text = "\n".join(dump_toml(metadata)).encode()
    arrow.parquet.write_table(table.replace_schema_metadata({b"truefall": text}), path)
