"""The main job end to end: files in, verdicts out."""

from __future__ import annotations

import json
from collections.abc import Callable
from itertools import combinations
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.reference import Orbit
from truefall.validate.check import CheckResult, check_file, exit_status, worst_verdict
from truefall.validate.errors import UsageError
from truefall.validate.formats import write_states
from truefall.validate.orbit_file import parse_orbit

GM_EARTH = 3.986004418e14  # IERS Conventions 2010 (TN 36), Table 1.1
TIMES = np.linspace(0.0, 1000.0, 60)

Write = Callable[..., Path]


def _orbit() -> Orbit:
    return Orbit(position=[8.0, 0.0, 0.0], velocity=[0.0, 0.4, 0.0])


def _shift(size: float, column: str = "x") -> Callable[[dict[str, Any]], None]:
    def change(columns: dict[str, Any]) -> None:
        columns[column] = columns[column] + size * columns["time"] / columns["time"][-1]

    return change


def _check(path: Path, **options: Any) -> CheckResult:
    (result,) = check_file(path, **options)
    json.dumps(result.as_json(), allow_nan=False)
    return result


@pytest.mark.parametrize(
    ("error", "budget", "verdict", "status"),
    [
        (1e-9, {"position": 1e-6}, "pass", 0),
        (1e-5, {"position": 1e-6}, "fail", 1),
        (1e-5, {}, "not-judged", 5),
    ],
)
def test_verdict_and_exit_status(
    csv_of: Write, error: float, budget: dict[str, float], verdict: str, status: int
) -> None:
    """Within budget 0, out of budget 1, no budget 5."""
    result = _check(csv_of(_orbit(), TIMES, change=_shift(error)), budget=budget)

    assert result.verdict == verdict
    assert exit_status([result]) == status
    assert result.as_json()["error"]["position"]["max"] == pytest.approx(error, rel=1e-6)


def test_few_digits_are_undecided(csv_of: Write) -> None:
    """Six digits cannot show that an error is below 1e-6: exit status 3."""
    result = _check(csv_of(_orbit(), TIMES, digits=6, start=True), budget={"position": 1e-6})

    assert result.verdict == "undecided"
    assert exit_status([result]) == 3
    assert result.floor is not None
    assert result.floor.source == "digits of the file"
    assert result.floor.predictable_until is None  # the start is declared, not read


def test_digits_of_the_first_row_are_carried(csv_of: Write) -> None:
    """From some time on they exceed the budget; what lies past it is not judged."""
    path = csv_of(_orbit(), TIMES, digits=9)
    result = _check(path, budget={"position": 1e-6})
    assert result.floor is not None
    assert result.comparison is not None
    until = result.floor.predictable_until

    assert result.start_from == "first row"
    assert result.verdict == "undecided"
    assert until is not None
    assert 0 < until < 1000
    carried = result.comparison.position_guard.carried
    np.testing.assert_array_equal(carried > 1e-6, until < TIMES)
    assert result.judgements[0].unjudged_rows == int(np.sum(until < TIMES))
    # without a budget one per cent of r is the measure, and that is reached later
    free = _check(path)
    assert free.floor is not None
    assert free.floor.predictable_until is None
    # and a start given elsewhere leaves nothing to carry
    assert _check(csv_of(_orbit(), TIMES, digits=9, start=True)).floor.predictable_until is None  # type: ignore[union-attr]


def test_an_unstable_circle_is_predictable_by_its_digits(csv_of: Write) -> None:
    """Seventeen digits last longer than eight by ln(10^9)/lambda, up to the grid of samples.

    The rate of the unstable circle at r: Cardoso et al. 2009, Phys. Rev. D 79, 064016 (from
    memory): lambda = sqrt(M (6 M - r)/r^4) = 1/25 at r = 5, per coordinate time.
    """
    r = 5.0
    rate = (6.0 - r) ** 0.5 / r**2
    orbit = Orbit(position=(r, 0.0, 0.0), velocity=(0.0, r**-0.5, 0.0))
    times = np.linspace(0.0, 1200.0, 1201)
    ends = {}
    for digits in (17, 8):
        result = _check(csv_of(orbit, times, digits=digits), budget={"position": 1e-3})
        assert result.verdict == "undecided"
        ends[digits] = result.floor.predictable_until  # type: ignore[union-attr]
    gained = ends[17] - ends[8]

    assert gained == pytest.approx(np.log(1e9) / rate, rel=0.05)
    over_time = _check(csv_of(orbit, times, digits=8)).as_json()["floor"]["over_time"]
    assert over_time[0]["from"] == "digits of the file"
    growth = np.diff(np.log([o["position"] for o in over_time[2:7]]))
    steps = np.diff([o["time"] for o in over_time[2:7]])
    assert growth / steps == pytest.approx(rate, rel=0.15)


