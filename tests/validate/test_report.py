"""Reports: the terminal page word by word, the JSON document key by key, the picture."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.budget import RULE
from truefall.validate.check import CheckResult, check_trajectory
from truefall.validate.errors import InputError
from truefall.validate.report import write_report
from truefall.validate.report.document import document, error_summary
from truefall.validate.report.style import length_scale, readable, time_scale
from truefall.validate.report.text import explain_residual, render
from truefall.validate.trajectory import Quantisation, Trajectory

GM_EARTH = 3.986004418e14  # IERS Conventions 2010 (TN 36), Table 1.1

Make = Callable[..., Trajectory]

GOLDEN = """\
FAIL  run.csv [run]
  orbit     bound (massive), areal chart, coordinate time
            E - 1 = -0.0235831676, L = 4.16604515 GM/c
            periapsis 8, apoapsis 32 GM/c^2 (areal)
            radial period 689.611 GM/c^3
  samples   101 rows, start from its declaration (orbit file, header, sidecar)
  error            largest         rms         at time  unit
  position         7.0e-07     4.1e-07            1000  GM/c^2
    radial         3.0e-07     1.6e-07             850  GM/c^2
    along          2.8e-07     1.3e-07            1000  GM/c^2
    cross          6.0e-07     3.5e-07            1000  GM/c^2
  velocity         5.0e-09     2.9e-09            1000  c
  clock            2.0e-08     1.2e-08            1000  GM/c^3
  energy           3.7e-08     1.3e-08             690  relative
  ang. mom.        6.0e-08     2.8e-08             690  relative
  growth    like t^1.00 (linear)
  floor     7.8e-22 GM/c^2 (reference bound)
  rule: guarded acceptance and rejection: pass if d + w <= T, fail if d - w > T,
        undecided between; w is the reference's bound b, the share q of the
        digits, and rounding
  position: FAIL at row 101, time 1000
      T = 5e-07  d = 7e-07  w = 7.8e-22  b = 2.8e-30  q = 0
      29 rows out of budget for certain
"""


def _changed(trajectory_of: Make, **options: Any) -> Trajectory:
    """Errors of 3, -2 and 6 units of 1e-7 at the end, in velocity 3 and 4 of 1e-9, all linear."""
    orbit = Orbit(position=[8.0, 0.0, 0.0], velocity=[0.0, 0.4, 0.0])
    exact = trajectory_of(orbit, np.linspace(0.0, 1000.0, 101), **options)
    assert exact.velocity is not None
    assert exact.proper_time is not None
    ramp = exact.time[:, None] / 1000
    return replace(
        exact,
        position=exact.position + ramp * np.array([3e-7, -2e-7, 6e-7]),
        velocity=exact.velocity + ramp * np.array([3e-9, 0.0, 4e-9]),
        proper_time=exact.proper_time + ramp[:, 0] * 2e-8,
    )


def test_the_terminal_page(trajectory_of: Make) -> None:
    """Verdict, orbit, errors, growth, floor, and the rule with its numbers: as printed.

    Radial error and energy drift were recomputed from the states by E = f/sqrt(f - ...), the
    textbook form without the care for weak fields.
    """
    page = render(check_trajectory(_changed(trajectory_of, budget={"position": 5e-7})))

    assert page + "\n" == GOLDEN


def _many(trajectory_of: Make) -> list[CheckResult]:
    satellite = Orbit(
        system="SI", gm=GM_EARTH, position=[7.0e6, 0.0, 0.0], velocity=[0.0, 7.5e3, 500.0]
    )
    ray = Orbit(particle="light", position=[20.0, 1.0, 2.0], velocity=[-1.0, 0.35, 0.1])
    radial = Orbit(position=[10.0, 0.0, 0.0], velocity=[-0.1, 0.0, 0.0], clock="proper")
    inside = Orbit(position=[6.0, 0.0, 0.0], velocity=[0.0, 0.1, 0.0], chart="painleve-gullstrand")
    coarse = replace(
        trajectory_of(satellite, np.linspace(0.0, 86400.0, 80), start=False),
        quantisation=Quantisation(
            time=0.5, position=np.full(3, 50.0), velocity=np.full(3, 0.05), clock=0.5
        ),
    )
    budget = {"position": 1.0, "velocity": 1e-3, "clock": 1e-9, "energy": 1e-9}
    tight = {"per_revolution": {"position": 1e-30}}
    trajectories = [
        _changed(trajectory_of, budget={"position": 5e-7}),
        replace(coarse, metadata={**coarse.metadata, "budget": budget}),
        trajectory_of(satellite, np.linspace(0.0, 86400.0, 80), budget=budget),
        trajectory_of(ray, np.linspace(0.0, 60.0, 30)),
        trajectory_of(radial, np.linspace(0.0, 5.0, 30), drop=("velocity",), budget=tight),
        trajectory_of(inside, np.linspace(0.0, 12.0, 30)),
        trajectory_of(satellite, [0.0, 60.0], drop=("velocity", "proper_time")),
        trajectory_of(satellite, [0.0], start=False),
    ]
    results = [check_trajectory(replace(t, name=f"run {k}")) for k, t in enumerate(trajectories)]
    return [*results, CheckResult("a.csv", "a", "unusable", "a.csv: there is no such file")]


def test_every_page_is_plain_and_narrow(trajectory_of: Make) -> None:
    """At most 80 columns of ASCII, whatever the system, particle and verdict."""
    results = _many(trajectory_of)

    assert {r.verdict for r in results} == {
        "pass", "fail", "undecided", "not-judged", "unusable"
    }  # fmt: skip
    for result in results:
        page = render(result) + "\n" + explain_residual(result)

        assert page.isascii()
        assert not [line for line in page.splitlines() if len(line) > 80]
        assert "nan" not in page
        assert "inf" not in page.replace("infall", "")


def test_the_page_tells_what_the_digits_leave_open(trajectory_of: Make) -> None:
    """When they end, what to do about it, and how many rows that leaves."""
    page = render(_many(trajectory_of)[1])

    assert "UNDECIDED" in page
    assert "--orbit" in page
    assert "--fit" in page
    assert "not judged" in page


def test_names_cannot_reach_the_terminal_raw(trajectory_of: Make) -> None:
    """Control characters in a file's name are replaced."""
    result = check_trajectory(_changed(trajectory_of))

    page = render(replace(result, file="a\x1b[31m.csv", name="b\x07", reason="c\x1b"))
    assert "\x1b" not in page
    assert "\x07" not in page


