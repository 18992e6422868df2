"""A small process of its own that starts programs under test, with limits, and watches them.

It runs as ``python -P -m truefall.validate.nightly.launcher SOCKET`` and does one request after
the other.  Starting programs from here and not from the worker has three reasons: limits are in
force before the first instruction of the program; a worker may have threads, which makes forking
it unsafe, this process has none; and if the worker dies, the closed socket tells this process to
kill what still runs.  Only the standard library is loaded, NumPy when a Python function is asked
for: each call then runs in a fork of its own, and what it does to itself touches no other case.
"""

from __future__ import annotations

import contextlib
import json
import os
import resource
import select
import signal
import socket
import sys
import time
from typing import Any, NoReturn

__all__ = ["receive", "send", "serve"]

#: Exit statuses of a call of a Python function.
RAISED, WRONG_RESULT, NO_FUNCTION = 1, 65, 66
_LARGEST = 4 << 20


def send(link: socket.socket, message: dict[str, Any], handles: tuple[int, ...] = ()) -> None:
    """Send one message, with file handles."""
    data = json.dumps(message).encode()
    data = len(data).to_bytes(4, "little") + data
    sent = socket.send_fds(link, [data[:1024]], list(handles))
    link.sendall(data[sent:])


def receive(link: socket.socket) -> tuple[dict[str, Any], list[int]] | None:
    """The next message and its file handles; None when the other side has gone."""
    try:
        data, handles, _, _ = socket.recv_fds(link, 1024, 2)
    except ConnectionError:
        return None
    while data and (len(data) < 4 or len(data) < 4 + int.from_bytes(data[:4], "little")):
        if len(data) > _LARGEST:
            return None
        more = link.recv(65536)
        if not more:
            return None
        data += more
    return (json.loads(data[4:]), list(handles)) if data else None


def _limit(which: int, size: int | None) -> None:
    if size is None:
        return
    with contextlib.suppress(ValueError, OSError):
        _, hard = resource.getrlimit(which)
        size = size if hard == resource.RLIM_INFINITY else min(size, hard)
        resource.setrlimit(which, (size, size))


def _prepare(request: dict[str, Any], handles: list[int]) -> None:
    """In the fork: session, streams, folder, limits, signals."""
    os.setsid()
    nothing = os.open(os.devnull, os.O_RDONLY)
    for target, source in enumerate((nothing, *handles)):
        os.dup2(source, target)
    os.chdir(request["folder"])
    os.environ.update(request.get("env", {}))
    signal.set_wakeup_fd(-1)
    for number in (signal.SIGCHLD, signal.SIGPIPE, signal.SIGINT, signal.SIGTERM, signal.SIGXFSZ):
        signal.signal(number, signal.SIG_DFL)
    _limit(resource.RLIMIT_CORE, 0)
    _limit(resource.RLIMIT_FSIZE, request.get("output"))
    if hasattr(resource, "RLIMIT_AS"):
        _limit(resource.RLIMIT_AS, request.get("memory"))


def _execute(request: dict[str, Any], handles: list[int], failed: int) -> NoReturn:
    """In the fork: become the program, or say why not."""
    try:
        _prepare(request, handles)
        os.execvp(request["command"][0], request["command"])
    except OSError as error:
        os.write(failed, (error.strerror or str(error)).encode())
    finally:
        os._exit(127)


def _call(request: dict[str, Any], handles: list[int]) -> NoReturn:
    """In the fork: call the Python function and write what it returns."""
    status = RAISED
    try:
        _prepare(request, handles)
        sys.stdout = open(1, "w", closefd=False)  # noqa: SIM115
        sys.stderr = open(2, "w", closefd=False)  # noqa: SIM115
        from truefall.validate.nightly.python_call import call

        status = call(request["python"], request["suite"], request["orbit"], request["out"])
    except BaseException as error:
        if isinstance(error, SystemExit) and isinstance(error.code, int):
            status = error.code or RAISED
        import traceback

        traceback.print_exc()
    finally:
        with contextlib.suppress(Exception):
            sys.stdout.flush()
        with contextlib.suppress(Exception):
            sys.stderr.flush()
        os._exit(status)


def _kill(pid: int) -> None:
    with contextlib.suppress(ProcessLookupError, PermissionError):
        os.killpg(pid, signal.SIGKILL)
    with contextlib.suppress(ProcessLookupError, PermissionError):
        os.kill(pid, signal.SIGKILL)


def _watch(link: socket.socket, woken: int, pid: int) -> tuple[int, Any, bool]:
    """Until the program ends: its status, its use of resources, whether the worker is there."""
    there = True
    done, status, usage = os.wait4(pid, os.WNOHANG)
    while not done:
        listening: list[Any] = [woken, link] if there else [woken]
        ready, _, _ = select.select(listening, [], [], 1.0)
        if woken in ready:
            os.read(woken, 512)
        if link in ready:
            there = bool(link.recv(1))  # a byte asks for the end, none means the worker died
            _kill(pid)
        done, status, usage = os.wait4(pid, os.WNOHANG)
    _kill(pid)  # what it left running in its session
    return status, usage, there


def _one(link: socket.socket, woken: int, request: dict[str, Any], handles: list[int]) -> bool:
    """Run one request; False when the worker has gone."""
    read, write = os.pipe()
    begin = time.monotonic()
    pid = os.fork()
    if pid == 0:
        os.close(read)
        link.detach()
        if "command" in request:
            _execute(request, handles, write)
        _call(request, handles)
    os.close(write)
    for handle in handles:
        os.close(handle)
    refused = b""
    if "command" in request:
        refused = os.read(read, 4096)  # the pipe closes when the program has taken over
    os.close(read)
    status, usage, there = _watch(link, woken, pid)
    answer = {
        "status": os.waitstatus_to_exitcode(status),
        "seconds": time.monotonic() - begin,
        "memory": int(usage.ru_maxrss) * (1 if sys.platform == "darwin" else 1024),
        "refused": refused.decode(errors="replace"),
    }
    if there:
        try:
            send(link, answer)
        except ConnectionError:
            return False
    return there


def serve(handle: int) -> None:
    """Do requests until the other side closes."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the worker decides what an interrupt means
    signal.signal(signal.SIGCHLD, lambda *_: None)
    woken, waker = os.pipe()
    os.set_blocking(waker, False)
    signal.set_wakeup_fd(waker, warn_on_full_buffer=False)
    link = socket.socket(fileno=handle)
    os.set_inheritable(handle, False)
    there = True
    while there:
        message = receive(link)
        if message is None:
            return
        request, handles = message
        if "python" in request:
            import numpy as np  # noqa: F401  once, before the forks

            from truefall.validate.nightly import python_call  # noqa: F401

        there = _one(link, woken, request, handles)


if __name__ == "__main__":
    serve(int(sys.argv[1]))
