"""Tolerances as data, and the guard-banded decision at its boundaries."""

from __future__ import annotations

from itertools import product
from math import inf, nan, nextafter

import numpy as np
import pytest

from truefall.validate.budget import (
    Judgement,
    judge,
    overall,
    parse_budget,
    parse_budget_options,
)
from truefall.validate.compare import Guard
from truefall.validate.errors import InputError, UsageError


def _guard(w: list[float]) -> Guard:
    zero = np.zeros(len(w))
    return Guard(np.array(w), zero, zero, zero, zero)


def _judge(
    deviation: list[float], w: list[float], tolerance: float = 1.0, judged: list[bool] | None = None
) -> Judgement:
    n = len(deviation)
    return judge(
        "position",
        np.full(n, tolerance),
        np.array(deviation),
        _guard(w),
        np.arange(n, dtype=float),
        np.ones(n, dtype=bool) if judged is None else np.array(judged),
    )


@pytest.mark.parametrize(
    ("deviation", "w", "outcome"),
    [
        (0.75, 0.25, "pass"),  # d + w == T conforms
        (nextafter(0.75, inf), 0.25, "undecided"),
        (1.0, 0.0, "pass"),
        (nextafter(1.0, inf), 0.0, "fail"),
        (1.25, 0.25, "undecided"),  # d - w == T is no proof of failure
        (nextafter(1.25, inf), 0.25, "fail"),
        (0.0, 1.0, "pass"),
        (0.0, nextafter(1.0, inf), "undecided"),
        (5.0, inf, "undecided"),
        (nan, 0.0, "undecided"),
        (0.0, nan, "undecided"),
    ],
)
def test_one_sample_is_decided_at_the_boundaries(deviation: float, w: float, outcome: str) -> None:
    """pass if d + w <= T, fail if d - w > T, undecided between; no value never conforms."""
    assert _judge([deviation], [w]).outcome == outcome


@pytest.mark.parametrize("outcomes", list(product(("pass", "undecided", "fail"), repeat=3)))
def test_a_trajectory_conforms_only_if_every_sample_does(outcomes: tuple[str, ...]) -> None:
    """One certain failure fails it; any other mixture with an undecided sample is undecided."""
    samples = {"pass": (0.5, 0.25), "undecided": (1.0, 0.25), "fail": (2.0, 0.25)}
    deviation, w = zip(*(samples[o] for o in outcomes), strict=True)
    expected = next(o for o in ("fail", "undecided", "pass") if o in outcomes)

    found = _judge(list(deviation), list(w))

    assert expected == found.outcome
    assert outcomes.count("fail") == found.failing_rows
    assert outcomes.count("undecided") == found.undecided_rows
    assert outcomes[found.row] == expected


def test_the_row_shown_has_the_worst_margin() -> None:
    """T, d, w, margin and time are those of the row nearest to (or furthest past) the limit."""
    found = _judge([0.5, 0.7, 0.1], [0.1, 0.2, 0.3])

    assert (found.row, found.time) == (1, 1.0)
    assert found.deviation == 0.7
    assert found.guard == 0.2
    assert found.margin == pytest.approx(0.1)


def test_rows_past_the_predictable_time_are_not_judged() -> None:
    """They never fail and never pass; an earlier failure stands."""
    assert _judge([0.1, 9.0], [0.0, 0.0], judged=[True, False]).outcome == "undecided"
    assert _judge([0.1, 0.1], [0.0, 0.0], judged=[True, False]).outcome == "undecided"
    found = _judge([9.0, 9.0], [0.0, 0.0], judged=[True, False])
    assert (found.outcome, found.failing_rows, found.unjudged_rows) == ("fail", 1, 1)


def test_an_undecided_row_that_was_judged_is_shown_first() -> None:
    """It says more than one that was left out."""
    found = _judge([0.1, 0.9, 50.0], [0.0, 0.2, 0.0], judged=[True, True, False])

    assert (found.row, found.undecided_rows, found.unjudged_rows) == (1, 2, 1)


def test_adequacy_is_the_ratio_of_tolerance_to_reference_bound() -> None:
    """None where the reference is exact."""
    assert _judge([0.1], [0.5]).adequacy == 2.0
    assert _judge([0.1], [0.0]).adequacy is None


