"""Long files in blocks: the same figures as all rows in memory, whatever the blocks and threads."""

from __future__ import annotations

import json
from dataclasses import replace

import h5py
import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.reference.charts import CHARTS
from truefall.reference.invariants import state_invariants
from truefall.reference.table import build_table
from truefall.validate import formats
from truefall.validate.budget import parse_budget
from truefall.validate.check import check_file, compared
from truefall.validate.errors import InputError
from truefall.validate.formats import long_rows, read_trajectories, write_trajectory
from truefall.validate.judging import floor_of, judgements_of, position_tolerance
from truefall.validate.report.document import error_summary
from truefall.validate.screening import tabled_expected
from truefall.validate.starts import find_start
from truefall.validate.streaming.long_check import check_rows
from truefall.validate.streaming.rows import BLOCK, MemoryRows, first_row
from truefall.validate.trajectory import Quantisation, Trajectory

ROWS = 3 * BLOCK + 700


@pytest.fixture(autouse=True)
def every_file_is_long(monkeypatch):
    """However well it is compressed."""
    monkeypatch.setattr(formats, "_LONG_BYTES", 0)


CASES = {
    "bound": {"position": (10.0, 0, 0), "velocity": (0, 0.34, 0.02)},
    "proper": {"position": (10.0, 1, 0), "velocity": (0, 0.33, 0.02), "clock": "proper"},
    "satellite": {
        "system": "SI", "gm": 398600441800000.0, "chart": "harmonic",
        "position": (7.2e6, 0, 3e5), "velocity": (10.0, 7300.0, 1200.0),
    },
    "light": {
        "particle": "light", "chart": "isotropic", "position": (-60.0, 8, 1), "velocity": (1, 0, 0),
    },
    "radial": {"chart": "painleve-gullstrand", "position": (30.0, 0, 0), "velocity": (-0.1, 0, 0)},
    "circle": {"position": (5.0, 0, 0), "velocity": (0, 0.2**0.5, 0)},
}  # fmt: skip


def noisy(name: str, rows: int = ROWS, backwards: bool = False) -> Trajectory:
    """Table values with relative noise of 1e-10, as a trajectory with a declared start."""
    orbit = Orbit(**CASES[name])
    last = 100.0 if orbit.radial_period is None else 30 * orbit.radial_period.value
    times = np.linspace(0.0, last, rows) + 0.001 * last / rows
    if backwards:
        times = -times
    table = build_table(orbit, float(times.min()), float(times.max()))
    rng = np.random.default_rng(rows)
    position, velocity, clock = (
        a * (1 + 1e-10 * rng.standard_normal(a.shape)) for a in table.at(times)
    )
    light, proper = orbit.particle == "light", orbit.clock == "proper"
    metadata = {
        "name": name, "system": orbit.system, "gm": orbit.gm, "particle": orbit.particle,
        "chart": orbit.chart, "clock": orbit.clock,
        "start": {
            "time": 0.0, "position": list(orbit.position), "velocity": list(orbit.velocity)
        },
        "budget": {"position": 1e-9 * float(np.abs(position).max())},
    }  # fmt: skip
    return Trajectory(
        path=f"{name}.h5", name=name, time=times, position=position, velocity=velocity,
        proper_time=None if light or proper else clock, coordinate_time=clock if proper else None,
        affine=clock if light else None, metadata=metadata, quantisation=Quantisation(),
    )  # fmt: skip


def all_rows(trajectory: Trajectory):
    """Every row compared in memory with the table, by the comparison of short files."""
    start = find_start(trajectory, fit=False, stored=None)
    orbit = start.spec.orbit()
    table = build_table(orbit, float(trajectory.time.min()), float(trajectory.time.max()))
    return compared(trajectory, start, orbit, tabled_expected(orbit, table, trajectory.time))


