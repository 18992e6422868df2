"""``truefall demo``: the main job end to end, on data invented for it.

A survey ship keeps station off Corrow, a compact remnant; its probes' paths come from six
versions of a small in-house propagator, most of them wrong in a way that happens.
"""

from __future__ import annotations

import html
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from truefall.validate.errors import InputError

__all__ = ["run_demo"]

State = tuple[float, float, float, float, float]
Force = Callable[[float, float, float], tuple[float, float]]


def _geodesic(r: float, rdot: float, phidot: float) -> tuple[float, float]:
    """Areal geodesic in chart time: second derivatives of r and phi (particles and light)."""
    f = 1.0 - 2.0 / r
    return (
        r * f * phidot**2 - f / r**2 + 3.0 * rdot**2 / (f * r**2),
        -2.0 * rdot * phidot / r * (1.0 - 1.0 / (r * f)),
    )


def _newton(r: float, rdot: float, phidot: float) -> tuple[float, float]:
    """The same with relativity forgotten."""
    return r * phidot**2 - 1.0 / r**2, -2.0 * rdot * phidot / r


def _rate(state: State, force: Force) -> State:
    r, _, rdot, phidot, _ = state
    f = 1.0 - 2.0 / r
    dtau2 = f - rdot**2 / f - (r * phidot) ** 2
    a, b = force(r, rdot, phidot)
    return rdot, phidot, a, b, math.sqrt(max(dtau2, 0.0))


def _step(state: State, h: float, force: Force) -> State:
    """One step of the classical fourth-order Runge-Kutta method."""

    def shifted(k: State, w: float) -> State:
        a, b, c, d, e = (s + w * x for s, x in zip(state, k, strict=True))
        return a, b, c, d, e

    k1 = _rate(state, force)
    k2 = _rate(shifted(k1, h / 2), force)
    k3 = _rate(shifted(k2, h / 2), force)
    k4 = _rate(shifted(k3, h), force)
    a, b, c, d, e = (
        s + h / 6 * (p + 2 * q + 2 * u + v)
        for s, p, q, u, v in zip(state, k1, k2, k3, k4, strict=True)
    )
    return a, b, c, d, e


def _propagate(
    position: list[float], velocity: list[float], rows: int, span: float, steps: int, force: Force
) -> list[list[float]]:
    """Rows time, x, y, z, vx, vy, vz, proper time from an orbit in the plane z = 0."""
    x, y = position[:2]
    r = math.hypot(x, y)
    rdot = (x * velocity[0] + y * velocity[1]) / r
    phidot = (x * velocity[1] - y * velocity[0]) / r**2
    state: State = (r, math.atan2(y, x), rdot, phidot, 0.0)
    out = []
    h = span / (rows - 1) / steps
    for k in range(rows):
        r, phi, rdot, phidot, tau = state
        c, s = math.cos(phi), math.sin(phi)
        out.append(
            [k * steps * h, r * c, r * s, 0.0, rdot * c - r * phidot * s, rdot * s + r * phidot * c,
             0.0, tau]
        )  # fmt: skip
        for _ in range(steps):
            state = _step(state, h, force)
    return out


@dataclass(frozen=True)
class _Story:
    name: str
    text: str
    position: list[float]
    velocity: list[float]
    span: float
    rows: int
    steps: int
    budget: float
    force: Force = _geodesic
    particle: str = "massive"
    proper_stamps: bool = False
    digits: int = 17


_TERN = ([14.0, 0.0, 0.0], [0.0, 0.23, 0.0])
_STORIES = (
    _Story("tern-fine", "the release version of the propagator", *_TERN, 1500.0, 601, 20, 1e-6),
    _Story("tern-coarse", "the same with a step twenty times as long", *_TERN, 1500.0, 601, 1,
           1e-6),
    _Story("tern-newton", "relativity switched off by a forgotten flag", *_TERN, 1500.0, 601, 20,
           1e-6, force=_newton),
    _Story("tern-ship-time", "time stamps taken from the ship's own clock", *_TERN, 1500.0, 601, 20,
           1e-6, proper_stamps=True),
    _Story("tern-short-digits", "written with seven digits, judged to 1e-6", *_TERN, 120.0, 121, 20,
           1e-6, digits=7),
    _Story("lamp-half-bending", "a light ray bent by the Newtonian half only", [-60.0, 9.0, 0.0],
           [1.0, 0.0, 0.0], 140.0, 281, 20, 1e-6, force=_newton, particle="light"),
)  # fmt: skip


