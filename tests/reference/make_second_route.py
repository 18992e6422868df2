"""Write tests/data/second_route.json: states, periods and ends by the second route.

Run from anywhere (ten minutes on one core with gmpy2, far longer without; it is optional):

    python tests/reference/make_second_route.py [processes]

Each orbit is integrated twice, with 50 and 56 working digits and different Taylor orders, and
their largest relative difference is stored beside it.  No code of the package is imported.
"""

from __future__ import annotations

import json
import sys
from concurrent.futures import ProcessPoolExecutor
from fractions import Fraction
from pathlib import Path
from typing import Any

import mp_geodesic as geodesic
import mp_quadrature as quadrature
import mpmath
import second_route_orbits as table
from mpmath import mp

HERE = Path(__file__).parent
DATA = HERE.parent / "data" / "second_route.json"
DIGITS = 36


KEYS = ("system", "gm", "particle", "chart", "clock", "position", "velocity")
VECTORS = ("position", "velocity")
SCALARS = ("parameter", "chart_time")


def integrator(orbit: dict[str, Any], digits: int, order: int | None = None) -> Any:
    return geodesic.Geodesic(**{k: orbit[k] for k in KEYS}, digits=digits, order=order)


def as_text(orbit: dict[str, Any], state: dict[str, Any], arithmetic: Any) -> dict[str, Any]:
    """One state as it is stored: 36 digits."""
    row: dict[str, Any] = {k: [arithmetic.text(q, DIGITS) for q in state[k]] for k in VECTORS}
    own = "proper_time" if orbit["particle"] == "massive" else "affine"
    row[own] = arithmetic.text(state["parameter"], DIGITS)
    if orbit["clock"] == "proper":
        row["coordinate_time"] = arithmetic.text(state["chart_time"], DIGITS)
    return row


def difference(a: dict[str, Any], b: dict[str, Any]) -> float:
    """Largest difference of two stored rows, relative to each vector's size."""
    worst = mpmath.mpf(0)
    for key, value in a.items():
        left = [mpmath.mpf(q) for q in (value if isinstance(value, list) else [value])]
        right = [mpmath.mpf(q) for q in (b[key] if isinstance(value, list) else [b[key]])]
        size = max(abs(q) for q in left)
        gap = max(abs(p - q) for p, q in zip(left, right, strict=True))
        if gap:
            worst = max(worst, gap / size)
    return float(worst)


def rows(orbit: dict[str, Any], digits: int, order: int | None = None) -> list[dict[str, Any]]:
    """Stored rows of an orbit, integrated with a working precision."""
    g = integrator(orbit, digits, order)
    elapsed = [Fraction(t) for t in orbit["times"]]
    return [as_text(orbit, state, g.arithmetic) for state in g.states(elapsed)]


def invariants(orbit: dict[str, Any], digits: int) -> tuple[Any, Any, Any, bool, Any]:
    """E, L, areal start radius, whether it starts outward, and the unit of length."""
    g = geodesic.Geodesic(**{k: orbit[k] for k in KEYS}, digits=digits, order=2, use_gmpy=False)
    energy, cross = g.invariants()
    momentum = mpmath.sqrt(sum(q * q for q in cross))
    x_dot = [c[1] for c in g.expand(g.start)[0]]
    # at rest the sum is rounding noise
    outward = sum(a * b for a, b in zip(g.start.x, x_dot, strict=True)) > mpmath.mpf(10) ** -20
    radius = geodesic.metrics.areal_radius(orbit["chart"], g.rho)
    return energy, momentum, radius, bool(outward), g.arithmetic.number(g.length)


def one(orbit: dict[str, Any]) -> dict[str, Any]:
    """A directly integrated orbit, ready to store."""
    try:
        first, second = rows(orbit, 50), rows(orbit, 56, 46)
    except ArithmeticError as reason:
        raise ArithmeticError(f"{orbit['name']}: {reason}") from reason
    agreement = max(difference(a, b) for a, b in zip(first, second, strict=True))
    return {**orbit, "agreement": agreement, "states": second}


def periods(orbit: dict[str, Any], digits: int = 50) -> dict[str, str]:
    """Periods and turning points of a bound orbit, in its units."""
    energy, momentum, _, _, length = invariants(orbit, digits)
    c = mpmath.mpf(1)
    if orbit["system"] != "geometric":
        q = geodesic.LIGHT_SPEED[orbit["system"]]
        c = mpmath.mpf(q.numerator) / q.denominator
    found = quadrature.periods(energy, momentum)
    units = {"azimuth_per_radial_period": 1, "radial_period": length / c}
    units["proper_radial_period"] = length / c
    return {k: mpmath.nstr(v * units.get(k, length), DIGITS) for k, v in found.items()}