def test_an_error_before_the_predictable_end_still_fails(csv_of: Write) -> None:
    """A certain failure is a failure whatever comes later."""
    path = csv_of(_orbit(), TIMES, digits=9, change=_shift(1e-2))

    assert _check(path, budget={"position": 1e-6}).verdict == "fail"


def test_a_lone_start_row_is_not_judged(csv_of: Write) -> None:
    """Nothing is said by it, with or without a budget."""
    for start in (False, True):
        result = _check(csv_of(_orbit(), TIMES[:1], start=start), budget={"position": 1e-6})

        assert result.verdict == "not-judged"
        assert result.reason == "the only row is the start itself"


def test_positions_alone_need_a_fit_or_a_start(csv_of: Write, tmp_path: Path) -> None:
    """The sentence names both ways out, and both work."""
    path = csv_of(_orbit(), TIMES, drop=("velocity",))
    result = _check(path, budget={"position": 1e-9})

    assert result.verdict == "unusable"
    assert exit_status([result]) == 4
    assert "--fit" in result.reason
    assert "--orbit" in result.reason
    assert result.reason.startswith(str(path))
    assert _check(path, budget={"position": 1e-9}, fit=True).verdict == "pass"
    orbit_file = tmp_path / "orbit.toml"
    orbit_file.write_text(
        'system = "geometric"\ngm = 1.0\nparticle = "massive"\nchart = "areal"\n'
        'clock = "coordinate"\n[start]\nposition = [8.0, 0.0, 0.0]\nvelocity = [0.0, 0.4, 0.0]\n'
    )
    declared = _check(path, budget={"position": 1e-9}, orbit_file=orbit_file)
    assert (declared.verdict, declared.start_from) == ("pass", "orbit file")


def _falling() -> Orbit:
    return Orbit(position=[6.0, 0.0, 0.0], velocity=[0.0, 0.1, 0.0], clock="proper")


def _go_on(extra: float) -> Callable[[dict[str, Any]], None]:
    def change(columns: dict[str, Any]) -> None:
        for name, values in columns.items():
            columns[name] = np.append(values, values[-1] + (extra if name == "time" else 0.0))

    return change


def test_a_file_that_goes_on_after_the_end_fails(csv_of: Write) -> None:
    """The sentence names end, row and time; the rows before are judged all the same."""
    orbit = _falling()
    assert orbit.ends_after is not None
    times = np.linspace(0.0, orbit.ends_after.time - 0.5, 20)
    result = _check(csv_of(orbit, times, change=_go_on(1.0)), budget={"position": 1e-6})

    assert result.verdict == "fail"
    assert repr(orbit.ends_after.time) in result.reason
    assert "row 21" in result.reason
    assert repr(float(times[-1] + 1.0)) in result.reason
    assert result.judgements[0].outcome == "pass"
    found = result.as_json()
    assert found["samples"] == 21
    assert found["ends"]["after"] == {
        "time": orbit.ends_after.time, "reason": orbit.ends_after.reason
    }  # fmt: skip


def test_digits_may_leave_the_end_open(csv_of: Write) -> None:
    """Three digits move the end by more than the overshoot: undecided, and said."""
    orbit = _falling()
    assert orbit.ends_after is not None
    times = np.linspace(0.0, orbit.ends_after.time - 1e-3, 20)
    path = csv_of(orbit, times, digits=3, drop=("coordinate_time",), change=_go_on(3e-3))
    result = _check(path, budget={"position": 10.0})

    assert result.verdict == "undecided"
    assert "cannot settle" in result.reason