def _write_inputs(story: _Story, folder: Path) -> Path:
    """The orbit file and the trajectory file of a story."""
    from truefall.reference import Orbit

    velocity = story.velocity
    if story.particle == "light":
        orbit = Orbit(particle="light", position=story.position, velocity=velocity)
        velocity = list(orbit.velocity_used)
    table = _propagate(story.position, velocity, story.rows, story.span, story.steps, story.force)
    sidecar = [
        f'name     = "{story.name}"',
        'system   = "geometric"',
        "gm       = 1.0",
        f'particle = "{story.particle}"',
        'chart    = "areal"',
        'clock    = "coordinate"',
        "[start]",
        f"position = {story.position}",
        f"velocity = {story.velocity}",
        "[budget]",
        f"position = {story.budget}",
    ]
    (folder / f"{story.name}.toml").write_text("\n".join(sidecar) + "\n", encoding="utf-8")
    path = folder / f"{story.name}.csv"
    lines = ["time,x,y,z,vx,vy,vz"]
    for row in table:
        stamp = row[7] if story.proper_stamps else row[0]
        numbers = [stamp, *row[1:7]]
        if story.digits < 17:
            texts = [repr(stamp), *(f"{v:.{story.digits - 1}e}" for v in row[1:7])]
        else:
            texts = [repr(v) for v in numbers]
        lines.append(",".join(texts))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


_PAGE = """<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>truefall demo</title>
<meta name="viewport" content="width=device-width, initial-scale=1">
<style>
:root {{ color-scheme: light dark; }}
body {{ font: 16px/1.5 system-ui, sans-serif; max-width: 60rem; margin: 2rem auto;
        padding: 0 1rem; }}
img {{ max-width: 100%; height: auto; background: white; }}
pre {{ overflow-x: auto; font-size: .85rem; }}
h2 {{ margin-top: 2.5rem; }}
</style></head><body>
<h1>Six versions of one propagator</h1>
<p>Invented data: probes of a survey ship that keeps station off Corrow, a compact remnant. Every
file was judged by <code>truefall check</code> against the exact solution at its own time
stamps.</p>
{parts}
</body></html>
"""


def run_demo(directory: str | Path, say: Callable[[str], Any]) -> None:
    """Write the demo's files into a folder, judge them, and leave the reports there.

    Raises
    ------
    InputError
        If the folder holds other things already or cannot be written.
    """
    folder = Path(directory)
    marker = folder / "index.html"
    if folder.exists() and any(folder.iterdir()) and not marker.exists():
        raise InputError("is a folder with other things in it; name a new one", folder)
    try:
        (folder / "input").mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", folder) from None
    from truefall.validate.check import check_file
    from truefall.validate.report import write_report
    from truefall.validate.report.text import VERDICTS, render

    say("The survey ship keeps station off Corrow. Six paths, six versions of its propagator:\n")
    parts = []
    for number, story in enumerate(_STORIES, 1):
        path = _write_inputs(story, folder / "input")
        results = check_file(path)
        result = results[0]
        write_report(results, folder / story.name)
        word = VERDICTS[result.verdict][0]
        largest = "" if result.comparison is None else f"{result.comparison.distance.max():.1e}"
        say(f"{number}/{len(_STORIES)}  {word:<10} {story.name:<18} {story.text}")
        say(f"{'':16}largest position error {largest}, budget {story.budget:.0e} GM/c^2")
        title = html.escape(f"{story.name}: {word}")
        parts.append(
            f"<h2>{title}</h2>\n<p>{html.escape(story.text.capitalize())}.</p>\n"
            f'<img src="{story.name}/{story.name}.png" alt="{title}: orbit, errors, invariants">\n'
            f"<pre>{html.escape(render(result))}</pre>"
        )
    marker.write_text(_PAGE.format(parts="\n".join(parts)), encoding="utf-8")
    say(
        f"\nThe files are in {folder}/input, pictures and reports beside them; open "
        f"{marker}.\nYour own: write time,x,y,z,vx,vy,vz to a CSV file, say gm, chart and units in "
        "a .toml\nof the same name, and run  truefall check FILE.csv --budget position=1e-6"
    )