def far(item: tuple[dict[str, Any], int, float]) -> dict[str, Any]:
    """An orbit many revolutions on: the remainder integrated, the plane turned."""
    orbit, revolutions, extra = item
    found = periods(orbit, 60)
    proper = orbit["clock"] == "proper"
    mp.dps = 60
    own, other = ("proper_radial_period", "radial_period")
    period = mpmath.mpf(periods_exact(orbit)[own if proper else other])
    stamp = float(revolutions * period + extra)
    p, q = mpmath.mpf(stamp) - revolutions * period, 10**58
    remainder = Fraction(int(mpmath.nint(p * q)), q)
    g = integrator(orbit, 56, 46)
    state = g.states([remainder])[0]
    row = as_text(orbit, state, g.arithmetic)
    mp.dps = 60
    exact = periods_exact(orbit)
    angle = revolutions * exact["azimuth_per_radial_period"]
    axis = _axis(orbit)
    for key in VECTORS:
        vector = [mpmath.mpf(g.arithmetic.text(v, 50)) for v in state[key]]
        row[key] = [mpmath.nstr(v, DIGITS) for v in _turned(vector, axis, angle)]
    tau = mpmath.mpf(g.arithmetic.text(state["parameter"], 50))
    time = mpmath.mpf(g.arithmetic.text(state["chart_time"], 50))
    row["proper_time"] = mpmath.nstr(tau + revolutions * exact[own], DIGITS)
    if proper:
        row["coordinate_time"] = mpmath.nstr(time + revolutions * exact[other], DIGITS)
    name = f"far/{orbit['name']}"
    return {**orbit, "name": name, "times": [stamp], "states": [row], "periods": found}


def periods_exact(orbit: dict[str, Any]) -> dict[str, Any]:
    """Periods as numbers of 60 digits."""
    energy, momentum, _, _, length = invariants(orbit, 60)
    unit = length / geodesic.LIGHT_SPEED[orbit["system"]].numerator
    unit *= geodesic.LIGHT_SPEED[orbit["system"]].denominator
    found = quadrature.periods(energy, momentum)
    found["radial_period"] *= unit
    found["proper_radial_period"] *= unit
    return dict(found)


def _axis(orbit: dict[str, Any]) -> list[Any]:
    x, v = ([mpmath.mpf(q) for q in orbit[k]] for k in ("position", "velocity"))
    cross = [x[(i + 1) % 3] * v[(i + 2) % 3] - x[(i + 2) % 3] * v[(i + 1) % 3] for i in range(3)]
    size = mpmath.sqrt(sum(q * q for q in cross))
    return [q / size for q in cross]


def _turned(v: list[Any], axis: list[Any], angle: Any) -> list[Any]:
    """Rotation in the plane across the axis."""
    cosine, sine = mpmath.cos(angle), mpmath.sin(angle)
    n = axis
    cross = [n[(i + 1) % 3] * v[(i + 2) % 3] - n[(i + 2) % 3] * v[(i + 1) % 3] for i in range(3)]
    return [cosine * a + sine * b for a, b in zip(v, cross, strict=True)]


def end(orbit: dict[str, Any]) -> dict[str, str] | None:
    """Forward end of a plunge: at r = 0 in ingoing charts, at r = 2 otherwise (proper clock)."""
    base = orbit["name"].split("/")[0]
    falls = ("plunge", "capture", "radial-in", "radial-back", "radial-rest", "light-capture")
    falls += ("plunge-proper", "radial-rest-proper", "light-radial-in", "parabolic-capture")
    falls += ("light-trapped",)
    if base not in falls:
        return None
    ingoing = orbit["chart"] in table.CHARTS[3:]
    if not ingoing and orbit["clock"] != "proper":
        return None
    energy, momentum, radius, outward, _ = invariants(orbit, 130)
    massive = orbit["particle"] == "massive"
    target = 0 if ingoing else 2
    mp.dps = 36
    found = quadrature.time_to(energy, momentum, radius, outward, target, orbit["chart"], massive)
    clock = "parameter" if orbit["clock"] == "proper" else "chart_time"
    return {"time": mpmath.nstr(found[clock], 30)}


def main() -> None:
    processes = int(sys.argv[1]) if len(sys.argv) > 1 else 1
    orbits = table.orbits()
    named = {orbit["name"]: orbit for orbit in orbits}
    bound = [o for o in orbits if o["name"].split("/")[0] in ("bound", "bound-proper", "satellite")]
    bound += [named["planet/isotropic"], named["near-parabolic/areal"]]
    with ProcessPoolExecutor(processes) as pool:
        stored = list(pool.map(one, orbits))
        distant = list(pool.map(far, [(named[n], k, t) for n, k, t in table.FAR]))
        found = dict(zip((o["name"] for o in bound), pool.map(periods, bound), strict=True))
        ends = dict(zip(named, pool.map(end, orbits), strict=True))
    document = {
        "about": (
            "States by the second route: Hamilton's equations in Cartesian coordinates of the "
            "chart, Taylor series in proper time (affine parameter), 56 digits, by "
            "tests/reference/make_second_route.py; no code of the package is used. Start values "
            "are the exact float64 numbers given; times are elapsed clock times. agreement: "
            "largest relative difference to a second run with 50 digits and another order. "
            "far/...: the remainder after whole radial periods, periods by quadrature. periods, "
            "ends: quadratures of the radial equation (mp_quadrature.py)."
        ),
        "orbits": stored,
        "far": distant,
        "periods": found,
        "ends": {name: value for name, value in ends.items() if value is not None},
    }
    DATA.write_text(json.dumps(document, indent=0) + "\n")
    worst = max(stored, key=lambda o: float(o["agreement"]))
    print(f"{len(stored)} orbits; least agreement {worst['agreement']:.1e} ({worst['name']})")


if __name__ == "__main__":
    main()
