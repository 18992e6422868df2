"""The demo: verdicts as the stories deserve them, a folder worth looking at, in time."""

from __future__ import annotations

import html.parser
import json
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from truefall.validate import demo
from truefall.validate import demo_propagator as inhouse

Run = Callable[..., Any]


class Links(html.parser.HTMLParser):
    """What a page refers to."""

    def __init__(self) -> None:
        super().__init__()
        self.found: list[str] = []
        self.anchors: set[str] = set()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        del tag
        for key, value in attrs:
            if key in ("src", "href") and value:
                self.found.append(value)
            if key == "id" and value:
                self.anchors.add(value)


def test_demo_runs_and_leaves_a_whole_folder(run: Run, tmp_path: Path) -> None:
    folder = tmp_path / "show"
    begin = time.perf_counter()
    done = run("demo", folder)
    took = time.perf_counter() - begin
    assert done.status == 0, done.text
    assert took < 30, f"{took:.1f} s"
    for story in demo.STORIES:
        report = json.loads((folder / story.name / "report.json").read_text())
        assert report["verdict"] == story.verdict
        assert (folder / story.name / f"{story.name}.png").stat().st_size > 10_000
        assert f"{story.name}: {story.text}" in done.out
    links = Links()
    links.feed((folder / "index.html").read_text("utf-8"))
    assert links.found
    for link in links.found:
        if link.startswith("#"):
            assert link[1:] in links.anchors
        elif link.startswith("data:"):
            assert link.startswith("data:image/png;base64,iVBOR")
        else:
            assert (folder / link).is_file(), link
    # it can be run again in its own folder, and by hand on its own files
    assert run("check", folder / "input" / "tern-release.csv").status == 0
    assert run("check", folder / "input" / "tern-coarse.csv").status == 1


def test_demo_spares_folders_with_other_things(run: Run, tmp_path: Path) -> None:
    (tmp_path / "thesis.txt").write_text("precious")
    done = run("demo", tmp_path)
    assert done.status == 4
    assert "other things" in done.err
    assert [p.name for p in tmp_path.iterdir()] == ["thesis.txt"]
    done = run("demo", tmp_path / "thesis.txt")
    assert done.status == 4
    assert "is a file" in done.err


def test_a_verdict_that_surprises_is_a_fault(
    run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    surprising = replace(demo.STORIES[0], verdict="fail", rows=5)
    monkeypatch.setattr(demo, "STORIES", (surprising,))
    done = run("demo", tmp_path / "show")
    assert done.status == 70
    assert "tern-release is pass, not fail" in done.err


def test_stories_hold_every_verdict_both_particles_and_two_systems() -> None:
    assert {s.verdict for s in demo.STORIES} == {"pass", "fail", "undecided"}
    assert {s.particle for s in demo.STORIES} == {"massive", "light"}
    assert {s.system for s in demo.STORIES} == {"geometric", "SI"}


def test_the_demos_propagator_is_of_fourth_order() -> None:
    """Halving the step divides the error by 16 (classical Runge-Kutta, Kutta 1901)."""
    ends = [
        np.array(
            inhouse.propagate((12.0, 0.0), (0.0, 0.3), rows=2, interval=100.0, steps=n)[-1].position
        )
        for n in (20, 40, 640)
    ]
    coarse, fine = (float(np.linalg.norm(end - ends[2])) for end in ends[:2])
    assert coarse / fine == pytest.approx(16, rel=0.15)


def test_newtons_orbit_in_the_demo_closes() -> None:
    """Kepler's third law: a circle of radius r closes after 2 pi r^(3/2)."""
    period = 2 * np.pi * 16.0**1.5
    path = inhouse.propagate(
        (16.0, 0.0), (0.0, 0.25), rows=2, interval=period, steps=400, force=inhouse.newton
    )
    assert np.allclose(path[-1].position, (16.0, 0.0, 0.0), atol=1e-6)


def test_light_in_the_demo_starts_at_the_speed_of_light() -> None:
    x, y = -30.0, 9.0
    vx, vy = inhouse.light_speed(x, y, 1.0, 0.2)
    r = np.hypot(x, y)
    f = 1 - 2 / r
    radial, tangential = (x * vx + y * vy) / r, (x * vy - y * vx) / r
    assert f - radial**2 / f - tangential**2 == pytest.approx(0.0, abs=1e-15)
    assert vy / vx == pytest.approx(0.2)