def test_a_file_wholly_past_the_end_fails(csv_of: Write) -> None:
    """There is nothing to compare, and the verdict stands."""
    path = csv_of(_falling(), [0.0, 1.0], start=True)
    text = path.read_text().replace("\n0.0,", "\n100.0,").replace("\n1.0,", "\n101.0,")
    path.write_text(text)
    result = _check(path, budget={"position": 1e-6})

    assert result.verdict == "fail"
    assert result.comparison is None
    assert "row 1 has time 100.0" in result.reason


def test_budgets_per_revolution_grow(csv_of: Write) -> None:
    """An error linear in time within a budget that is too, and out of a constant one."""
    orbit = Orbit(position=[20.0, 0.0, 0.0], velocity=[0.0, 0.2236, 0.0])
    path = csv_of(orbit, np.linspace(0.0, 5600.0, 60), change=_shift(8e-6))

    assert _check(path, budget={"position": 2e-6}).verdict == "fail"
    growing = _check(path, budget={"per_revolution": {"position": 2e-6}})
    assert growing.verdict == "pass"
    assert growing.judgements[0].quantity == "per_revolution.position"


def test_si_units_and_sizes_with_units(csv_of: Write) -> None:
    """An Earth satellite, errors of a tenth of a millimetre, budgets in mm and ns."""
    orbit = Orbit(
        system="SI", gm=GM_EARTH, position=[7.0e6, 0.0, 0.0], velocity=[0.0, 7.5e3, 500.0]
    )
    path = csv_of(orbit, np.linspace(0.0, 86400.0, 50), change=_shift(1e-4, "z"))
    budget = {"position": "1 mm", "velocity": "1 um/s", "clock": "1 ns", "energy": 1e-10}
    result = _check(path, budget=budget)

    assert result.verdict == "pass"
    assert [j.tolerance for j in result.judgements] == [1e-3, 1e-6, 1e-9, 1e-10]
    assert _check(path, budget={"position": "0.05 mm"}).verdict == "fail"


@pytest.mark.parametrize("times", [np.linspace(0.0, -300.0, 40), np.linspace(-200.0, 300.0, 40)])
def test_backwards_and_around_the_start(csv_of: Write, times: np.ndarray) -> None:
    """Decreasing stamps, and stamps on both sides of the start."""
    result = _check(csv_of(_orbit(), times, start=True), budget={"position": 1e-9})

    assert result.verdict == "pass"


def test_light_on_its_way(csv_of: Write) -> None:
    """Affine parameter as the clock, L/E as angular momentum, no energy to judge."""
    ray = Orbit(particle="light", position=[20.0, 1.0, 2.0], velocity=[-1.0, 0.35, 0.1])
    path = csv_of(ray, np.linspace(0.0, 60.0, 40), start=True)
    budget = {"position": 1e-9, "clock": 1e-9, "angular_momentum": 1e-9}
    found = _check(path, budget=budget).as_json()

    assert found["verdict"] == "pass"
    assert found["invariants"]["energy"] is None
    assert found["invariants"]["norm"]["max_drift"] < 1e-14
    refused = _check(path, budget={"energy": 1e-9})
    assert refused.verdict == "unusable"
    assert "E = 1" in refused.reason


@pytest.mark.parametrize(
    ("budget", "said"),
    [
        ({"velocity": 1e-6}, "no velocities"),
        ({"energy": 1e-6}, "no velocities"),
        ({"clock": 1e-6}, "no second clock"),
        ({"positon": 1e-6}, "did you mean 'position'"),
    ],
)
def test_budgets_that_cannot_be_judged(csv_of: Write, budget: dict[str, float], said: str) -> None:
    """Unusable, naming the file, what is missing and what to do."""
    path = csv_of(_orbit(), TIMES, drop=("velocity", "proper_time"), start=True)
    result = _check(path, budget=budget)

    assert result.verdict == "unusable"
    assert said in result.reason
    assert result.reason.startswith(str(path))


def _stored(path: Path, orbit: Orbit, times: np.ndarray, certified: bool = True) -> Path:
    start = {"position": list(orbit.position), "velocity": list(orbit.velocity)}
    spec = parse_orbit(
        {
            "name": "stored", "system": orbit.system, "gm": orbit.gm, "chart": orbit.chart,
            "particle": orbit.particle, "clock": orbit.clock, "start": start,
        },
        path,
    )  # fmt: skip
    write_states(path, spec, orbit, orbit.at(times), certified=certified)
    return path


