"""The command ``truefall bench``: run, compare, write, say."""

from __future__ import annotations

import base64
import json
import os
import platform
import sys
from collections import defaultdict
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from truefall.validate.errors import InputError
from truefall.validate.terminal import say, working

if TYPE_CHECKING:
    from truefall.validate.bench.measure import Job, Measured

__all__ = ["bench"]


@click.command()
@click.option("--quick", is_flag=True, help="A few methods and cases: within a minute.")
@click.option("--methods", multiple=True, metavar="NAME", help="Methods, also with * and ?.")
@click.option("--equations", multiple=True, metavar="NAME", help="Sets of equations.")
@click.option("--cases", multiple=True, metavar="NAME", help="Cases.")
@click.option("--out", default="truefall-bench", metavar="DIR", help="Where the results go.")
@click.option("--jobs", type=click.IntRange(1, 64), metavar="N", help="Processes at a time.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on stdout.")
def bench(
    quick: bool,
    methods: tuple[str, ...],
    equations: tuple[str, ...],
    cases: tuple[str, ...],
    out: str,
    jobs: int | None,
    as_json: bool,
) -> int:
    """Accuracy and cost of the integrators, against the exact solution."""
    from truefall.validate.bench.drifts import long_runs
    from truefall.validate.bench.plan import jobs_of
    from truefall.validate.bench.results import document
    from truefall.validate.bench.summary import text

    planned = jobs_of(methods, equations, cases, quick=quick)
    folder = _folder(out)
    if not sys.stderr.isatty():
        say(f"{len(planned)} combinations; the first run compiles the integrators", err=True)
    with working("compiling the integrators") as tell:
        rows = _run_all(planned, jobs or _cores(), 2 if quick else 3, tell)
        names = [] if not methods else sorted({j.method for j in planned})
        drifts = [] if cases or equations else long_runs(names, quick, tell)
        tell("writing")
        environment = _environment()
        summary = text(rows, drifts, environment)
        _write(folder, rows, drifts, environment, summary)
    if as_json:
        click.echo(json.dumps(document(rows, drifts, environment), indent=1))
    say(summary, err=as_json)
    say(f"wrote {folder / 'index.html'}, bench.h5, bench.csv", err=True)
    return 0


def _folder(out: str) -> Path:
    folder = Path(out)
    if folder.exists() and not folder.is_dir():
        raise InputError("is a file; name a folder for the results", folder)
    if not folder.absolute().parent.is_dir():
        raise InputError("cannot be made: there is no folder above it", folder)
    folder.mkdir(exist_ok=True)
    return folder


def _cores() -> int:
    return max(1, min(8, len(os.sched_getaffinity(0))))


def _environment() -> dict[str, str]:
    from importlib.metadata import version

    found = {name: version(name) for name in ("truefall", "numba", "numpy", "scipy")}
    return found | {
        "python": platform.python_version(),
        "machine": platform.machine(),
        "cores": str(len(os.sched_getaffinity(0))),
    }


def _batch(batch: Sequence[Job], repeats: int) -> list[Measured]:
    """The jobs of one method, in one process: its loop is compiled once."""
    from truefall.validate.bench.measure import measure

    return [row for job in batch for row in measure(job, repeats)]


def _run_all(
    jobs: Sequence[Job], cores: int, repeats: int, tell: Callable[[str], None]
) -> list[Measured]:
    """All jobs, a method's together, in the order of the plan."""
    by_method: dict[str, list[Job]] = defaultdict(list)
    for job in jobs:
        by_method[job.method].append(job)
    found: dict[str, list[Measured]] = {}
    if cores == 1 or len(by_method) == 1:
        for name, batch in by_method.items():
            tell(f"{name}: {len(batch)} combinations")
            found[name] = _batch(batch, repeats)
        return [row for name in by_method for row in found[name]]
    from concurrent.futures import ProcessPoolExecutor, as_completed
    from concurrent.futures.process import BrokenProcessPool
    from multiprocessing import get_context

    with ProcessPoolExecutor(cores, mp_context=get_context("spawn")) as pool:
        waiting = {pool.submit(_batch, batch, repeats): name for name, batch in by_method.items()}
        for done in as_completed(waiting):
            name = waiting[done]
            try:
                found[name] = done.result()
            except BrokenProcessPool:
                say(f"{name}: its process was lost; its runs are left out", err=True)
                found[name] = []
            tell(f"{len(found)} of {len(by_method)} methods done, last {name}")
    return [row for name in by_method for row in found[name]]


def _write(folder: Path, rows: Any, drifts: Any, environment: Any, summary: str) -> None:
    from truefall.validate.bench.pictures import draw_drifts, draw_work
    from truefall.validate.bench.problems import PROBLEMS
    from truefall.validate.bench.results import document, write_csv, write_set
    from truefall.validate.bench.summary import page
    from truefall.validate.formats.files import replace_file

    write_set(folder / "bench.h5", rows, drifts, environment)
    write_csv(folder / "bench.csv", rows)
    pictures = {}
    for problem in PROBLEMS:
        path = folder / f"work-{problem.name}.png"
        if draw_work(problem.name, problem.why, rows, path):
            pictures[path.name] = f"{problem.name}: position error against evaluations and time"
    if draw_drifts(drifts, folder / "drift.png"):
        pictures["drift.png"] = "position error and energy drift over long runs"
    inline = {
        "data:image/png;base64," + base64.b64encode((folder / name).read_bytes()).decode(): caption
        for name, caption in pictures.items()
    }
    texts = {
        "index.html": page(summary, inline, ["bench.h5", "bench.csv", "bench.json", *pictures]),
        "bench.json": json.dumps(document(rows, drifts, environment), indent=1) + "\n",
        "bench.txt": summary + "\n",
    }
    for name, words in texts.items():
        replace_file(folder / name, lambda p, words=words: _put(p, words))  # type: ignore[misc]


def _put(path: Path, words: str) -> None:
    path.write_text(words, encoding="utf-8")
