"""The content digest of a result set: SHA-256 over what it says, not over how it is stored.

Everything below the root in the order of its paths: datasets by path, type, shape and
little-endian bytes, groups by path, and the attributes of each by name, type, shape and bytes.
Left out are ``created``, ``producer`` and ``content_digest``, and the attributes by which HDF5
ties dimension scales to datasets.  Every part is preceded by its length in eight bytes.
"""

from __future__ import annotations

import hashlib
from typing import Any

import numpy as np

__all__ = ["content_digest"]

_LEFT_OUT = frozenset(
    {
        "created", "producer", "content_digest", "CLASS", "NAME", "DIMENSION_LIST",
        "REFERENCE_LIST", "_Netcdf4Dimid", "_NCProperties",
    }
)  # fmt: skip


def _little(value: Any) -> tuple[str, str, bytes]:
    array = np.asarray(value)
    if array.dtype.kind == "O":  # variable-length text, by whoever wrote the file
        array = np.asarray(str(array[()]).encode())
    array = array.astype(array.dtype.newbyteorder("<"), copy=False)
    return array.dtype.str, str(array.shape), array.tobytes()


def content_digest(file: Any) -> str:
    """The digest of an open :class:`h5py.File`, as ``sha256:`` and 64 hexadecimal digits."""
    digest = hashlib.sha256()

    def feed(*parts: str | bytes) -> None:
        for part in parts:
            data = part.encode() if isinstance(part, str) else part
            digest.update(len(data).to_bytes(8, "little"))
            digest.update(data)

    def attributes(thing: Any) -> None:
        for name in sorted(set(thing.attrs) - _LEFT_OUT):
            feed("attribute", name, *_little(thing.attrs[name]))

    def walk(thing: Any, path: str) -> None:
        if hasattr(thing, "keys"):
            feed("group", path)
            attributes(thing)
            for name in sorted(thing):
                walk(thing[name], f"{path}/{name}")
        else:
            feed("dataset", path, *_little(thing[()]))
            attributes(thing)

    walk(file, "")
    return f"sha256:{digest.hexdigest()}"
