"""Compiled parts of reading chunks: the checksum and the byte order of HDF5's filters.

Fletcher's checksum and the shuffle filter as the HDF5 file format specification describes them
(from memory; files written by the HDF5 library hold both to it in the tests).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from numba import njit

__all__ = ["fletcher32", "unshuffle8"]

Bytes = npt.NDArray[np.uint8]


@njit(cache=True, error_model="numpy", nogil=True)
def fletcher32(data: Bytes) -> int:
    """Fletcher's checksum of 16-bit big-endian words, as HDF5 stores it."""
    sum1, sum2 = np.uint64(0), np.uint64(0)
    pairs = data.size // 2
    done = 0
    for _ in range(pairs // 360 + 1):
        stop = min(pairs, done + 360)
        for i in range(done, stop):
            sum1 += (np.uint64(data[2 * i]) << np.uint64(8)) | np.uint64(data[2 * i + 1])
            sum2 += sum1
        sum1 = (sum1 & np.uint64(0xFFFF)) + (sum1 >> np.uint64(16))
        sum2 = (sum2 & np.uint64(0xFFFF)) + (sum2 >> np.uint64(16))
        done = stop
    if data.size % 2:
        sum1 += np.uint64(data[data.size - 1]) << np.uint64(8)
        sum2 += sum1
    for _ in range(3):
        sum1 = (sum1 & np.uint64(0xFFFF)) + (sum1 >> np.uint64(16))
        sum2 = (sum2 & np.uint64(0xFFFF)) + (sum2 >> np.uint64(16))
    return int((sum2 << np.uint64(16)) | sum1)


@njit(cache=True, error_model="numpy", nogil=True)
def unshuffle8(data: Bytes, out: npt.NDArray[Any]) -> None:
    """Undo HDF5's shuffle of 8-byte numbers: byte k of all numbers stands together.

    Parameters
    ----------
    data : (8 n,) uint8
    out : (n,) uint64
        Little-endian.
    """
    n = out.size
    for i in range(n):
        word = np.uint64(data[i])
        word |= np.uint64(data[n + i]) << np.uint64(8)
        word |= np.uint64(data[2 * n + i]) << np.uint64(16)
        word |= np.uint64(data[3 * n + i]) << np.uint64(24)
        word |= np.uint64(data[4 * n + i]) << np.uint64(32)
        word |= np.uint64(data[5 * n + i]) << np.uint64(40)
        word |= np.uint64(data[6 * n + i]) << np.uint64(48)
        word |= np.uint64(data[7 * n + i]) << np.uint64(56)
        out[i] = word