@pytest.mark.parametrize("outcomes", list(product(("pass", "undecided", "fail"), repeat=2)))
def test_all_quantities_must_pass(outcomes: tuple[str, ...]) -> None:
    """The same rule again over the tolerances of a budget."""
    samples = {"pass": (0.5, 0.25), "undecided": (1.0, 0.25), "fail": (2.0, 0.25)}
    judgements = [_judge([samples[o][0]], [samples[o][1]]) for o in outcomes]

    assert overall(judgements) == next(o for o in ("fail", "undecided", "pass") if o in outcomes)


def test_without_a_budget_nothing_is_judged() -> None:
    """No judgement is no verdict."""
    assert overall([]) == "not-judged"


@pytest.mark.parametrize(
    ("key", "text", "system", "value"),
    [
        ("position", "1 mm", "SI", 1e-3),
        ("position", "1 mm", "astronomical", 1e-6),
        ("position", "2.5 km", "SI", 2500.0),
        ("position", "1e-3 m", "SI", 1e-3),
        ("position", "1 au", "astronomical", 149_597_870.7),
        ("velocity", "3 mm/s", "SI", 3e-3),
        ("velocity", "36 km/h", "SI", 10.0),
        ("clock", "1 ns", "SI", 1e-9),
        ("clock", "2 min", "astronomical", 120.0),
        ("energy", 1e-9, "SI", 1e-9),
        ("position", "1e-6", "geometric", 1e-6),
        ("position", 2, "geometric", 2.0),
    ],
)
def test_tolerances_come_in_the_units_of_the_file(
    key: str, text: object, system: str, value: float
) -> None:
    """A unit is converted exactly; a plain number is in the file's own unit."""
    assert parse_budget({key: text}, system).absolute == {key: value}


def test_tolerances_may_grow_with_the_revolutions() -> None:
    """A table of its own, truthy alone, and flat for reports."""
    budget = parse_budget({"per_revolution": {"position": "1 m"}, "clock": 1e-9}, "SI")

    assert bool(budget)
    assert budget.flat() == {"clock": 1e-9, "per_revolution.position": 1.0}


@pytest.mark.parametrize(
    ("table", "system", "said"),
    [
        ({"positon": 1.0}, "SI", "did you mean 'position'"),
        ({"per_revolution": {"energy": 1.0}}, "SI", "unknown budget 'energy'"),
        ({"per_revolution": 1.0}, "SI", "must be a table"),
        ({"position": "1 mm"}, "geometric", "geometric units have no mm"),
        ({"position": "1 s"}, "SI", "a length such as"),
        ({"velocity": "1 m"}, "SI", "a speed such as"),
        ({"clock": "1 parsec"}, "SI", "a time such as"),
        ({"energy": "1 m"}, "SI", "a plain number"),
        ({"position": 0.0}, "SI", "positive and finite"),
        ({"position": -1.0}, "SI", "positive and finite"),
        ({"position": inf}, "SI", "positive and finite"),
        ({"position": True}, "SI", "must be a number"),
        ({"position": [1.0]}, "SI", "must be a number"),
    ],
)
def test_what_is_no_tolerance_is_refused(table: dict, system: str, said: str) -> None:
    """One sentence that names the key and what is allowed, after the file."""
    with pytest.raises(InputError, match=r"^orbit\.toml: .*" + said):
        parse_budget(table, system, "orbit.toml")


def test_options_make_the_same_table() -> None:
    """Several options, or several in one with commas; later ones win."""
    options = ["position=1 mm, velocity=1e-8", "per_revolution.position=1e-3", "position=2 mm"]

    assert parse_budget_options(options) == {
        "position": "2 mm",
        "velocity": "1e-8",
        "per_revolution": {"position": "1e-3"},
    }


@pytest.mark.parametrize(
    ("option", "said"),
    [
        ("positoin=1", "did you mean 'position'"),
        ("position", "write for example position=1e-6"),
        ("=1", "write for example"),
        ("position=", "write for example"),
        ("per_revolution.energy=1", "unknown budget 'energy'"),
        ("position=tiny", "'tiny' is neither a positive number"),
        ("position=-1", "'-1' is neither"),
        ("position=nan", "'nan' is neither"),
    ],
)
def test_a_wrong_option_is_a_wrong_command_line(option: str, said: str) -> None:
    """UsageError (exit status 2), not a fault of the file."""
    with pytest.raises(UsageError, match=said):
        parse_budget_options([option])
