"""Every method: measured order, agreement, refusals; every set of equations: the exact orbit."""

from __future__ import annotations

import numpy as np
import pytest

from truefall.integrators import EQUATIONS, ensemble, propagate
from truefall.reference import Orbit
from truefall.reference.charts import convert

#: Window of a measured order around the nominal one.
ORDER_WINDOW = 0.2
#: Position error allowed after ten revolutions at r = 12, from rounding alone: units of 1e-16 in
#: the momenta move the phase by about 1e-12.
ROUNDING = 3e-11
RELATIVISTIC = [name for name, e in EQUATIONS.items() if e.kind >= 2]


def start_in(chart):
    """The same physical start in each chart: areal r = 12, mildly eccentric and inclined."""
    return convert([12.0, 0.0, 0.0], [0.0, 0.27, 0.04], "areal", chart)


@pytest.mark.parametrize("name", RELATIVISTIC)
def test_taylor_follows_the_exact_orbit_in_every_chart_and_variable(name):
    """Massive, ten revolutions, within rounding of the certified states, clock included."""
    found = EQUATIONS[name]
    x, v = start_in(found.chart)
    times = np.linspace(0.0, 2500.0, 26)
    exact = Orbit(chart=found.chart, position=x, velocity=v).at(times)
    for variable in found.variables:
        run = propagate(name, x, v, times, method="taylor", tolerance=1e-17, variable=variable)

        assert run.status == "finished"
        assert np.abs(run.position - exact.position).max() < ROUNDING
        assert np.abs(run.velocity - exact.velocity).max() < ROUNDING / 10
        assert np.abs(run.clock - exact.proper_time).max() < ROUNDING


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"method": "tayler"}, "did you mean 'taylor'"),
        ({"equations": "polar"}, "known are areal"),
        ({"times": [0.0, 1.0, 1.0]}, "strictly increasing"),
        ({"tolerance": 0.0}, "positive"),
        ({"velocity": (0.0, 1.0, 0.0)}, "speed of light"),
        ({"position": (0.5, 0.0, 0.0)}, "radii above 1"),
    ],
)
def test_wrong_requests_are_refused(change, words):
    """Unknown names with the nearest known one, times, tolerances, impossible starts."""
    keys = {
        "equations": "harmonic", "position": (11.0, 0, 0), "velocity": (0, 0.2, 0),
        "times": [0.0, 1.0], "method": "taylor", "tolerance": 1e-12,
    } | change  # fmt: skip
    named = {"method": keys.pop("method"), "tolerance": keys.pop("tolerance")}
    with pytest.raises(ValueError, match=words):
        propagate(*keys.values(), **named)


def test_an_ensemble_has_the_bits_of_its_orbits_one_by_one():
    """Threads, chunks and neighbours change nothing."""
    rng = np.random.default_rng(1)
    x = np.array([12.0, 0.0, 0.0]) + rng.uniform(-1, 1, (20, 3))
    v = np.array([0.0, 0.27, 0.04]) + rng.uniform(-0.01, 0.01, (20, 3))
    times = np.linspace(0.0, 500.0, 6)
    for method, keys in (("taylor", {"tolerance": 1e-15}), ("gauss-legendre-8", {"step": 0.05})):
        all_ = ensemble("mino", x, v, times, method=method, threads=2, **keys)
        for row in range(20):
            one = propagate("mino", x[row], v[row], times, method=method, **keys)
            assert one.status == all_.status[row]
            assert one.position.tobytes() == all_.position[row].tobytes()
            assert one.clock.tobytes() == all_.clock[row].tobytes()
