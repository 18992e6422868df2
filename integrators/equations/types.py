"""Names of types shared by the equations."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["Floats", "Radial"]

Floats = npt.NDArray[np.float64]
#: a, a', b, b', c, c', d, d'
Radial = tuple[float, float, float, float, float, float, float, float]
