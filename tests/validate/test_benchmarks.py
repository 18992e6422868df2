"""The benchmark runs and names its figures; how fast a machine is, is not tested."""

from __future__ import annotations

import json
import sys

import pytest

from truefall.validate import benchmarks


@pytest.mark.slow
def test_the_benchmark_prints_figures_that_make_sense(monkeypatch, capsys):
    """One JSON document of positive numbers; the table is faster than exact states one by one."""
    monkeypatch.setattr(sys, "argv", ["benchmarks", "--json"])
    benchmarks.main()
    figures = json.loads(capsys.readouterr().out)

    assert all(value > 0 for value in figures.values())
    assert figures["table states per second"] > 100 * figures["certified states per second"]
    assert figures["its position error at the end, GM/c^2"] < 1e-6