@pytest.mark.parametrize(
    ("name", "backwards"),
    [*((name, False) for name in CASES), ("bound", True), ("satellite", True), ("light", True)],
)
def test_statistics_are_those_of_all_rows(name, backwards):
    """Largest, rms, row and slope of every quantity, against numpy over the whole file."""
    trajectory = noisy(name, backwards=backwards)
    whole = all_rows(trajectory)
    start = find_start(trajectory, fit=False, stored=None)
    result = check_rows(MemoryRows(trajectory), start)
    drifts = whole.drifts
    series = {
        "position": whole.distance, "radial": whole.radial, "along": whole.along,
        "cross": whole.cross, "velocity": whole.velocity_error, "clock": whole.clock_error,
        "energy": None if drifts.energy is None else drifts.energy.values,
        "angular_momentum": drifts.angular_momentum.values,
        "norm": None if drifts.norm is None else drifts.norm.values,
    }  # fmt: skip

    assert result.samples == ROWS
    for quantity, values in series.items():
        if values is None:
            assert quantity not in result.totals.errors
            continue
        largest, rms, row = result.totals.errors[quantity]
        expected = error_summary(values, whole.time)
        # differences of the same numbers; a few ulp of the state remain
        assert largest == pytest.approx(expected["max"], rel=1e-4, abs=1e-15), quantity
        assert rms == pytest.approx(expected["rms"], rel=1e-4, abs=1e-16), quantity
        assert np.abs(values[row]) == pytest.approx(expected["max"], rel=1e-4, abs=1e-15)
    for quantity in ("energy", "angular_momentum", "norm"):
        drift = getattr(drifts, quantity)
        if drift is not None:
            noise = np.abs(drift.values).max() / np.ptp(whole.time)
            slope = result.totals.slopes[quantity]
            assert slope == pytest.approx(drift.slope, rel=1e-3, abs=1e-4 * noise)


def judged(trajectory: Trajectory, comparison):
    """Judgements of all rows by the table's own guard."""
    start = find_start(trajectory, fit=False, stored=None)
    spec = start.spec
    budget = parse_budget(trajectory.metadata["budget"], spec.system, "x")
    radius = np.linalg.norm(trajectory.position, axis=1)
    _, rows = floor_of(comparison, position_tolerance(comparison, budget, radius))
    return judgements_of(comparison, budget, rows, "x", spec.particle == "light")


@pytest.mark.parametrize("share", [0.2, 0.9, 3.0])
def test_rows_in_and_out_of_budget_are_counted_as_all_rows_would_be(share):
    """Every quantity at tolerances that some, many and no rows exceed."""
    trajectory = noisy("bound")
    whole = all_rows(trajectory)
    sizes = {
        "position": whole.distance, "velocity": whole.velocity_error,
        "clock": np.abs(whole.clock_error), "energy": np.abs(whole.drifts.energy.values),
        "angular_momentum": whole.drifts.angular_momentum.values,
    }  # fmt: skip
    budget = {k: share * float(np.max(v)) for k, v in sizes.items()}
    budget["per_revolution"] = {"position": share * float(np.max(whole.distance)) / 10}
    trajectory = replace(trajectory, metadata={**trajectory.metadata, "budget": budget})
    expected = judged(trajectory, whole)
    result = check_rows(MemoryRows(trajectory), find_start(trajectory, fit=False, stored=None))

    for mine, theirs in zip(result.judgements, expected, strict=True):
        assert mine.quantity == theirs.quantity
        assert mine.outcome == theirs.outcome
        # a row that the table's guard leaves open is settled by its exact value
        settled = mine.failing_rows - theirs.failing_rows
        assert 0 <= settled <= theirs.undecided_rows, mine.quantity
        if mine.outcome == "fail":
            assert mine.row == theirs.row, mine.quantity
        else:  # the table's guard moves the smallest margin, not the largest deviation
            assert mine.deviation >= theirs.deviation * (1 - 1e-6), mine.quantity
            assert mine.bound < 1e-25  # the row that is shown is an exact one
        assert mine.undecided_rows <= theirs.undecided_rows


def test_the_result_does_not_depend_on_slabs_or_threads(tmp_path):
    """Byte for byte the same document from one block at a time and from all at once."""
    path = tmp_path / "long.h5"
    write_trajectory(path, noisy("bound", 5 * BLOCK + 17))
    documents = []
    for threads, slab in ((1, BLOCK), (2, 3 * BLOCK), (3, 16 * BLOCK)):
        with long_rows(path) as (rows,):
            start = find_start(first_row(rows), fit=False, stored=None)
            documents.append(check_rows(rows, start, threads=threads, slab=slab).as_json())
    in_memory = check_rows(
        MemoryRows(read_trajectories(path)[0]), start
    ).as_json()  # and from memory

    assert documents[0] == documents[1] == documents[2] == in_memory


