"""One run of a program under test: started, bounded, watched, and what became of it."""

from __future__ import annotations

import contextlib
import os
import selectors
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from truefall.validate.nightly.launcher import receive, send

__all__ = ["Ran", "Workplace", "run_program", "workplace"]

_TAIL = 4000
_GRACE = 10.0
_NO_MEMORY = ("memoryerror", "bad_alloc", "cannot allocate memory", "out of memory")
_FILE_TOO_LARGE = ("file too large", "sigxfsz")


@dataclass(frozen=True)
class Workplace:
    """Where a program under test works: nothing else of it is looked at."""

    root: Path
    folder: Path
    orbit: Path
    out: Path


@dataclass(frozen=True)
class Ran:
    """How a run ended: ``outcome`` is one of record.OUTCOMES, ``reason`` one sentence."""

    outcome: str
    reason: str
    seconds: float
    stdout_tail: str
    stderr_tail: str


@contextmanager
def workplace(reads: str, writes: str) -> Iterator[Workplace]:
    """A fresh folder, removed afterwards."""
    root = Path(tempfile.mkdtemp(prefix="truefall-case-"))
    try:
        (root / "work").mkdir()
        yield Workplace(root, root / "work", root / f"orbit.{reads}", root / f"obtained.{writes}")
    finally:
        shutil.rmtree(root, ignore_errors=True)


class _Launcher:
    """The launcher process of one thread of a worker."""

    def __init__(self) -> None:
        self.link, other = socket.socketpair()
        with other:
            self.process = subprocess.Popen(
                [sys.executable, "-P", "-m", "truefall.validate.nightly.launcher",
                 str(other.fileno())],
                pass_fds=[other.fileno()], stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL,
            )  # fmt: skip

    def __del__(self) -> None:
        self.close()

    def close(self) -> None:
        self.link.close()
        with contextlib.suppress(subprocess.TimeoutExpired):
            self.process.wait(_GRACE)


_OWN = threading.local()


def _launcher() -> _Launcher:
    found: _Launcher | None = getattr(_OWN, "launcher", None)
    if found is None or found.process.poll() is not None:
        found = _OWN.launcher = _Launcher()
    return found


class _Tail:
    """The last of a stream."""

    def __init__(self) -> None:
        self.data, self.total = b"", 0

    def add(self, more: bytes) -> None:
        self.total += len(more)
        self.data = (self.data + more)[-_TAIL:]

    def text(self) -> str:
        plain = self.data.decode("utf-8", "replace")
        plain = "".join(c if c.isprintable() or c in "\n\t" else "\ufffd" for c in plain)
        left = self.total - len(self.data)
        return f"[{left} bytes before this]\n{plain}" if left else plain


def _listen(
    launcher: _Launcher, pipes: Mapping[int, _Tail], deadline: float
) -> tuple[dict[str, Any] | None, bool]:
    """Read the program's streams until it ends; the launcher's answer, and whether it was late."""
    late = False
    answer: dict[str, Any] | None = None
    with selectors.DefaultSelector() as selector:
        selector.register(launcher.link, selectors.EVENT_READ)
        for handle in pipes:
            selector.register(handle, selectors.EVENT_READ)
        finished = False
        while not finished:
            for key, _ in selector.select(max(0.0, deadline - time.monotonic())):
                if key.fileobj is launcher.link:
                    message = receive(launcher.link)
                    answer, finished = (message[0] if message else None), True
                elif data := os.read(key.fd, 65536):
                    pipes[key.fd].add(data)
                else:
                    selector.unregister(key.fd)
            if not finished and time.monotonic() >= deadline:
                if late:  # not even the launcher answers
                    launcher.process.kill()
                    finished = True
                else:
                    late, deadline = True, time.monotonic() + _GRACE
                    with contextlib.suppress(OSError):
                        launcher.link.send(b"k")
    for handle, tail in pipes.items():  # what is still in the pipes; nobody is waited for
        os.set_blocking(handle, False)
        with contextlib.suppress(BlockingIOError):
            while data := os.read(handle, 65536):
                tail.add(data)
                if tail.total > 1 << 30:
                    break
    return answer, late


