"""Parquet: float64 columns of the CSV names, metadata as TOML under the key ``truefall``."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import (
    arrays_of,
    check_columns,
    make_trajectory,
    single_precision,
)
from truefall.validate.formats.metadata import dump_toml
from truefall.validate.trajectory import Trajectory

__all__ = ["read", "write"]

_MAX_NUMBERS = 1 << 28
_MAX_METADATA = 1 << 20
_BATCH_ROWS = 1 << 16

Floats = npt.NDArray[np.float64]


def _pyarrow(path: Path) -> Any:
    try:
        import pyarrow.parquet
    except ImportError:
        raise InputError(
            "Parquet files need pyarrow, which is not installed; pip install 'truefall[parquet]', "
            "or use .h5, .npz or .csv",
            path,
        ) from None
    return pyarrow


def _read_columns(arrow: Any, path: Path) -> tuple[dict[str, npt.NDArray[Any]], bytes]:
    """Columns as stored, and the metadata; types and sizes are checked before any data."""
    with arrow.parquet.ParquetFile(
        path,
        thrift_string_size_limit=16 * _MAX_METADATA,
        thrift_container_size_limit=_MAX_METADATA,
    ) as file:
        names = list(file.schema_arrow.names)
        check_columns(names, path)
        # counted in numbers: repeated values take next to no bytes in the file
        if file.metadata.num_rows * len(names) > _MAX_NUMBERS:
            raise InputError(f"claims {file.metadata.num_rows} rows, too many to read", path)
        for name in names:
            kind = str(file.schema_arrow.field(name).type)
            if kind not in ("double", "float"):
                raise InputError(f"column {name!r} has type {kind}; expected double", path)
        raw = (file.schema_arrow.metadata or {}).get(b"truefall", b"")
        parts: dict[str, list[npt.NDArray[Any]]] = {name: [] for name in names}
        for batch in file.iter_batches(batch_size=_BATCH_ROWS, columns=names):
            for name in names:
                column = batch.column(name)
                if column.null_count:
                    raise InputError(f"column {name!r} has empty entries", path)
                parts[name].append(column.to_numpy(zero_copy_only=False))
    empty = np.empty(0)
    return {n: np.concatenate(p) if p else empty for n, p in parts.items()}, raw


def read(path: str | Path) -> tuple[dict[str, Any], Trajectory]:
    """Metadata and trajectory of a Parquet file.

    Raises
    ------
    InputError
        Also if pyarrow is not installed.
    """
    path = Path(path)
    arrow = _pyarrow(path)
    try:
        stored, raw = _read_columns(arrow, path)
    except (OSError, ValueError, arrow.ArrowException) as error:
        text = (str(error).splitlines() or ["damaged"])[0][:120]
        raise InputError(f"is not a readable Parquet file ({text})", path) from None
    if len(raw) > _MAX_METADATA:
        raise InputError("the metadata under the key 'truefall' are larger than 1 MB", path)
    try:
        metadata = tomllib.loads(raw.decode())
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, RecursionError) as error:
        raise InputError(
            f"the metadata under the key 'truefall' are not TOML: {error}", path
        ) from None
    values = {name: column.astype(np.float64) for name, column in stored.items()}
    quanta = {name: single_precision(name, column) for name, column in stored.items()}
    name = str(metadata.get("name", path.stem))
    return metadata, make_trajectory(path, name, arrays_of(values), arrays_of(quanta), metadata)


def write(path: Path, metadata: Mapping[str, Any], columns: Mapping[str, Floats]) -> None:
    """Write float64 columns and metadata."""
    arrow = _pyarrow(path)
    table = arrow.table({k: arrow.array(np.ascontiguousarray(v)) for k, v in columns.items()})
    text = "\n".join(dump_toml(metadata)).encode()
    arrow.parquet.write_table(table.replace_schema_metadata({b"truefall": text}), path)
