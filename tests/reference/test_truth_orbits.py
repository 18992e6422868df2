"""The engine against independent orbits that came with the data: tests/data/truth_orbits.json.

Those were made by Taylor integration in 320-bit arithmetic; see the file's own words.
"""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path

import mp_geodesic as geodesic
import mp_quadrature as quadrature
import mpmath
import pytest
import second_route_compare as compare

from truefall.reference import EndReached, Orbit

HERE = Path(__file__).parent
ORBITS = json.loads((HERE.parent / "data" / "truth_orbits.json").read_text())["orbits"]
#: Samples of an entry that are an orbit (the others are shown not to be, below).
USABLE = {"whirl-painleve": 1}


def _engine(entry):
    return Orbit(**{key: entry[key] for key in compare.KEYS})


@pytest.mark.parametrize("entry", ORBITS, ids=lambda entry: entry["name"])
def test_states(entry):
    """1e-32 of each vector's size for both words, the nearest float64, and the proven bound."""
    count = USABLE.get(entry["name"], len(entry["times"]))
    states = _engine(entry).at(entry["times"][:count])
    with mpmath.workdps(45):
        faults = [
            fault
            for k, row in enumerate(entry["true"][:count])
            for fault in compare.compare_row(
                states, k, {name: value for name, value in row.items() if value is not None}, 1e-32
            )
        ]
    assert not faults, "\n".join(faults)


@pytest.mark.parametrize("entry", ORBITS, ids=lambda entry: entry["name"])
def test_velocity_used(entry):
    """For light, the direction scaled to light speed; else as given."""
    used = _engine(entry).velocity_used
    assert used == tuple(float(text) for text in entry["velocity_used"])


def test_the_entry_that_goes_on_past_its_end():
    """whirl-painleve: no turning point stops that orbit, so its samples from the second on, which
    come back out, are no orbit.  E and L from the Cartesian metric, the cubic's real roots, the
    full equations of motion and the time to r = 0 by quadrature agree on this, without the engine;
    the engine ends there."""
    (entry,) = (q for q in ORBITS if q["name"] == "whirl-painleve")
    arguments = {key: entry[key] for key in compare.KEYS}
    start = geodesic.Geodesic(**arguments, digits=100, order=2, use_gmpy=False)
    energy, cross = start.invariants()
    with mpmath.workdps(100):
        momentum = mpmath.sqrt(sum(q * q for q in cross))
        (only,) = quadrature.turning_points(energy, momentum)
        assert 1 / only > 25  # an apoapsis; nothing turns it back inside
    with mpmath.workdps(30):
        end = quadrature.time_to(
            energy, momentum, mpmath.mpf(25), False, 0, "painleve-gullstrand", True
        )["chart_time"]
    assert entry["times"][0] < end < entry["times"][1]
    integrated = geodesic.Geodesic(**arguments, digits=20)
    (inside,) = integrated.states([Fraction(185)])
    assert sum(float(q) ** 2 for q in inside["position"]) < 4
    orbit = _engine(entry)
    assert orbit.orbit_class == "plunge"
    assert orbit.ends_after.time == float(end)
    with pytest.raises(EndReached):
        orbit.at(entry["times"])
