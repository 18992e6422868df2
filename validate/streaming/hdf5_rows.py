"""The rows of an HDF5 result set, chunk by chunk, from the places that its layout names.

The structure is read and checked through the guarded file; the numbers are then taken from the
file itself, so that chunks are inflated within bounds, once, and by several threads at a time
(the HDF5 library serves one).
"""

from __future__ import annotations

import os
import zlib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.validate.errors import InputError
from truefall.validate.formats.assemble import check_shapes, single_precision
from truefall.validate.streaming.rows import Block, Head
from truefall.validate.trajectory import CLOCKS, SERIES

if TYPE_CHECKING:
    from truefall.validate.formats.hdf5_guard import Layout

__all__ = ["ChunkedRows", "open_rows", "plain_layouts"]

Floats = npt.NDArray[np.float64]
_CHECKSUM = 4


class ChunkedRows:
    """Rows of datasets whose layouts are plain; safe to read from several threads."""

    def __init__(
        self, path: Path, name: str, layouts: Mapping[str, Layout], metadata: Mapping[str, Any]
    ) -> None:
        self.path = path
        self._layouts = dict(layouts)
        check_shapes({key: layout.shape for key, layout in layouts.items()}, path)
        self._single = {k for k, v in layouts.items() if v.dtype.itemsize == 4}
        self._handle = os.open(path, os.O_RDONLY)
        count = layouts["time"].shape[0]
        self.head = Head(str(path), name, count, tuple(layouts), metadata)

    def close(self) -> None:
        """Let the file go."""
        os.close(self._handle)

    def __enter__(self) -> ChunkedRows:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def block(self, first: int, last: int) -> Block:
        """Rows ``first`` to ``last``."""
        values: dict[str, Floats] = {}
        quanta: dict[str, Floats] = {}
        for key, layout in self._layouts.items():
            raw = self._numbers(layout, first, last)
            values[key] = raw if raw.dtype == np.float64 else raw.astype(np.float64)
            if key in self._single:
                quanta[key] = single_precision(key, raw)
        return Block(values, quanta)

    def _damaged(self, layout: Layout, why: str) -> InputError:
        return InputError(f"{layout.name} is damaged: {why}", self.path)

    def _pread(self, layout: Layout, size: int, place: int) -> bytes:
        data = os.pread(self._handle, size, place)
        if len(data) != size:
            raise self._damaged(layout, "the file ends before its numbers do")
        return data

    def _numbers(self, layout: Layout, first: int, last: int) -> npt.NDArray[Any]:
        width = int(np.prod(layout.shape[1:], dtype=np.int64))
        kind = layout.dtype
        if layout.rows is None:
            assert layout.start is not None
            step = width * kind.itemsize
            data = self._pread(layout, (last - first) * step, layout.start + first * step)
            found: npt.NDArray[Any] = np.frombuffer(data, dtype=kind)
            return found.reshape(last - first, *layout.shape[1:]).astype(
                kind.newbyteorder("="), copy=False
            )
        rows = layout.rows
        out = np.empty((last - first, *layout.shape[1:]), dtype=kind.newbyteorder("="))
        for k in range(first // rows, -(-last // rows)):
            low, high = max(first, k * rows), min(last, (k + 1) * rows)
            part = out[low - first : high - first]
            whole = high - low == rows and part.flags.c_contiguous
            target = part.reshape(-1) if whole else np.empty(rows * width, dtype=out.dtype)
            self._chunk(layout, k, target)
            if not whole:
                part[...] = target.reshape(rows, *layout.shape[1:])[
                    low - k * rows : high - k * rows
                ]
        return out

    def _chunk(self, layout: Layout, k: int, target: npt.NDArray[Any]) -> None:
        """Decode a chunk into ``target`` (rows * width,)."""
        from truefall.validate.streaming.decode import fletcher32, unshuffle8

        place, size = int(layout.places[k, 0]), int(layout.places[k, 1])
        data: bytes | memoryview = memoryview(self._pread(layout, size, place))
        if "fletcher32" in layout.filters:
            body, told = data[:-_CHECKSUM], int.from_bytes(data[-_CHECKSUM:], "little")
            if fletcher32(np.frombuffer(body, dtype=np.uint8)) != told:
                raise self._damaged(layout, "its checksum does not hold")
            data = body
        wanted = target.nbytes
        if "deflate" in layout.filters:
            data = self._inflate(layout, data, wanted)
        if len(data) != wanted:
            raise self._damaged(layout, "a chunk has the wrong size")
        flat = np.frombuffer(data, dtype=np.uint8)
        kind = layout.dtype
        if "shuffle" not in layout.filters:
            target[...] = np.frombuffer(data, dtype=kind)
        elif kind.itemsize == 8 and kind.newbyteorder("<") == kind:
            unshuffle8(flat, target.view(np.uint64))
        else:
            planes = flat.reshape(kind.itemsize, target.size)
            target[...] = np.ascontiguousarray(planes.T).view(kind).reshape(-1)

    def _inflate(self, layout: Layout, data: bytes | memoryview, wanted: int) -> bytes:
        inflater = zlib.decompressobj()
        try:
            found = inflater.decompress(data, wanted + 1)
        except zlib.error as error:
            raise self._damaged(layout, f"its compression does not hold ({error})") from None
        if len(found) > wanted:
            raise self._damaged(layout, "a chunk inflates beyond its size")
        if not inflater.eof:
            raise self._damaged(layout, "a compressed chunk is cut short")
        return found


def plain_layouts(layouts: Mapping[str, Layout | None]) -> dict[str, Layout] | None:
    """The layouts that exist, or None if one of them cannot be read by places alone.

    Clocks in single precision are left to the reader in memory: their half unit is a property of
    the whole column.
    """
    there = {k: v for k, v in layouts.items() if v is not None}
    if not {"time", "position"} <= set(there) or not all(v.plain for v in there.values()):
        return None
    clocks = [there[k] for k in ("time", *CLOCKS) if k in there]
    return there if all(v.dtype.itemsize == 8 for v in clocks) else None


def open_rows(
    path: Path, complete: Callable[[dict[str, Any]], dict[str, Any]]
) -> list[ChunkedRows]:
    """The trajectories of a result set as rows on demand; none if one of them is short or odd.

    Parameters
    ----------
    complete : callable
        Makes a file's own metadata complete, or refuses them.

    Raises
    ------
    InputError
        As the reader in memory.
    """
    from truefall.validate.formats.hdf5_guard import GuardedFile
    from truefall.validate.formats.hdf5_read import declared, trajectory_groups
    from truefall.validate.screening import MANY_ROWS

    parts = []
    with GuardedFile(path) as file:
        for name, group in trajectory_groups(file):
            layouts = plain_layouts({key: file.layout(group, key) for key in SERIES})
            if layouts is None or layouts["time"].shape[0] < MANY_ROWS:
                return []
            parts.append((name, layouts, declared(file, group, name)))
    return [ChunkedRows(path, name, layouts, complete(own)) for name, layouts, own in parts]