@pytest.mark.parametrize("certified", [True, False])
def test_a_stored_set_can_be_the_reference(csv_of: Write, tmp_path: Path, certified: bool) -> None:
    """Its values, its bounds and its start, also for a file of positions alone."""
    reference = _stored(tmp_path / "ref.h5", _orbit(), TIMES, certified)
    path = csv_of(_orbit(), TIMES, drop=("velocity",), change=_shift(1e-9))
    result = _check(path, against=reference, budget={"position": 1e-6, "clock": 1e-6})
    found = result.as_json()

    assert result.verdict == "pass"
    assert result.start_from == "stored set"
    assert found["reference"]["kind"] == f"stored: {reference}"
    assert found["reference"]["certified_samples"] == 0
    assert 1e-18 < found["reference"]["bound"] < 1e-14  # half a unit of float64, as stored
    assert _check(path, against=reference, budget={"position": 1e-10}).verdict == "fail"
    growing = _check(path, against=reference, budget={"per_revolution": {"position": 1e-6}})
    assert growing.verdict == "pass"


def test_a_stored_bound_can_be_too_coarse(csv_of: Write, tmp_path: Path) -> None:
    """Half a unit of float64 at r = 30 cannot prove a smaller tolerance kept."""
    reference = _stored(tmp_path / "ref.h5", _orbit(), TIMES)
    result = _check(csv_of(_orbit(), TIMES), against=reference, budget={"position": 1.5e-15})
    (judgement,) = result.judgements

    assert result.verdict == "undecided"
    assert judgement.adequacy is not None
    assert judgement.adequacy < 4


def test_time_stamps_must_match_the_stored_set(csv_of: Write, tmp_path: Path) -> None:
    """The first row that differs is named."""
    reference = _stored(tmp_path / "ref.h5", _orbit(), TIMES)
    moved = TIMES.copy()
    moved[7] += 1e-9
    for times, row in ((moved, "row 8"), (TIMES[:-1], "row 60")):
        result = _check(csv_of(_orbit(), times), against=reference)

        assert result.verdict == "unusable"
        assert row in result.reason


def test_declarations_must_match_the_stored_set(csv_of: Write, tmp_path: Path) -> None:
    """Another chart is another trajectory."""
    reference = _stored(tmp_path / "ref.h5", _orbit(), TIMES)
    other = Orbit(position=[8.0, 0.0, 0.0], velocity=[0.0, 0.4, 0.0], chart="harmonic")
    result = _check(csv_of(other, TIMES), against=reference)

    assert result.verdict == "unusable"
    assert "chart" in result.reason


def test_a_reference_needs_bounds(csv_of: Write) -> None:
    """Somebody's CSV is no reference."""
    path = csv_of(_orbit(), TIMES)
    result = _check(path, against=path)

    assert result.verdict == "unusable"
    assert "position_bound" in result.reason


def test_fit_and_against_exclude_each_other(csv_of: Write) -> None:
    """A wrong command line, not a wrong file."""
    path = csv_of(_orbit(), TIMES)
    with pytest.raises(UsageError, match="--fit"):
        check_file(path, fit=True, against=path)


def test_a_missing_file_is_unusable(tmp_path: Path) -> None:
    """One result, one sentence; other files go on."""
    (result,) = check_file(tmp_path / "none.csv")

    assert result.verdict == "unusable"
    assert result.samples == 0
    json.dumps(result.as_json(), allow_nan=False)


VERDICTS = ("unusable", "fail", "undecided", "not-judged", "pass")
STATUS = dict(zip(VERDICTS, (4, 1, 3, 5, 0), strict=True))


@pytest.mark.parametrize("verdicts", [c for n in (1, 2, 3, 5) for c in combinations(VERDICTS, n)])
def test_several_files_have_one_status(verdicts: tuple[str, ...]) -> None:
    """The first of 4, 1, 3, 5, 0 that occurs, in whatever order the files come."""
    for order in (verdicts, verdicts[::-1]):
        results = [CheckResult("f", "f", v) for v in order]

        assert exit_status(results) == STATUS[verdicts[0]]
        assert worst_verdict(results) == verdicts[0]
