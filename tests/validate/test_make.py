"""Reference trajectories as files: exact values, ends, formats, and repeatability."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.validate.errors import InputError
from truefall.validate.formats import read_trajectories
from truefall.validate.make import make
from truefall.validate.orbit_file import OrbitSpec, parse_orbit

Run = Callable[..., Any]
FALL = {
    "system": "geometric", "gm": 1.0, "particle": "massive", "chart": "painleve-gullstrand",
    "clock": "coordinate",
    "start": {"position": [8.0, 0.0, 0.0], "velocity": [-0.5, 0.0, 0.0]},
}  # fmt: skip


def spec_of(times: list[float], **changes: Any) -> OrbitSpec:
    return parse_orbit({**FALL, **changes, "samples": {"times": times}}, "fall.toml")


def fallen(times: Any) -> Any:
    """Radius of the fall with E = 1 from r = 8 in Painleve-Gullstrand time (its proper time).

    dr/dT = -sqrt(2/r), so r^(3/2) = 8^(3/2) - 3 T/sqrt(2); textbook, from memory.
    """
    return (8**1.5 - 3 * np.asarray(times) / math.sqrt(2)) ** (2 / 3)


@pytest.mark.parametrize("suffix", [".csv", ".h5", ".npz", ".parquet"])
def test_every_format_holds_the_fall(tmp_path: Path, suffix: str) -> None:
    if suffix == ".parquet":
        pytest.importorskip("pyarrow", reason="the optional extra 'parquet' is not installed")
    times = [0.0, 1.0, 4.25, 10.0]
    made = make(spec_of(times), tmp_path / f"fall{suffix}")
    assert (made.rows, made.orbit_class, made.end_note) == (4, "radial", "")
    (found,) = read_trajectories(made.path)
    assert found.time.tolist() == times
    assert np.allclose(found.position[:, 0], fallen(times), rtol=1e-14, atol=0)
    assert found.velocity is not None
    assert np.allclose(found.velocity[:, 0], -np.sqrt(2 / fallen(times)), rtol=1e-14, atol=0)
    assert found.proper_time is not None
    assert found.proper_time.tolist() == times
    assert found.metadata["chart"] == "painleve-gullstrand"
    assert not found.quantisation.any


def test_a_time_past_the_end_is_refused_with_both_times(tmp_path: Path) -> None:
    with pytest.raises(InputError) as refusal:
        make(spec_of([0.0, 5.0, 20.0]), tmp_path / "fall.csv")
    for word in ("fall.toml", "r = 0", "10.666666666666666", "sample 3", "20.0", "--truncate"):
        assert word in str(refusal.value)
    assert not list(tmp_path.iterdir())


def test_truncated_rows_stop_at_the_end_which_is_recorded(tmp_path: Path) -> None:
    made = make(spec_of([0.0, 5.0, 20.0, 30.0]), tmp_path / "fall.csv", truncate=True)
    assert made.rows == 2
    assert "10.666666666666666" in made.end_note
    (found,) = read_trajectories(made.path)
    assert found.time.tolist() == [0.0, 5.0]
    assert found.metadata["ends_at"] == pytest.approx(32 / 3, rel=1e-15)
    assert found.metadata["end_reason"] == "r = 0"


def test_truncation_that_would_leave_no_row_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="ends at r = 0"):
        make(spec_of([20.0, 30.0]), tmp_path / "fall.csv", truncate=True)
    assert not list(tmp_path.iterdir())


def test_an_orbit_file_without_samples_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="samples"):
        make(parse_orbit(FALL, "fall.toml"), tmp_path / "fall.csv")


def test_an_oem_of_geometric_units_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="kilometres"):
        make(spec_of([0.0, 1.0]), tmp_path / "fall.oem")
    assert not list(tmp_path.iterdir())


def test_times_before_the_start_and_falling_times(tmp_path: Path) -> None:
    times = [2.0, 0.0, -3.0, -50.0]
    made = make(spec_of(times), tmp_path / "fall.npz")
    (found,) = read_trajectories(made.path)
    assert found.time.tolist() == times
    assert np.allclose(found.position[:, 0], fallen(times), rtol=1e-14, atol=0)


def test_certified_sets_hold_second_words_and_bounds(tmp_path: Path) -> None:
    made = make(spec_of([0.0, 1.0, 10.0]), tmp_path / "fall.h5", certified=True)
    (found,) = read_trajectories(made.path)
    assert found.stored is not None
    low, bound = found.stored.arrays["position_low"], found.stored.arrays["position_bound"]
    assert low.shape == bound.shape == (3, 3)
    # |high - truth| <= bound, and high + low is the truth to 32 digits
    assert np.all(np.abs(low) <= bound * (1 + 1e-15))
    assert np.all(bound <= np.spacing(np.abs(found.position)) / 2 * (1 + 1e-15))
    import mpmath

    with mpmath.workdps(50):
        for k, t in enumerate((0, 1, 10)):
            truth = (mpmath.mpf(8) ** 1.5 - 3 * t / mpmath.sqrt(2)) ** (mpmath.mpf(2) / 3)
            value = mpmath.mpf(float(found.position[k, 0])) + mpmath.mpf(float(low[k, 0]))
            assert abs(value - truth) < mpmath.mpf(10) ** -31


def test_repeated_runs_give_the_same_bytes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    spec = spec_of([0.0, 1.0, 10.0])
    for way in ("reproducible", "epoch"):
        if way == "epoch":
            monkeypatch.setenv("SOURCE_DATE_EPOCH", "1700000000")
        files = [tmp_path / f"{way}{k}" / "fall.h5" for k in (1, 2)]
        for file in files:
            file.parent.mkdir()
            make(spec, file, certified=True, reproducible=way == "reproducible")
        assert files[0].read_bytes() == files[1].read_bytes()


def test_an_existing_file_is_replaced_whole(tmp_path: Path) -> None:
    out = tmp_path / "fall.csv"
    out.write_text("old " * 10_000)
    make(spec_of([0.0, 1.0]), out)
    assert "old" not in out.read_text()
    assert [p.name for p in tmp_path.iterdir()] == ["fall.csv"]


def test_make_from_the_command_line_says_what_it_wrote(run: Run, tmp_path: Path) -> None:
    done = run("make", "--case", "plunge-kerr-schild", "--out", tmp_path / "down.h5")
    assert done.status == 0
    assert done.out == ""
    assert "281 rows, plunge orbit" in done.err
    done = run("check", tmp_path / "down.h5", "--budget", "position=1e-12")
    assert done.status == 0


def test_elements_become_a_start_in_the_file(tmp_path: Path) -> None:
    """Periapsis at p/(1 + e) on the x axis, moving along y."""
    spec = spec_of([0.0, 1.0], chart="areal", start={"semilatus_rectum": 12.0, "eccentricity": 0.5})
    made = make(spec, tmp_path / "orbit.csv")
    (found,) = read_trajectories(made.path)
    assert found.position[0].tolist() == [8.0, 0.0, 0.0]
    assert found.velocity is not None
    assert found.velocity[0, 1] > 0
    start = found.metadata["start"]
    assert isinstance(start, dict)
    assert start.get("position", [8.0, 0.0, 0.0]) == [8.0, 0.0, 0.0]