def run_program(request: Mapping[str, Any], place: Workplace, timeout: float) -> Ran:
    """Run one program under test.

    Parameters
    ----------
    request : mapping
        ``command`` (list of str, nothing left to replace) or ``python`` with ``suite``; ``env``,
        ``memory`` and ``output`` (bytes or None).
    place : Workplace
        With the orbit file in it.
    timeout : float
        Seconds.

    Returns
    -------
    Ran
        "ran" only if it ended well and there is a plain file where it had to write.
    """
    message = {**request, "folder": str(place.folder), "orbit": str(place.orbit),
               "out": str(place.out)}  # fmt: skip
    streams = [os.pipe(), os.pipe()]
    tails = [_Tail(), _Tail()]
    begin = time.monotonic()
    answer: dict[str, Any] | None = None
    late = False
    try:
        try:
            launcher = _launcher()
            send(launcher.link, message, (streams[0][1], streams[1][1]))
        finally:
            for _, write in streams:
                os.close(write)
        pipes = {streams[k][0]: tails[k] for k in (0, 1)}
        answer, late = _listen(launcher, pipes, begin + timeout)
    except ConnectionError:
        answer = None
    finally:
        for read, _ in streams:
            os.close(read)
    seconds = float(answer["seconds"]) if answer else time.monotonic() - begin
    out, err = tails[0].text(), tails[1].text()
    if answer is None:
        _OWN.launcher = None
        return Ran("crashed", "the process that starts programs was killed", seconds, out, err)
    outcome, reason = _outcome(answer, request, place, late, timeout, err)
    return Ran(outcome, reason, seconds, out, err)


def _outcome(
    answer: Mapping[str, Any],
    request: Mapping[str, Any],
    place: Workplace,
    late: bool,
    timeout: float,
    stderr: str,
) -> tuple[str, str]:
    status = int(answer["status"])
    if late:
        return "timed out", f"still running after {timeout:g} s; it was killed"
    if answer["refused"]:
        return "could not start", f"{request['command'][0]}: {answer['refused']}"
    refusal = place.out.with_name(place.out.name + ".refusal")
    if refusal.is_file():
        sentence = refusal.read_text("utf-8", "replace")[:400]
        return ("could not start" if status == 66 else "output refused"), sentence
    words = stderr.lower()
    limit = request.get("output")
    if limit is not None and status != 0:
        sizes = [p.stat().st_size for p in _files(place)]
        if status == -signal.SIGXFSZ or max(sizes, default=0) >= limit:
            return "output too large", f"wrote more than {limit / 1e6:g} MB into one file"
    memory = request.get("memory")
    if memory is not None and status != 0:
        near = int(answer["memory"]) > 0.8 * memory
        if near or any(word in words for word in _NO_MEMORY):
            return "memory limit", f"ended with {_how(status)} at the limit of {memory / 1e6:g} MB"
    if status != 0:
        last = next((line for line in reversed(stderr.splitlines()) if line.strip()), "")
        return "crashed", f"ended with {_how(status)}" + (f": {last[:200]}" if last else "")
    return _written(place)


def _how(status: int) -> str:
    if status >= 0:
        return f"exit status {status}"
    try:
        return f"signal {signal.Signals(-status).name}"
    except ValueError:
        return f"signal {-status}"


def _files(place: Workplace) -> list[Path]:
    """Plain files that the program left in its folders, at most a hundred."""
    found: list[Path] = []
    for folder, _, names in os.walk(place.root):
        paths = [Path(folder, name) for name in sorted(names)]
        found += [p for p in paths if p != place.orbit and p.is_file()]
        if len(found) > 100:
            break
    return found


def _written(place: Workplace) -> tuple[str, str]:
    out = place.out
    if out.is_symlink():
        return "output refused", "made a symbolic link where it had to write; it must write a file"
    if out.is_file():
        return "ran", ""
    if out.exists():
        return "output refused", "made something else than a file where it had to write"
    others = [p.relative_to(place.root).as_posix() for p in _files(place)]
    if others:
        names = ", ".join(o.removeprefix("work/") for o in others[:3])
        return "wrote elsewhere", (
            f"ended well but wrote {names} instead of the file named as {{out}}"
        )
    return "no output", "ended well but wrote nothing"
