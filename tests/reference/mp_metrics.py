"""Cartesian Schwarzschild metrics of the six charts, for the second route (GM = c = 1).

Every one has the shape

    ds^2 = g_TT dT^2 + 2 g_Tn dT (n.dx) + alpha dx.dx + beta (n.dx)^2,   n = x/|x|,

and so has its inverse,

    2 H = a p_T^2 + 2 b p_T (x.p) + c p.p + d (x.p)^2,

where a, b, c, d depend on u = 1/|x| alone.  Both are written down separately; a test multiplies
them.  Sources: isotropic, Painleve-Gullstrand, Eddington-Finkelstein forms: textbooks (Misner,
Thorne & Wheeler 1973, ch. 31; from memory); harmonic: Weinberg 1972, sec. 8.2 (from memory);
Kerr-Schild: Kerr & Schild 1965 (from memory).  Nothing here is taken from the package.
"""

from __future__ import annotations

from typing import Any

CHARTS = (
    "areal",
    "isotropic",
    "harmonic",
    "kerr-schild",
    "painleve-gullstrand",
    "eddington-finkelstein",
)
INGOING = CHARTS[3:]


def covariant(chart: str, u: Any, root_of_two_u: Any) -> tuple[Any, Any, Any, Any]:
    """``g_TT, g_Tn, alpha, beta`` at inverse chart radius ``u``."""
    one = u / u
    if chart == "areal":
        f = 1 - 2 * u
        return -f, 0 * u, one, 1 / f - 1
    if chart == "isotropic":
        return -(((2 - u) / (2 + u)) ** 2), 0 * u, (1 + u / 2) ** 4, 0 * u
    if chart == "harmonic":
        return -(1 - u) / (1 + u), 0 * u, (1 + u) ** 2, u**2 * (1 + u) / (1 - u)
    if chart == "kerr-schild":
        return -(1 - 2 * u), 2 * u, one, 2 * u
    if chart == "painleve-gullstrand":
        return -(1 - 2 * u), root_of_two_u, one, 0 * u
    if chart == "eddington-finkelstein":
        return -(1 - 2 * u), one, one, -one
    raise ValueError(chart)


def areal_radius(chart: str, rho: Any) -> Any:
    """Areal radius at chart radius ``rho``."""
    if chart == "isotropic":
        return rho * (1 + 1 / (2 * rho)) ** 2
    return rho + 1 if chart == "harmonic" else rho


def contravariant(chart: str, u: Any, root_of_two_u: Any) -> tuple[Any, ...]:
    """``(a, b, c, d)`` and their derivatives with respect to ``u``, for numbers or series.

    ``b`` belongs to ``x.p`` (not ``n.p``), ``d`` to its square.  Entries that vanish or are
    constant are given as plain numbers.
    """
    if chart == "areal":
        g = 1 / (1 - 2 * u)
        u2 = u * u
        return (-1 * g, 0, 1, -2 * (u2 * u)), (-2 * (g * g), 0, 0, -6 * u2)
    if chart == "isotropic":
        h = 1 / (u + 2)
        k = 1 / (2 - u)
        q = (u + 2) * k
        h2 = h * h
        h4 = h2 * h2
        return (-1 * (q * q), 0, 16 * h4, 0), (-8 * (q * (k * k)), 0, -64 * (h4 * h), 0)
    if chart == "harmonic":
        h = 1 / (u + 1)
        k = 1 / (1 - u)
        h2 = h * h
        u3h2 = (u * u) * (u * h2)
        u4h2 = u3h2 * u
        return (
            (-1 * ((u + 1) * k), 0, h2, -1 * u4h2),
            (-2 * (k * k), 0, -2 * (h2 * h), -4 * u3h2 + 2 * (u4h2 * h)),
        )
    u2 = u * u
    d, d_u = -2 * (u2 * u), -6 * u2
    if chart == "kerr-schild":
        return (-2 * u + (-1), 2 * u2, 1, d), (-2, 4 * u, 0, d_u)
    if chart == "painleve-gullstrand":
        return (-1, root_of_two_u * u, 1, d), (0, 3 * root_of_two_u / 2, 0, d_u)
    if chart == "eddington-finkelstein":
        return (0, u, 1, d), (0, 1, 0, d_u)
    raise ValueError(chart)
