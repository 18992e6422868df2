"""Unit systems and constants, each with its source.

No constant here is a product of G and a mass: gravitational parameters are measured directly
and known far better than G (compare CODATA 2022, G = 6.674 30(15)e-11).
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from math import isfinite

__all__ = [
    "CONSTANTS",
    "LENGTHS",
    "SYSTEM",
    "SYSTEMS",
    "TIMES",
    "Constant",
    "System",
    "length_in",
    "speed_of_light",
    "time_in",
]

SYSTEMS = ("geometric", "SI", "astronomical")


@dataclass(frozen=True)
class System:
    """A system of units: names of its units and the exact speed of light in them."""

    name: str
    length: str
    time: str
    speed: str
    c_exact: Fraction

    @property
    def momentum(self) -> str:
        """Unit of angular momentum per rest mass."""
        return "1" if self.length == "1" else f"{self.length}2 s-1"


SYSTEM = {
    "geometric": System("geometric", "1", "1", "1", Fraction(1)),
    "SI": System("SI", "m", "s", "m s-1", Fraction(299_792_458)),
    "astronomical": System("astronomical", "km", "s", "km s-1", Fraction(299_792_458, 1000)),
}

#: Metres in one unit, for budgets such as "1 mm".
LENGTHS = {
    "nm": Fraction(1, 10**9),
    "um": Fraction(1, 10**6),
    "mm": Fraction(1, 1000),
    "cm": Fraction(1, 100),
    "m": Fraction(1),
    "km": Fraction(1000),
    "au": Fraction(149_597_870_700),
}
#: Seconds in one unit.
TIMES = {
    "ps": Fraction(1, 10**12),
    "ns": Fraction(1, 10**9),
    "us": Fraction(1, 10**6),
    "ms": Fraction(1, 1000),
    "s": Fraction(1),
    "min": Fraction(60),
    "h": Fraction(3600),
    "d": Fraction(86400),
}


@dataclass(frozen=True)
class Constant:
    """A constant: SI value and unit, standard uncertainty (0 if exact), source, how it was read.

    ``status`` is "seen" (read in the source or a text that quotes it), "from memory", or
    "recomputed".
    """

    value: float
    unit: str
    uncertainty: float
    source: str
    status: str


CONSTANTS = {
    "c": Constant(299_792_458.0, "m/s", 0.0, "SI definition", "seen"),
    "G": Constant(6.674_30e-11, "m^3 kg^-1 s^-2", 0.000_15e-11, "CODATA 2022", "seen"),
    "gm_sun_nominal": Constant(
        1.327_124_4e20, "m^3/s^2", 0.0, "IAU 2015 Resolution B3; Prsa et al. 2016", "seen"
    ),
    "gm_sun_tcb": Constant(
        1.327_124_420_99e20, "m^3/s^2", 1e10, "IAU 2009; Luzum et al. 2011, Table 1", "seen"
    ),
    "gm_sun_tdb": Constant(
        1.327_124_400_41e20, "m^3/s^2", 1e10, "IAU 2009; Luzum et al. 2011, Table 1", "seen"
    ),
    "gm_earth_tcg": Constant(
        3.986_004_418e14, "m^3/s^2", 8e5, "IERS Conventions 2010 (TN 36), Table 1.1", "seen"
    ),
    "gm_earth_tt": Constant(3.986_004_415e14, "m^3/s^2", 8e5, "Ries et al. 1992", "from memory"),
    "gm_earth_tdb": Constant(3.986_004_356e14, "m^3/s^2", 8e5, "IAU 2009 list", "from memory"),
    "gm_earth_nominal": Constant(
        3.986_004e14, "m^3/s^2", 0.0, "IAU 2015 Resolution B3", "from memory"
    ),
    "gm_earth_gps": Constant(3.986_005e14, "m^3/s^2", 0.0, "IS-GPS-200", "seen"),
    "L_G": Constant(6.969_290_134e-10, "1", 0.0, "IAU 2000 Resolution B1.9", "seen"),
    "L_B": Constant(1.550_519_768e-8, "1", 0.0, "IAU 2006 Resolution B3", "seen"),
    "au": Constant(149_597_870_700.0, "m", 0.0, "IAU 2012 Resolution B2", "seen"),
    "parsec": Constant(
        3.085_677_581_491_367e16, "m", 0.0, "IAU 2015 Resolution B2 (648000/pi au)", "recomputed"
    ),
    "radius_sun_nominal": Constant(6.957e8, "m", 0.0, "IAU 2015 Resolution B3", "from memory"),
}


def speed_of_light(system: str) -> Fraction:
    """Exact speed of light in a system's units.

    Raises
    ------
    ValueError
        For an unknown system.
    """
    if system not in SYSTEM:
        raise ValueError(f"system is {system!r}; allowed are {', '.join(SYSTEMS)}")
    return SYSTEM[system].c_exact


def _exact_gm(gm: float) -> Fraction:
    if not (isfinite(gm) and gm > 0):
        raise ValueError(f"gm is {gm}; it must be positive and finite")
    return Fraction(gm)


def length_in(system: str, gm: float) -> float:
    """``GM/c^2`` in a system's length unit, correctly rounded.

    Raises
    ------
    ValueError
        For an unknown system or a ``gm`` that is not positive and finite.
    """
    return float(_exact_gm(gm) / speed_of_light(system) ** 2)


def time_in(system: str, gm: float) -> float:
    """``GM/c^3`` in a system's time unit, correctly rounded.

    Raises
    ------
    ValueError
        For an unknown system or a ``gm`` that is not positive and finite.
    """
    return float(_exact_gm(gm) / speed_of_light(system) ** 3)
