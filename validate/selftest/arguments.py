"""Arguments of a call kept as they are, and given again: views of one array stay views of one.

A kernel may be given rows of an array beside the array itself, so that what it writes through one
is seen through the other; separate copies would not behave like that, and a pickle makes such
copies.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["Kept", "give", "keep"]


@dataclass(frozen=True)
class _View:
    """An array as a part of the buffer with this number."""

    buffer: int
    offset: int
    shape: tuple[int, ...]
    strides: tuple[int, ...]
    kind: str


@dataclass(frozen=True)
class Kept:
    """Arguments: the arrays that several of them share, and the arguments themselves."""

    buffers: tuple[Any, ...]
    items: tuple[Any, ...]


def _root(array: Any) -> Any:
    while isinstance(array.base, np.ndarray):
        array = array.base
    return array


def _is_array(value: Any) -> bool:
    return isinstance(value, np.ndarray)


def _copied(value: Any) -> Any:
    if _is_array(value):
        return value.copy()
    return tuple(_copied(item) for item in value) if isinstance(value, tuple) else value


def keep(values: tuple[Any, ...]) -> Kept:
    """Copy arguments as they stand."""
    roots = [_root(v) if _is_array(v) else None for v in values]
    ids = [id(r) for r in roots if r is not None]
    shared: dict[int, int] = {}
    buffers: list[Any] = []
    items: list[Any] = []
    for value, root in zip(values, roots, strict=True):
        if root is None or ids.count(id(root)) == 1 or value.size == 0:
            items.append(_copied(value))
            continue
        if id(root) not in shared:
            shared[id(root)] = len(buffers)
            buffers.append(root.copy(order="K"))
        offset = value.ctypes.data - root.ctypes.data
        place = shared[id(root)]
        items.append(_View(place, offset, value.shape, value.strides, value.dtype.str))
    return Kept(tuple(buffers), tuple(items))


def give(kept: Kept) -> tuple[Any, ...]:
    """The arguments again, fresh, sharing what they shared."""
    buffers = [buffer.copy(order="K") for buffer in kept.buffers]

    def made(item: Any) -> Any:
        if isinstance(item, _View):
            return np.ndarray(
                item.shape, item.kind, buffers[item.buffer], item.offset, item.strides
            )
        return _copied(item)

    return tuple(made(item) for item in kept.items)


def size(values: tuple[Any, ...]) -> int:
    """Bytes of the arrays among some arguments, shared ones as a whole."""
    return sum(int(_root(v).nbytes) for v in values if _is_array(v))
