"""``truefall demo``: the main job end to end, on data invented for it.

The survey ship Halden keeps station off Corrow, a compact remnant.  Its probes' paths, and one
satellite at home, come from versions of a small in-house propagator: two good ones, the others
wrong in a way that happens.  Every verdict is known beforehand, and the demo says so if one
comes out otherwise.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from truefall.validate import demo_propagator as inhouse
from truefall.validate.demo_page import Chapter, page
from truefall.validate.errors import InputError
from truefall.validate.terminal import say, working

if TYPE_CHECKING:
    from truefall.validate.check import CheckResult

__all__ = ["STORIES", "Story", "run_demo"]

#: The demo's propagator keeps constants of its own, as codes under test do.
_C = 299792458.0
_EARTH = 3.986004418e14


@dataclass(frozen=True)
class Story:
    """A version of the propagator, what it was set to do, and the verdict that it deserves.

    ``position`` and ``velocity`` are (2,), in the plane z = 0, in the units of ``system``;
    ``interval`` between rows likewise.  ``digits`` below 17 cut the coordinates as written.
    """

    name: str
    text: str
    verdict: str
    position: tuple[float, float]
    velocity: tuple[float, float]
    rows: int
    interval: float
    steps: int
    budget: str
    system: str = "geometric"
    gm: float = 1.0
    chart: str = "areal"
    particle: str = "massive"
    force: inhouse.Force = inhouse.geodesic
    shift: float = 0.0
    proper_stamps: bool = False
    digits: int = 17


def _tern(name: str, text: str, verdict: str, **changes: object) -> Story:
    settings: dict[str, object] = {
        "position": (14.0, 0.0), "velocity": (0.0, 0.245), "rows": 601, "interval": 2.5,
        "steps": 20, "budget": "1e-6",
    }  # fmt: skip
    return Story(name, text, verdict, **{**settings, **changes})  # type: ignore[arg-type]


def _satellite(name: str, text: str, verdict: str, shift: float) -> Story:
    return Story(
        name, text, verdict, (7.2e6, 0.0), (120.0, 7400.0), 289, 300.0, 150, "1 mm",
        system="SI", gm=_EARTH, chart="harmonic", shift=shift,
    )  # fmt: skip


STORIES = (
    _tern("tern-release", "probe Tern, the released propagator", "pass"),
    _tern("tern-coarse", "the same with steps twenty times as long", "fail", steps=1),
    _tern("tern-newton", "relativity switched off by a forgotten flag", "fail",
          force=inhouse.newton),
    _tern("tern-ship-time", "time stamps read from the ship's own clock", "fail",
          proper_stamps=True),
    _tern("tern-few-digits", "a good run written with seven digits, budget 1e-6", "undecided",
          digits=7),
    Story("lamp-half-bent", "a light ray that only Newton's half of the bending turns", "fail",
          (-60.0, 9.0), (1.0, 0.0), 281, 0.5, 20, "1e-6", force=inhouse.newton, particle="light"),
    _satellite("beacon-release", "a satellite of the Earth, in metres, for a day", "pass", 1.0),
    _satellite("beacon-charts", "harmonic coordinates taken for areal ones: GM/c^2 is 4.4 mm",
               "fail", 0.0),
)  # fmt: skip


def _rows(story: Story) -> Iterator[list[float]]:
    """Rows time, x, y, z, vx, vy, vz in the units of the story's system.

    ``shift`` is what the propagator adds to the chart's radius to get the areal one, in
    GM/c^2: 1 is right for the harmonic chart.
    """
    unit = 1.0 if story.system == "geometric" else story.gm / _C**2
    speed = 1.0 if story.system == "geometric" else _C
    x, y = (p / unit for p in story.position)
    vx, vy = (v / speed for v in story.velocity)
    rho = math.hypot(x, y)
    # a point moved outward by the shift; the tangential speed grows with the radius
    scale = (rho + story.shift) / rho
    radial = (x * vx + y * vy) / rho**2
    velocity = (vx * scale - radial * x * (scale - 1.0), vy * scale - radial * y * (scale - 1.0))
    if story.particle == "light":
        velocity = inhouse.light_speed(x, y, vx, vy)
    path = inhouse.propagate(
        (x * scale, y * scale),
        velocity,
        rows=story.rows,
        interval=story.interval * speed / unit,
        steps=story.steps,
        force=story.force,
    )
    for k, row in enumerate(path):
        r = math.hypot(*row.position)
        back = (r - story.shift) / r
        out = sum(p * v for p, v in zip(row.position, row.velocity, strict=True)) / r**2
        place = [p * back * unit for p in row.position]
        motion = [
            (v * back + out * p * (1.0 - back)) * speed
            for p, v in zip(row.position, row.velocity, strict=True)
        ]
        yield [row.proper_time if story.proper_stamps else k * story.interval, *place, *motion]


def _write_inputs(story: Story, folder: Path) -> Path:
    """The orbit file (also the sidecar) and the trajectory file of a story."""
    budget = story.budget if story.system == "geometric" else f'"{story.budget}"'
    samples = f"first = 0.0\nlast = {story.interval * (story.rows - 1)!r}\ncount = {story.rows}"
    orbit = (
        f'# {story.text}\nname = "{story.name}"\nsystem = "{story.system}"\ngm = {story.gm!r}\n'
        f'particle = "{story.particle}"\nchart = "{story.chart}"\nclock = "coordinate"\n\n'
        f"[start]\nposition = {[*story.position, 0.0]}\nvelocity = {[*story.velocity, 0.0]}\n\n"
        f"[samples]\n{samples}\n\n[budget]\nposition = {budget}\n"
    )
    (folder / f"{story.name}.toml").write_text(orbit, encoding="utf-8")
    lines = ["time,x,y,z,vx,vy,vz"]
    for stamp, *numbers in _rows(story):
        if story.digits < 17:
            texts = [f"{value:.{story.digits - 1}e}" for value in numbers]
        else:
            texts = [repr(value) for value in numbers]
        lines.append(",".join([repr(stamp), *texts]))
    path = folder / f"{story.name}.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def _prepare(directory: str | Path) -> Path:
    folder = Path(directory)
    if folder.exists() and not folder.is_dir():
        raise InputError("is a file; name a folder for the demo", folder)
    try:
        foreign = folder.exists() and any(folder.iterdir()) and not (folder / "input").is_dir()
        if foreign:
            raise InputError("is a folder with other things in it; name a new one", folder)
        (folder / "input").mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"cannot be written ({error.strerror or error})", folder) from None
    return folder


def _tell(story: Story, folder: Path, count: str) -> tuple[Chapter, CheckResult]:
    """Write, judge and report one story; its chapter of the page."""
    from truefall.validate.check import check_file
    from truefall.validate.report import write_report
    from truefall.validate.report.text import VERDICTS, render, units_of

    with working(f"{count}  {story.name}: propagating"):
        path = _write_inputs(story, folder / "input")
    with working(f"{count}  {story.name}: checking and drawing"):
        results = check_file(path)
        pictures = [p for p in write_report(results, folder / story.name) if p.suffix == ".png"]
    result = results[0]
    word, colour = VERDICTS[result.verdict]
    error = "no rows to compare"
    if result.comparison is not None:
        unit = units_of(story.system)["length"]
        error = f"largest position error {result.comparison.distance.max():.1e} {unit}"
    say(f"{word:<10}  {count}  {story.name}: {story.text}", colour=colour)
    tolerance = story.budget if story.system == "SI" else f"{story.budget} GM/c^2"
    say(f"{'':10}       {error}, budget {tolerance}")
    links = tuple((f"{story.name}/{p.name}", p.read_bytes()) for p in pictures)
    return Chapter(story.name, word, story.text, links, render(result)), result


def run_demo(directory: str | Path) -> None:
    """Write the demo's files into a folder, judge them, and leave the reports there.

    Raises
    ------
    InputError
        If the folder holds other things already or cannot be written.
    ArithmeticError
        If a verdict is not the one that the story deserves.
    """
    folder = _prepare(directory)
    say("The survey ship Halden keeps station off Corrow, a compact remnant. Its paths come from\n"
        "versions of one small propagator; each is held against the exact solution at its own\n"
        "time stamps.\n")  # fmt: skip
    chapters, surprises = [], []
    for number, story in enumerate(STORIES, 1):
        chapter, result = _tell(story, folder, f"{number}/{len(STORIES)}")
        chapters.append(chapter)
        if result.verdict != story.verdict:
            surprises.append(f"{story.name} is {result.verdict}, not {story.verdict}")
    made = _reference(folder)
    (folder / "index.html").write_text(page(chapters), encoding="utf-8")
    if surprises:
        raise ArithmeticError(f"the demo did not come out as it must: {'; '.join(surprises)}")
    say(
        f"\nThe exact path of probe Tern with its proven bounds: {made}\n"
        f"All verdicts with pictures: {folder / 'index.html'}\n\n"
        "Again by hand, and then with a file of yours:\n"
        f"  truefall check {folder / 'input' / 'tern-coarse.csv'} --explain\n"
        f"  truefall make {folder / 'input' / 'tern-release.toml'} --out tern.csv\n"
        "  truefall check YOURS.csv --system SI --gm 3.986004418e14 --particle massive \\\n"
        "      --chart harmonic --clock coordinate --budget 'position=1 mm'\n"
        "(columns time,x,y,z,vx,vy,vz; what the options say can stand in YOURS.toml instead)"
    )


def _reference(folder: Path) -> Path:
    """The exact trajectory that Tern's files should have held."""
    from truefall.validate.make import make
    from truefall.validate.orbit_file import read_orbit_file

    target = folder / "reference" / "tern.h5"
    target.parent.mkdir(exist_ok=True)
    with working("making the reference"):
        spec = read_orbit_file(folder / "input" / "tern-release.toml", need_samples=True)
        make(spec, target, certified=True)
    return target
