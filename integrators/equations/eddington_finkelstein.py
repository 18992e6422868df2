"""Eddington-Finkelstein coordinates, ingoing, with the null time v = T + R, T Kerr-Schild's.

The momentum that belongs to v has E in its radial part, beside which the orbit's own part is small
and would lose digits, in weak fields nearly all of them.  With that E taken off (a canonical
transformation) the equations are those of Kerr-Schild, and only the time runs differently:
dv = dT + dR.
"""

from __future__ import annotations

from truefall.integrators.tape import Row

__all__ = ["metric"]


def metric(size: Row) -> tuple[Row | float, Row | float, Row | float, Row | float]:
    """``-g_TT``, ``g_TR``, the tangential ``g`` and the radial ``g_RR``."""
    return (size - 2.0) / size, 1.0, 1.0, 0.0
