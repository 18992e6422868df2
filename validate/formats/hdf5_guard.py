"""Opening an HDF5 file that a stranger wrote: structure first, data afterwards.

The HDF5 library is not meant to read hostile files, so only what a trajectory needs is let
through: hard links, plain datasets of float32/float64 numbers stored in the file itself, the
filters deflate, shuffle and fletcher32, chunks of moderate size, fixed-length strings.  Link by
link, because indexing would follow an external link before anyone could look at it.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError

__all__ = ["GuardedFile"]

_MAX_BYTES = 1 << 34
_MAX_CHUNK = 64 << 20
_FILTERS = {1: "deflate", 2: "shuffle", 3: "fletcher32"}
_MAX_OBJECTS = 10_000


class GuardedFile:
    """Read-only access to checked groups, datasets and attributes; use as a context manager."""

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path)
        for variable in ("HDF5_VOL_CONNECTOR", "HDF5_DRIVER"):
            if os.environ.get(variable):
                raise InputError(
                    f"the environment variable {variable} is set, which can load foreign code into "
                    "the HDF5 library; unset it",
                    path,
                )
        import h5py

        self._h5py = h5py
        try:
            if not self.path.is_file():
                raise OSError("no such file")
            self._file = h5py.File(self.path, "r", locking="best-effort")
        except (OSError, ValueError) as error:
            text = str(error).split("(")[0].strip()
            raise InputError(f"cannot be opened as HDF5 ({text or error})", path) from None

    def __enter__(self) -> GuardedFile:
        return self

    def __exit__(self, *_: object) -> None:
        self._file.close()

    def children(self, group: Any) -> list[str]:
        """Names of a group's members, after checking that every link is a hard one."""
        names = []
        for name in group:  # listing names follows no link
            raw = name.encode()
            if any(ord(c) < 32 for c in name):
                raise InputError("an object's name holds control characters", self.path)
            if group.id.links.get_info(raw).type != self._h5py.h5l.TYPE_HARD:
                raise InputError(
                    f"{group.name}/{name} is a soft or external link; copy the data into the file",
                    self.path,
                )
            names.append(name)
            if len(names) > _MAX_OBJECTS:
                raise InputError(f"{group.name} holds too many objects", self.path)
        return names

    @property
    def root(self) -> Any:
        """The root group."""
        return self._file["/"]

    def group(self, parent: Any, name: str) -> Any | None:
        """A member group, or None if there is none of that name."""
        if name not in self.children(parent):
            return None
        child = parent[name]
        return child if isinstance(child, self._h5py.Group) else None

    def numbers(self, parent: Any, name: str) -> npt.NDArray[Any] | None:
        """A member dataset of float numbers as stored (float32 or float64), or None."""
        if name not in self.children(parent):
            return None
        dataset = parent[name]
        if not isinstance(dataset, self._h5py.Dataset):
            raise InputError(f"{parent.name}/{name} is not a dataset", self.path)
        self._check_dataset(dataset)
        try:
            values: npt.NDArray[Any] = dataset[()]
        except (OSError, RuntimeError) as error:
            raise InputError(
                f"{dataset.name} is damaged: its checksum or compression does not hold "
                f"({str(error).splitlines()[0][:80]})",
                self.path,
            ) from None
        return np.asarray(values)

    def _check_dataset(self, dataset: Any) -> None:
        dtype, properties = dataset.dtype, dataset.id.get_create_plist()
        if dtype.kind != "f" or dtype.itemsize not in (4, 8):
            raise InputError(
                f"{dataset.name} has type {dtype}; expected float64 (or float32) numbers", self.path
            )
        if dataset.is_virtual or properties.get_external_count():
            raise InputError(
                f"{dataset.name} keeps its data outside this file; store them inside", self.path
            )
        if dataset.nbytes > _MAX_BYTES:
            raise InputError(f"{dataset.name} claims more than 16 GB", self.path)
        for k in range(properties.get_nfilters()):
            code = properties.get_filter(k)[0]
            if code not in _FILTERS:
                raise InputError(
                    f"{dataset.name} uses HDF5 filter {code}; allowed are "
                    f"{', '.join(_FILTERS.values())}",
                    self.path,
                )
        self._check_storage(dataset)

    def _check_storage(self, dataset: Any) -> None:
        if dataset.chunks is None:
            if dataset.size and dataset.id.get_storage_size() not in (0, dataset.nbytes):
                raise InputError(f"{dataset.name} is not wholly stored", self.path)
            if dataset.size and dataset.id.get_storage_size() == 0:
                raise InputError(f"{dataset.name} was never written", self.path)
            return
        chunk = int(np.prod(dataset.chunks, dtype=object)) * dataset.dtype.itemsize
        if chunk > _MAX_CHUNK:
            raise InputError(f"{dataset.name} has chunks of more than 64 MB", self.path)
        wanted = 1
        for extent, part in zip(dataset.shape, dataset.chunks, strict=True):
            wanted *= -(-extent // part)
        if dataset.id.get_num_chunks() != wanted:
            raise InputError(f"{dataset.name} was only partly written", self.path)
        for k in range(wanted):
            if dataset.id.get_chunk_info(k).size > chunk + chunk // 64 + 256:
                raise InputError(f"{dataset.name} has an oversized compressed chunk", self.path)

    def attributes(self, thing: Any, names: tuple[str, ...]) -> dict[str, Any]:
        """The named attributes that exist: numbers, short arrays, strings."""
        found: dict[str, Any] = {}
        h5 = self._h5py
        for name in names:
            raw = name.encode()
            if not h5.h5a.exists(thing.id, raw):
                continue
            attribute = h5.h5a.open(thing.id, raw)
            if attribute.get_storage_size() > 65_536 or len(attribute.shape) > 1:
                raise InputError(f"attribute {name!r} of {thing.name} is too large", self.path)
            value = thing.attrs[name]
            if isinstance(value, bytes):
                value = value.split(b"\0")[0].decode("utf-8", "replace")
            elif isinstance(value, np.ndarray):
                value = value.tolist()
            elif isinstance(value, np.generic):
                value = value.item()
                if isinstance(value, bytes):
                    value = value.split(b"\0")[0].decode("utf-8", "replace")
            found[name] = value
        return found
