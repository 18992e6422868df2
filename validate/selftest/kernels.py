"""Every compiled function of the package against its own interpreted source.

Known versions of the compiler translate some loops wrongly, in silence; others make them stand
still or refuse them.  So: every module is imported, every compiled function found, run on inputs
that the scenarios registered for it, and compared with the source run by the interpreter, what it
calls included.  Both run in child processes with a time limit.  A function that no scenario
reaches has no inputs, which counts as a failure.
"""

from __future__ import annotations

import json
import os
import pickle
import queue
import subprocess
import sys
import tempfile
import threading
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

__all__ = ["PACKAGES", "Held", "ScenarioFailed", "hold_kernels"]

PACKAGES = ("truefall.reference", "truefall.integrators", "truefall.validate")
_SCENARIOS = "truefall.validate.selftest.scenarios"
#: Seconds that one kernel may take, compilation included, and all the scenarios interpreted.
LIMIT, RECORDING_LIMIT = 300.0, 600.0


class ScenarioFailed(RuntimeError):
    """The scenarios could not be run."""


@dataclass(frozen=True)
class Held:
    """How a compiled function compares with its source.

    Attributes
    ----------
    name : str
        Module and function.
    outcome : {"equal", "close", "differs", "stands still", "refused", "no inputs", "unknown"}
        "close": within :attr:`allowed`; "refused": typing or running it raised; "unknown":
        compiled in a way that is not seen here.
    distance, allowed : float
        Largest difference found and allowed, in units in the last place.
    calls : int
    text : str
        What was raised.
    """

    name: str
    outcome: str
    distance: float = 0.0
    allowed: float = 0.0
    calls: int = 0
    text: str = ""

    @property
    def good(self) -> bool:
        """Whether the function may be trusted."""
        return self.outcome in ("equal", "close")


def _environment(**more: str) -> dict[str, str]:
    kept = {k: v for k, v in os.environ.items() if k not in ("NUMBA_DISABLE_JIT",)}
    return {**kept, **more}


def _record(target: Path, packages: Sequence[str], scenarios: Sequence[str], limit: float) -> None:
    command = [
        sys.executable, "-m", "truefall.validate.selftest.recorder", str(target),
        ",".join(packages), ",".join(scenarios),
    ]  # fmt: skip
    try:
        done = subprocess.run(
            command, env=_environment(NUMBA_DISABLE_JIT="1"), capture_output=True, text=True,
            timeout=limit, check=False,
        )  # fmt: skip
    except subprocess.TimeoutExpired:
        raise ScenarioFailed(f"the interpreted scenarios took more than {limit:g} s") from None
    if done.returncode:
        raise ScenarioFailed(f"the interpreted scenarios ended with: {done.stderr.strip()[-500:]}")


def _lines(process: subprocess.Popen[str], limit: float) -> Iterator[dict[str, Any] | None]:
    """What the child says; None once it has said nothing for ``limit`` seconds."""
    said: queue.Queue[str] = queue.Queue()

    def read() -> None:
        for line in process.stdout or ():
            said.put(line)
        said.put("")

    threading.Thread(target=read, daemon=True).start()
    for _ in range(1_000_000):
        try:
            line = said.get(timeout=limit)
        except queue.Empty:
            yield None
            return
        if not line:
            return
        if line.startswith("{"):
            yield json.loads(line)


def _replay(
    calls_file: Path,
    packages: Sequence[str],
    prepare: str,
    limit: float,
    progress: Callable[[str], None],
) -> tuple[dict[str, dict[str, Any]], list[str], list[str]]:
    """What the compiled functions gave; a child that stands still is ended and the next begun."""
    found: dict[str, dict[str, Any]] = {}
    names: list[str] = []
    strangers: list[str] = []
    for _ in range(20):
        running = ""
        command = [
            sys.executable, "-m", "truefall.validate.selftest.replayer", str(calls_file),
            ",".join(packages), prepare, ",".join(found),
        ]  # fmt: skip
        with (
            tempfile.TemporaryFile("w+") as errors,
            subprocess.Popen(
                command, env=_environment(), stdout=subprocess.PIPE, stderr=errors, text=True
            ) as process,
        ):
            finished = False
            for line in _lines(process, limit):
                if line is None:
                    break
                names, strangers = line.get("kernels", names), line.get("strangers", strangers)
                finished = finished or "finished" in line
                running = line.get("begin", running)
                if "begin" in line:
                    progress(running)
                if "end" in line:
                    found[line["end"]] = line
                    running = ""
            process.kill()
            process.wait()
            if finished:
                break
            if not running:
                errors.seek(0)
                raise ScenarioFailed(f"the compiled run ended with: {errors.read().strip()[-500:]}")
            found[running] = {"still": True}
    return found, names, strangers


def _outcome(line: dict[str, Any] | None, name: str, calls: int, allowed: float) -> Held:
    if line is None:
        return Held(name, "no inputs")
    if "still" in line:
        return Held(name, "stands still", calls=calls)
    if "error" in line:
        return Held(name, "refused", calls=calls, text=line["error"])
    size = float(line["distance"])
    outcome = "equal" if size == 0.0 else "close" if size <= allowed else "differs"
    return Held(name, outcome, size, allowed, calls)


def hold_kernels(
    packages: Sequence[str] = PACKAGES,
    scenarios: Sequence[str] | None = None,
    *,
    prepare: str = f"{_SCENARIOS}:prepare",
    limit: float = LIMIT,
    progress: Callable[[str], None] | None = None,
) -> list[Held]:
    """Hold every compiled function of some packages against its interpreted source.

    Parameters
    ----------
    packages : sequence of str
    scenarios : sequence of str, optional
        ``module:function`` each; those of this package if not given.
    prepare : str
        ``module:function`` that makes the functions which come into being on use; may be empty.
    limit : float
        Seconds that one function may take, compilation included.
    progress : callable
        Told the name of each function before it runs.

    Raises
    ------
    ScenarioFailed
        If the scenarios themselves do not run.
    """
    from truefall.validate.selftest.allowances import allowed

    if scenarios is None:
        from truefall.validate.selftest.scenarios import SCENARIOS

        scenarios = [f"{_SCENARIOS}:{name}" for name in SCENARIOS]
    tell = progress or (lambda _: None)
    with tempfile.TemporaryDirectory(prefix="truefall-selftest-") as folder:
        file = Path(folder) / "calls.pickle"
        tell("the sources, interpreted")
        _record(file, packages, scenarios, RECORDING_LIMIT)
        calls, failures = pickle.loads(file.read_bytes())
        if failures:
            scenario, text = failures[0]
            last = text.strip().splitlines()[-1]
            raise ScenarioFailed(f"{scenario.partition(':')[2]}, interpreted: {last}\n{text}")
        lines, names, strangers = _replay(file, packages, prepare, limit, tell)
    every = sorted({*names, *calls})
    held = [_outcome(lines.get(n), n, len(calls.get(n, ())), allowed(n)) for n in every]
    return held + [Held(name, "unknown") for name in strangers]