@pytest.mark.parametrize("name", ["bound", "light"])
def test_compiled_invariants_are_the_readable_ones(name):
    """In every chart, weak and strong fields, to a few units in the last place."""
    from truefall.reference.invariants_kernel import CHART_NUMBER, invariants_of

    light = name == "light"
    rng = np.random.default_rng(7)
    x = rng.standard_normal((200, 3))
    x *= (10.0 ** rng.uniform(0.5, 9, 200) / np.linalg.norm(x, axis=1))[:, None]
    v = rng.standard_normal((200, 3)) * 0.3 / np.linalg.norm(x, axis=1)[:, None] ** 0.5
    for chart in CHARTS:
        inv = state_invariants(x, v, chart, "geometric", 1.0, "light" if light else "massive")
        found = np.array(
            [invariants_of(CHART_NUMBER[chart], light, *a, *b) for a, b in zip(x, v, strict=True)]
        )
        np.testing.assert_array_equal(np.isnan(found[:, 1]), np.isnan(inv.angular_momentum[:, 0]))
        size = np.linalg.norm(inv.angular_momentum, axis=1)[:, None]
        assert np.nanmax(np.abs(found[:, 1:4] - inv.angular_momentum) / size) < 2e-15
        if light:
            assert np.nanmax(np.abs(found[:, 4] - inv.null)) < 4e-15
        else:
            error = np.abs(found[:, 0] - inv.energy_minus_one) / inv.scale
            assert np.nanmax(error) < 4e-15


LAYOUTS = {
    "ours": {"chunks": True, "compression": "gzip", "shuffle": True, "fletcher32": True},
    "contiguous": {},
    "odd chunks": {"chunks": 1777, "compression": "gzip"},
    "large chunks": {"chunks": 20_000, "shuffle": True},
    "checksum only": {"chunks": 4096, "fletcher32": True},
    "big-endian": {"chunks": 4096, "dtype": ">f8", "shuffle": True, "compression": "gzip"},
    "single": {"chunks": 4096, "dtype": "<f4", "shuffle": True, "compression": "gzip"},
}


def rewritten(path, trajectory, layout):
    """The trajectory in another layout of the same groups."""
    options = dict(layout)
    kind, chunk = options.pop("dtype", "<f8"), options.pop("chunks", None)
    write_trajectory(path, trajectory)
    with h5py.File(path, "r+") as file:
        group = file["trajectory"][trajectory.name]
        for name in ("position", "velocity"):
            values = group[name][()]
            del group[name]
            chunks = (
                None if chunk is None else (min(8192 if chunk is True else chunk, len(values)), 3)
            )
            group.create_dataset(name, data=values.astype(kind), chunks=chunks, **options)
    return path


@pytest.mark.parametrize("name", LAYOUTS)
def test_blocks_hold_what_the_hdf5_library_reads(tmp_path, name):
    """Any cut of the rows, in every layout that is read by places, also float32 and its digits."""
    trajectory = noisy("bound", 2 * BLOCK + 99)
    path = rewritten(tmp_path / "set.h5", trajectory, LAYOUTS[name])
    (whole,) = read_trajectories(path)
    with long_rows(path) as (rows,):
        for first, last in ((0, 1), (0, len(whole)), (1776, 1778), (BLOCK - 1, 2 * BLOCK + 5)):
            block = rows.block(first, last)
            for key in ("time", "position", "velocity", "proper_time"):
                np.testing.assert_array_equal(block.values[key], getattr(whole, key)[first:last])
            if name == "single":
                expected = whole.quantisation.position[first:last]
                np.testing.assert_array_equal(block.quanta["position"], expected)