KEYS: dict[str, Any] = {
    "file": str, "name": str, "verdict": str, "reason": str, "samples": int, "start_from": str,
    "rule": str, "judged": list, "findings": list,
    "orbit": {
        "class": str, "energy": float, "energy_minus_one": float, "angular_momentum": float,
        "periapsis": float, "apoapsis": float, "radial_period": float,
        "azimuth_per_radial_period": float,
    },
    "start": {"time": float, "position": list, "velocity": list},
    "error": {
        key: {"max": float, "rms": float, "at_time": float}
        for key in ("position", "radial", "along", "cross", "velocity", "clock")
    },
    "invariants": {
        "energy": {"max_drift": float, "slope": float, "guard": float},
        "angular_momentum": {
            "max_drift": float, "slope": float, "guard": float, "max_tilt": float
        },
        "norm": {"max_drift": float, "slope": float, "guard": float},
    },
    "floor": {"position": float, "from": str, "predictable_until": float, "over_time": list},
    "reference": {
        "kind": str, "bound": float, "certified_samples": int, "certified": str,
        "table_error_by_bound": float,
    },
    "growth": {"exponent": float, "kind": str},
    "explanation": {"description": str, "ambiguous": list},
    "ends": {
        "before": {"time": float, "reason": str}, "after": {"time": float, "reason": str}
    },
}  # fmt: skip
JUDGED: dict[str, Any] = {
    "quantity": str, "outcome": str, "tolerance": float, "deviation": float, "guard": float,
    "margin": float, "adequacy": float, "bound": float, "quantisation": float, "row": int,
    "time": float, "undecided_rows": int, "failing_rows": int, "unjudged_rows": int,
}  # fmt: skip
CLASSES = (
    "bound", "circular-stable", "circular-unstable", "asymptotic", "plunge", "capture", "flyby",
    "radial", "trapped", "critical",
)  # fmt: skip


def _matches(found: Any, shape: Any, where: str) -> None:
    """Every key there, of its kind or null, and no number that JSON cannot hold."""
    if found is None:
        return
    if isinstance(shape, dict):
        assert set(found) <= set(shape), where
        for key, value in found.items():
            _matches(value, shape[key], f"{where}.{key}")
        return
    assert isinstance(found, shape), f"{where} is {found!r}"
    assert not isinstance(found, float) or math.isfinite(found), where


def test_the_document_has_every_key(trajectory_of: Make) -> None:
    """Of the documented kind, finite or null, for every verdict; and it is strict JSON."""
    results = _many(trajectory_of)
    found = json.loads(json.dumps(document(results), allow_nan=False))

    assert found["verdict"] == "unusable"
    assert len(found["files"]) == len(results)
    for entry in found["files"]:
        assert set(entry) == set(KEYS)
        _matches(entry, KEYS, entry["name"])
        assert entry["rule"] == RULE
        assert entry["findings"] == []
        for judged in entry["judged"]:
            assert set(judged) == set(JUDGED)
            _matches(judged, JUDGED, f"{entry['name']}.judged")
        if entry["error"] is not None:
            assert set(entry["error"]) == set(KEYS["error"])
            assert entry["orbit"]["class"] in CLASSES
            assert entry["floor"]["from"] in (
                "digits of the file", "reference bound", "time stamps"
            )  # fmt: skip
            assert entry["reference"]["certified_samples"] == entry["samples"]


