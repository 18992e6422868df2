"""The benchmark runs and names its figures; how fast a machine is, is not tested."""

from __future__ import annotations

import json
import sys

import pytest

from truefall.validate import benchmarks
from truefall.validate.benchmarks_long import check_generated, measure_long


@pytest.mark.slow
def test_the_benchmark_prints_figures_that_make_sense(monkeypatch, capsys):
    """One JSON document of positive numbers; the table is faster than exact states one by one."""
    monkeypatch.setattr(benchmarks, "_REVOLUTIONS", 20)
    monkeypatch.setattr(sys, "argv", ["benchmarks", "--json"])
    benchmarks.main()
    figures = json.loads(capsys.readouterr().out)

    assert all(value > 0 for value in figures.values())
    assert figures["table states per second"] > 100 * figures["certified states per second"]
    # the four units that the table promises, on the very build that was timed
    for turn in ("1", "1,000,000"):
        assert figures[f"table error at revolution {turn}, ulp of the vector's size"] <= 4
    assert figures["its largest position error, GM/c^2"] < 1e-6


def test_long_files_are_measured_as_whole_processes():
    """Small ones here; the verdict on generated rows is a pass, in the memory of a few blocks."""
    figures = measure_long(20_000, 50_000)

    assert all(value > 0 for value in figures.values())
    assert any("check by reading" in name for name in figures)
    assert check_generated(30_000) == "pass"
