"""Opening an HDF5 file that a stranger wrote: structure first, data afterwards.

The HDF5 library is not meant to read hostile files, so only what a trajectory needs is let
through: hard links, plain datasets of IEEE float32 and float64 numbers stored in the file
itself, the filters shuffle, deflate and fletcher32 in that order, chunks of moderate size whose
compressed streams are found to hold no more than a chunk, and attributes that are numbers or
strings.  Link by link, because indexing would follow an external link before anyone could look
at it; dataset by dataset before its first element is read.
"""

from __future__ import annotations

import os
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError

__all__ = ["GuardedFile", "Layout"]

_MAX_BYTES = 1 << 32
_MAX_CHUNK = 64 << 20
_MAX_CHUNKS = 1_000_000
_LONGEST_TEXT = 65_536
_LONGEST_NUMBERS = 64
_MAX_OBJECTS = 10_000
_DEFLATE, _SHUFFLE, _FLETCHER32 = 1, 2, 3
_FILTERS = {_SHUFFLE: "shuffle", _DEFLATE: "deflate", _FLETCHER32: "fletcher32"}
_CHECKSUM_BYTES = 4


@dataclass(frozen=True)
class Layout:
    """Where the numbers of a dataset lie in the file.

    Attributes
    ----------
    rows : int or None
        Rows in a chunk; None for a contiguous dataset, which starts at byte ``start``.
    filters : tuple of str
        In the order in which they were applied.
    places : (k, 3) int64
        Byte offset, stored size and filter mask of each chunk, by the order of their rows.
    plain : bool
        Whether the numbers can be read from these places alone: whole rows in every chunk, no
        filter left out, the file's addresses counted from its first byte.
    """

    name: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    rows: int | None
    filters: tuple[str, ...]
    places: npt.NDArray[np.int64]
    start: int | None
    plain: bool


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
            self._file = h5py.File(self.path, "r", locking="best-effort")
        except (OSError, RuntimeError, ValueError) as error:
            text = str(error).split("(")[-1].rstrip(")").strip()
            raise InputError(
                f"cannot be opened as HDF5 ({text or error}); is it a whole HDF5 file?", path
            ) from None
        self._names: dict[str, list[str]] = {}

    def __enter__(self) -> GuardedFile:
        return self

    def __exit__(self, *_: object) -> None:
        self._file.close()

    def _refuse(self, what: str) -> InputError:
        return InputError(what, self.path)

    def children(self, group: Any) -> list[str]:
        """Names of a group's members, after checking that every link is a hard one."""
        path = str(group.name)
        if path in self._names:
            return self._names[path]
        if len(group) > _MAX_OBJECTS:
            raise self._refuse(f"{path} holds more than {_MAX_OBJECTS} objects")
        names = []
        for raw in group.id:  # listing names follows no link
            try:
                name = raw.decode("utf-8")
            except UnicodeDecodeError:
                raise self._refuse(f"a name in {path} is not UTF-8") from None
            if not name.isprintable():
                raise self._refuse(f"the name {name!r} in {path} holds control characters")
            if group.id.links.get_info(raw).type != self._h5py.h5l.TYPE_HARD:
                raise self._refuse(
                    f"{path.rstrip('/')}/{name} is a soft or external link; copy the data into "
                    "the file",
                )
            names.append(name)
        self._names[path] = names
        return names

    @property
    def root(self) -> Any:
        """The root group."""
        return self._file["/"]

    def _member(self, parent: Any, name: str) -> Any | None:
        if name not in self.children(parent):
            return None
        try:
            return parent[name]
        except (KeyError, OSError, RuntimeError, TypeError, ValueError):
            raise self._refuse(f"{parent.name.rstrip('/')}/{name} is damaged") from None

    def group(self, parent: Any, name: str) -> Any | None:
        """A member group, or None if there is none of that name."""
        child = self._member(parent, name)
        return child if isinstance(child, self._h5py.Group) else None

    def numbers(self, parent: Any, name: str) -> npt.NDArray[Any] | None:
        """A member dataset of float numbers as stored (float32 or float64), or None.

        Raises
        ------
        InputError
            If it is anything else, or damaged, or not wholly written.
        """
        dataset = self._member(parent, name)
        if dataset is None:
            return None
        if not isinstance(dataset, self._h5py.Dataset):
            raise self._refuse(f"{parent.name}/{name} is not a dataset")
        try:
            self._check_dataset(dataset)
            values: npt.NDArray[Any] = np.asarray(dataset[()])
        except (OSError, RuntimeError, ValueError, zlib.error) as error:
            raise self._refuse(
                f"{dataset.name} is damaged: its checksum or compression does not hold "
                f"({str(error).splitlines()[0][:80]})",
            ) from None
        return values

    def layout(self, parent: Any, name: str) -> Layout | None:
        """Where the numbers of a member dataset lie in the file, or None if there is none.

        Raises
        ------
        InputError
            If it is anything else than plain numbers, or not wholly written.  Compressed streams
            are not looked into: who reads them inflates them within bounds.
        """
        dataset = self._member(parent, name)
        if dataset is None:
            return None
        if not isinstance(dataset, self._h5py.Dataset):
            raise self._refuse(f"{parent.name}/{name} is not a dataset")
        try:
            self._check_dataset(dataset, streams=False)
            return self._layout(dataset)
        except (OSError, RuntimeError, ValueError) as error:
            raise self._refuse(
                f"{dataset.name} is damaged ({str(error).splitlines()[0][:80]})"
            ) from None

    def _layout(self, dataset: Any) -> Layout:
        properties = dataset.id.get_create_plist()
        codes = [properties.get_filter(k)[0] for k in range(properties.get_nfilters())]
        filters = tuple(_FILTERS[code] for code in codes)
        plain = self._file.userblock_size == 0
        if dataset.chunks is None:
            start = dataset.id.get_offset()
            places = np.zeros((0, 3), dtype=np.int64)
            return Layout(dataset.name, dataset.shape, dataset.dtype, None, filters, places, start,
                          plain and start is not None)  # fmt: skip
        rows = dataset.chunks[0]
        plain = plain and dataset.chunks[1:] == dataset.shape[1:]
        places = np.zeros((-(-dataset.shape[0] // rows), 3), dtype=np.int64)

        def note(info: Any) -> None:
            k = info.chunk_offset[0] // rows
            places[k] = info.byte_offset, info.size, info.filter_mask

        if plain:
            dataset.id.chunk_iter(note)
            plain = bool(np.all(places[:, 1] > 0) and not places[:, 2].any())
        return Layout(
            dataset.name, dataset.shape, dataset.dtype, rows, filters, places, None, plain
        )

    def _check_dataset(self, dataset: Any, streams: bool = True) -> None:
        h5t, label = self._h5py.h5t, dataset.name
        kind = dataset.id.get_type()
        plain = (h5t.IEEE_F64LE, h5t.IEEE_F64BE, h5t.IEEE_F32LE, h5t.IEEE_F32BE)
        if not any(kind.equal(t) for t in plain):
            raise self._refuse(
                f"{label} holds another type than float64 (or float32) numbers; write plain floats",
            )
        space = dataset.id.get_space()
        if (
            space.get_simple_extent_type() == self._h5py.h5s.NULL
            or space.get_simple_extent_ndims() > 2
        ):
            raise self._refuse(f"{label} has no shape of one or two axes")
        properties = dataset.id.get_create_plist()
        if dataset.is_virtual or properties.get_external_count():
            raise self._refuse(f"{label} keeps its data outside this file; store them inside")
        if space.get_simple_extent_npoints() * kind.get_size() > _MAX_BYTES:
            raise self._refuse(f"{label} claims more than 4 GB")
        filters = [properties.get_filter(k)[0] for k in range(properties.get_nfilters())]
        for code in filters:
            if code not in _FILTERS:
                raise self._refuse(
                    f"{label} uses HDF5 filter {code}; allowed are {', '.join(_FILTERS.values())}",
                )
        if filters != [code for code in _FILTERS if code in filters]:
            raise self._refuse(
                f"{label} uses filters out of order; the order is {', '.join(_FILTERS.values())}",
            )
        self._check_storage(dataset, filters, streams)

    def _check_storage(self, dataset: Any, filters: list[int], streams: bool) -> None:
        label = dataset.name
        if dataset.chunks is None:
            if dataset.id.get_storage_size() != dataset.nbytes:
                raise self._refuse(f"{label} was never wholly written")
            return
        chunk = int(np.prod(dataset.chunks, dtype=object)) * dataset.dtype.itemsize
        if chunk > _MAX_CHUNK:
            raise self._refuse(f"{label} has chunks of more than 64 MB")
        wanted = 1
        for extent, part in zip(dataset.shape, dataset.chunks, strict=True):
            wanted *= -(-extent // part)
        if wanted > _MAX_CHUNKS:
            raise self._refuse(f"{label} has more than {_MAX_CHUNKS} chunks")
        if dataset.id.get_num_chunks() != wanted:
            raise self._refuse(f"{label} was only partly written")
        for k in range(wanted if streams else 0):
            info = dataset.id.get_chunk_info(k)
            if info.size > chunk + chunk // 64 + 256:
                raise self._refuse(f"{label} has an oversized compressed chunk")
            if _DEFLATE in filters and not info.filter_mask & (1 << filters.index(_DEFLATE)):
                self._check_stream(dataset, info.chunk_offset, chunk)

    def _check_stream(self, dataset: Any, offset: tuple[int, ...], chunk: int) -> None:
        """Inflate a chunk within bounds: the library's own filter has none before HDF5 2.2."""
        _, raw = dataset.id.read_direct_chunk(offset)
        inflater = zlib.decompressobj()
        size = len(inflater.decompress(raw, chunk + _CHECKSUM_BYTES + 1))
        if size > chunk:
            raise self._refuse(f"{dataset.name} has a chunk that inflates beyond its size")
        if size < chunk or not inflater.eof:
            raise self._refuse(f"{dataset.name} is damaged: a compressed chunk is cut short")

    def attributes(self, thing: Any, names: tuple[str, ...]) -> dict[str, Any]:
        """The named attributes that exist: numbers, short arrays of numbers, strings."""
        found: dict[str, Any] = {}
        for name in names:
            try:
                if self._h5py.h5a.exists(thing.id, name.encode()):
                    found[name] = self._attribute(thing, name)
            except (OSError, RuntimeError, TypeError, ValueError):
                raise self._refuse(f"attribute {name!r} of {thing.name} is damaged") from None
        return found

    def _attribute(self, thing: Any, name: str) -> Any:
        h5t = self._h5py.h5t
        attribute = self._h5py.h5a.open(thing.id, name.encode())
        kind, space = attribute.get_type(), attribute.get_space()
        label = f"attribute {name!r} of {thing.name}"
        text = kind.get_class() == h5t.STRING
        if not text and kind.get_class() not in (h5t.FLOAT, h5t.INTEGER):
            raise self._refuse(f"{label} is neither number nor text")
        if space.get_simple_extent_type() == self._h5py.h5s.NULL:
            raise self._refuse(f"{label} is empty")
        if text and space.get_simple_extent_npoints() != 1:
            raise self._refuse(f"{label} is not one string")
        if attribute.get_storage_size() > (_LONGEST_TEXT if text else _LONGEST_NUMBERS):
            raise self._refuse(f"{label} is too large")
        value: Any = np.asarray(thing.attrs[name])
        if not text:
            return value.tolist()
        single: Any = value.reshape(())[()]
        if isinstance(single, bytes):
            return single.split(b"\0")[0].decode("utf-8", "replace")
        return str(single)
