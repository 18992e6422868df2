"""Statistics of a long file, of which only the rows that matter are in memory."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Totals"]


@dataclass(frozen=True)
class Totals:
    """Statistics of all rows of a file of which only some are in memory.

    Attributes
    ----------
    rows : (k,)
        Numbers in the file, from 0, of the rows in memory.
    errors : mapping
        Largest size, root mean square and row number of the largest, by quantity.
    slopes : mapping
        Of the drifts, per unit of time.
    first, last : int
        Rows of the file that were compared (last excluded).
    random : int
        Rows chosen at random among those that were held against enclosed values.
    table_share : float
        Largest position error of the table among those rows, by the bound it promises (at most
        1, or the promise is broken).
    """

    rows: npt.NDArray[np.int64]
    errors: Mapping[str, tuple[float, float, int]]
    slopes: Mapping[str, float]
    first: int
    last: int
    random: int
    table_share: float