def test_the_document_of_a_known_error(trajectory_of: Make) -> None:
    """Numbers in the file's own units, rows counted from 1."""
    result = check_trajectory(_changed(trajectory_of, budget={"position": 5e-7}))
    found = result.as_json()
    (judged,) = found["judged"]

    assert found["error"]["position"]["max"] == pytest.approx(7e-7, rel=1e-6)
    assert found["error"]["position"]["at_time"] == 1000.0
    assert found["error"]["velocity"]["max"] == pytest.approx(5e-9, rel=1e-6)
    assert (judged["row"], judged["time"], judged["failing_rows"]) == (101, 1000.0, 29)
    assert judged["margin"] == pytest.approx(-2e-7, rel=1e-6)
    assert found["growth"]["kind"] == "linear"
    assert found["orbit"]["periapsis"] == pytest.approx(8.0)


def test_a_summary_survives_extreme_sizes() -> None:
    """Squares of 1e-200 and 1e200 would leave float64; states without a value are left out."""
    time = np.arange(3.0)
    for size in (1e-200, 1e200):
        found = error_summary(np.array([size, -2 * size, np.nan]), time)

        assert found is not None
        assert found["max"] == 2 * size
        assert found["rms"] == pytest.approx(np.sqrt(2.5) * size)
        assert found["at_time"] == 1.0
    assert error_summary(np.array([np.nan]), time[:1]) is None
    assert error_summary(None, time) is None


def test_reports_are_written(trajectory_of: Make, tmp_path: Path) -> None:
    """Text, JSON and a picture each, equal to what is printed, names made safe."""
    results = _many(trajectory_of)
    results[0] = replace(results[0], name="../a $b_ c")
    folder = tmp_path / "deep" / "report"
    written = write_report(results, folder)

    assert sorted(folder.iterdir()) == sorted(written)
    assert (folder / "report.txt").read_text() == "\n\n".join(map(render, results)) + "\n"
    assert json.loads((folder / "report.json").read_text()) == document(results)
    pictures = [p for p in written if p.suffix == ".png"]
    assert len(pictures) == sum(r.comparison is not None for r in results)
    for picture in pictures:
        data = picture.read_bytes()
        assert data.startswith(b"\x89PNG")
        assert int.from_bytes(data[16:20], "big") >= 1000  # pixels across
    assert pictures[0].name == "a-b_-c.png"


def test_pictures_are_the_same_every_time(trajectory_of: Make, tmp_path: Path) -> None:
    """No clock and no chance in them."""
    result = check_trajectory(_changed(trajectory_of))
    for name in ("one", "two"):
        write_report([result], tmp_path / name)

    assert (tmp_path / "one" / "run.png").read_bytes() == (
        tmp_path / "two" / "run.png"
    ).read_bytes()


def test_equal_names_get_files_of_their_own(trajectory_of: Make, tmp_path: Path) -> None:
    """Two trajectories called alike do not overwrite each other."""
    result = check_trajectory(_changed(trajectory_of))
    write_report([result, result, result], tmp_path)

    assert {p.name for p in tmp_path.glob("*.png")} == {"run.png", "run-2.png", "run-3.png"}


def test_a_folder_that_cannot_be_written(trajectory_of: Make, tmp_path: Path) -> None:
    """One sentence that names it."""
    (tmp_path / "taken").write_text("")
    result = check_trajectory(_changed(trajectory_of))

    with pytest.raises(InputError, match=r"taken: cannot be written"):
        write_report([result], tmp_path / "taken")


@pytest.mark.parametrize(
    ("size", "unit", "name"),
    [(7e6, "m", "10^3 km"), (1.5e8, "km", "10^6 km"), (50.0, "m", "m"), (20.0, "GM/c^2", "GM/c^2")],
)
def test_lengths_get_sensible_multiples(size: float, unit: str, name: str) -> None:
    """Numbers on the axes stay short."""
    factor, found = length_scale(size, unit)

    assert found == name
    assert 1 <= size / factor < 3000


@pytest.mark.parametrize(
    ("span", "name"), [(1e8, "yr"), (1e6, "d"), (86400.0, "h"), (100.0, "s"), (0.01, "ms")]
)
def test_times_get_sensible_multiples(span: float, name: str) -> None:
    """Seconds, hours, days or years."""
    assert time_scale(span, "s")[1] == name
    assert time_scale(span, "GM/c^3") == (1.0, "GM/c^3")


def test_powers_are_set_as_powers() -> None:
    """In pictures only."""
    assert readable("GM/c^2") == "GM/c$^{2}$"
    assert readable("10^6 km") == "10$^{6}$ km"
    assert readable("m/s") == "m/s"