@pytest.mark.parametrize("name", ["ours", "odd chunks", "checksum only", "contiguous"])
def test_damage_and_truncation_are_refused_in_one_sentence(tmp_path, name):
    """A flipped byte under a checksum or a compression, and a file that ends too early."""
    path = rewritten(tmp_path / "set.h5", noisy("bound", 2 * BLOCK), LAYOUTS[name])
    with h5py.File(path) as file:
        dataset = file["trajectory/bound/position"]
        place = dataset.id.get_offset()
        if place is None:
            place = dataset.id.get_chunk_info(0).byte_offset
    data = bytearray(path.read_bytes())
    if name != "contiguous":
        data[place + 50] ^= 0x10
        path.write_bytes(data)
        (result,) = check_file(path)
        assert result.verdict == "unusable"
        assert "damaged" in result.reason
    data[place + 50] ^= 0x10
    path.write_bytes(data[: len(data) // 2])
    (result,) = check_file(path)
    assert result.verdict == "unusable"


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        (lambda t: t.__setitem__(20_000, np.nan), "row 20001 of time is nan"),
        (lambda t: t.__setitem__(20_000, t[19_999]), "row 20001 repeats the time"),
        (
            lambda t: t.__setitem__(BLOCK, 0.0),
            f"row {BLOCK + 1} (0.0) turns back after row {BLOCK}",
        ),
    ],
)
def test_unusable_rows_are_named_wherever_they_are(tmp_path, change, sentence):
    """Also at the seam of two blocks."""
    trajectory = noisy("bound")
    path = tmp_path / "bad.h5"
    write_trajectory(path, trajectory)
    with h5py.File(path, "r+") as file:
        times = file["trajectory/bound/time"][()]
        change(times)
        file["trajectory/bound/time"][...] = times
    (result,) = check_file(path)

    assert result.verdict == "unusable"
    assert sentence in result.reason


def test_rows_past_the_end_of_the_orbit_are_told_by_their_number(tmp_path):
    """A fall to r = 0 with a hundred rows too many: judged up to the end, failed for the rest."""
    orbit = Orbit(chart="painleve-gullstrand", position=(6.0, 0, 0), velocity=(-0.6, 0.0, 0))
    end = orbit.ends_after.time
    inside = np.linspace(0.0, end * 0.999, ROWS)
    table = build_table(orbit, 0.0, float(inside[-1]))
    position, velocity, _ = table.at(inside)
    extra = end + 1e-3 * np.arange(1, 101)
    trajectory = Trajectory(
        path="fall.h5", name="fall", time=np.concatenate([inside, extra]),
        position=np.concatenate([position, np.ones((100, 3))]),
        velocity=np.concatenate([velocity, np.zeros((100, 3))]), proper_time=None,
        coordinate_time=None, affine=None,
        metadata={
            "name": "fall", "system": "geometric", "gm": 1.0, "particle": "massive",
            "chart": "painleve-gullstrand", "clock": "coordinate",
            "start": {"position": [6.0, 0.0, 0.0], "velocity": [-0.6, 0.0, 0.0]},
        },
    )  # fmt: skip
    path = tmp_path / "fall.h5"
    write_trajectory(path, trajectory)
    (result,) = check_file(path)

    assert result.verdict == "fail"
    assert f"row {ROWS + 1} has time" in result.reason
    assert result.totals.last == ROWS
    assert result.comparison.distance.max() < 1e-13


def test_files_without_a_start_of_their_own_begin_at_their_first_row(tmp_path):
    """Single precision: the first row's digits are carried, and the floor says so."""
    trajectory = noisy("bound")
    metadata = {k: v for k, v in trajectory.metadata.items() if k != "start"}
    path = rewritten(
        tmp_path / "single.h5", replace(trajectory, metadata=metadata), LAYOUTS["single"]
    )
    (result,) = check_file(path, budget={"position": 1e-2, "energy": 1e-4})

    assert result.start_from == "first row"
    assert result.floor.source == "digits of the file"
    assert result.verdict in ("pass", "undecided")
    assert result.judgements[0].unjudged_rows >= 0
    with pytest.raises(InputError, match="no velocities"):
        find_start(replace(trajectory, metadata=metadata, velocity=None), fit=False, stored=None)


def test_a_long_file_gets_its_cause_and_a_picture(tmp_path, run):
    """gm too large by a millionth: named from two thousand of the rows kept."""
    keys = dict(CASES["satellite"])
    true = Orbit(**keys | {"gm": keys["gm"] * (1 + 1e-6)})
    trajectory = noisy("satellite")
    position, velocity, clock = build_table(true, 0.0, 1.0).at(trajectory.time)
    path = tmp_path / "long.h5"
    write_trajectory(
        path, replace(trajectory, position=position, velocity=velocity, proper_time=clock)
    )
    done = run(
        "check", path, "--budget", "position=1e-3", "--report", tmp_path / "report", "--json"
    )
    (file,) = json.loads(done.out)["files"]

    assert done.status == 1
    assert file["findings"][0]["cause"] == "gm-scaled"
    assert len(list((tmp_path / "report").glob("*cause-1*.png"))) == 1
