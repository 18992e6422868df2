"""The table against the exact solution it is made from, and its kernel against plain Python."""

from __future__ import annotations

import os
import subprocess
import sys

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.reference.table import build_table

#: Units in the last place of the vector's size that the table may be off (its promise).
ULPS = 4.0

ORBITS = {
    "bound": {"position": (10.0, 0, 0), "velocity": (0, 0.34, 0.02)},
    "bound-proper": {"position": (10.0, 1, 0), "velocity": (0, 0.33, 0.02), "clock": "proper"},
    "satellite": {
        "system": "SI", "gm": 398600441800000.0, "chart": "harmonic",
        "position": (7.2e6, 0, 3e5), "velocity": (10.0, 7300.0, 1200.0),
    },
    "painleve": {
        "chart": "painleve-gullstrand", "position": (20.0, 0, 0), "velocity": (-0.02, 0.2, 0),
    },
    "flyby": {"chart": "harmonic", "position": (150.0, 0, 0), "velocity": (-0.4, 0.034, 0)},
    "light": {
        "particle": "light", "chart": "isotropic", "position": (-60.0, 8, 1), "velocity": (1, 0, 0),
    },
    "plunge": {"chart": "kerr-schild", "position": (6.0, 0, 0), "velocity": (-0.25, 0.2, 0)},
}  # fmt: skip


def _spans(orbit):
    if orbit.radial_period is None:
        return [(orbit.start_time, orbit.start_time + (14.0 if orbit.ends_after else 150.0))]
    period = orbit.radial_period.value
    if orbit.clock == "proper":
        period = orbit.proper_radial_period.value
    return [(-2 * period, 2 * period), (1e6 * period, (1e6 + 1) * period)]


@pytest.mark.parametrize("name", ORBITS)
def test_the_table_is_right_to_a_few_ulp_at_revolution_one_and_a_million(name):
    """At random times that its making never saw; the promised error covers what is found."""
    orbit = Orbit(**ORBITS[name])
    spans = _spans(orbit)
    table = build_table(orbit, spans[0][0], spans[0][1])
    rng = np.random.default_rng(20)
    for low, high in spans:
        times = np.sort(rng.uniform(low, high, 60))
        true = orbit.at(times)
        position, velocity, clock = table.at(times)
        for values, high_word, low_word, promised in (
            (position, true.position, true.position_low, table.error[0]),
            (velocity, true.velocity, true.velocity_low, table.error[1]),
        ):
            error = np.linalg.norm((values - high_word) - low_word, axis=1)
            size = np.linalg.norm(high_word, axis=1)
            assert np.all(error <= ULPS * np.spacing(size))
            assert np.all(error <= promised * size)
        reading = next(
            c for c in (true.coordinate_time, true.affine, true.proper_time) if c is not None
        )
        # near its zero a clock cannot be finer than the interval it is fitted on
        width = float(np.max(np.diff(table.edges)))
        assert np.all(np.abs(clock - reading) <= ULPS * np.spacing(np.abs(reading) + width))


def test_times_outside_an_unbound_table_are_refused():
    """A flyby's table covers what was asked for and nothing else."""
    orbit = Orbit(**ORBITS["flyby"])
    table = build_table(orbit, 0.0, 100.0)

    with pytest.raises(ValueError, match="covers times"):
        table.at([101.0])


SCRIPT = """
import numpy as np
from truefall.reference import Orbit
from truefall.reference.table import build_table
orbit = Orbit(position=(10.0, 0, 0), velocity=(0, 0.34, 0.02), start_time=3.0)
table = build_table(orbit, 0.0, 1.0)
times = np.concatenate([np.linspace(-900.0, 900.0, 40), [3.7e8, -4.1e8, 3.0]])
print(b"".join(a.tobytes() for a in table.at(times)).hex())
"""


@pytest.mark.slow
def test_the_compiled_kernel_equals_its_interpreted_source():
    """Bit for bit, in two child processes, one with compilation switched off (time-limited)."""
    outputs = []
    for disabled in ("0", "1"):
        environment = {**os.environ, "NUMBA_DISABLE_JIT": disabled}
        done = subprocess.run(
            [sys.executable, "-c", SCRIPT], env=environment, capture_output=True, text=True,
            timeout=120, check=True,
        )  # fmt: skip
        outputs.append(done.stdout)

    assert outputs[0] == outputs[1]


def test_the_kernel_and_the_maker_agree_on_the_shape_of_the_pieces():
    """Degree and overlap are written down twice, so that making a table loads no compiler."""
    from truefall.reference import table, table_kernel

    assert table_kernel.DEGREE == table._DEGREE
    assert table_kernel.SLACK == table._SLACK


def test_values_depend_on_the_time_alone():
    """In order, reversed, shuffled, one by one, in two threads: the same bits, also at seams."""
    orbit = Orbit(position=(10.0, 0, 0), velocity=(0, 0.34, 0.02))
    period = orbit.radial_period.value
    table = build_table(orbit, 0.0, 1.0)
    rng = np.random.default_rng(4)
    start = float(table.edges[0])
    seams = start + np.arange(-3, 50) * period
    times = np.concatenate(
        [rng.uniform(-1e5, 1e6, 500), *(seams + d for d in (0.0, 1e-7, -1e-7, 4e-7, 1e-12))]
    )
    whole = table.at(times)
    shuffled = rng.permutation(times.size)
    for order in (np.arange(times.size)[::-1], shuffled):
        for a, b in zip(whole, table.at(times[order]), strict=True):
            assert np.array_equal(a[order], b)
    for k in range(0, times.size, 7):
        assert np.array_equal(table.at(times[k : k + 1])[0][0], whole[0][k])
    many = np.tile(times, 200)
    assert np.array_equal(table.at(many)[1][: times.size], whole[1])
