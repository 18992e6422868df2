"""Many jobs over a few workers: each gives exactly one result, whatever happens to a worker.

Jobs go through a ``concurrent.futures.Executor``, a bounded number at a time, so that neither
jobs nor results pile up: local processes by default, a Dask cluster when an address is given.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Executor, Future, wait
from typing import Any, Protocol, TypeVar

from truefall.validate.errors import InputError, UsageError

__all__ = ["ClusterWorkers", "LocalWorkers", "Workers", "run_all", "usable_cpus"]

J = TypeVar("J")
R = TypeVar("R")


def usable_cpus() -> int:
    """Processors that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


class Workers(Protocol):
    """Where jobs run: ``window`` is how many may be under way."""

    window: int

    def start(self) -> Executor:
        """A new executor, after the first or after a broken one."""

    def stop(self) -> None:
        """End everything at once."""


def _follow_parent() -> None:
    """In a local worker: leave interrupts to the parent, and end when it ends."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    if parent is None:
        return

    def watch() -> None:
        parent.join()
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


class LocalWorkers:
    """Processes on this machine, spawned, so that nothing of the parent leaks into them."""

    def __init__(self, jobs: int) -> None:
        self.jobs, self.window = jobs, 2 * jobs
        self._executor: Executor | None = None
        self._others = set(multiprocessing.active_children())

    def start(self) -> Executor:
        """See :class:`Workers`."""
        from concurrent.futures import ProcessPoolExecutor

        self.stop()
        self._executor = ProcessPoolExecutor(
            self.jobs, mp_context=multiprocessing.get_context("spawn"), initializer=_follow_parent
        )
        return self._executor

    def stop(self) -> None:
        """See :class:`Workers`."""
        if self._executor is None:
            return
        self._executor.shutdown(wait=False, cancel_futures=True)
        for child in set(multiprocessing.active_children()) - self._others:
            child.terminate()
        self._executor.shutdown(wait=True)
        self._executor = None


class ClusterWorkers:
    """The workers of a Dask cluster; needs the extra ``truefall[cluster]``."""

    def __init__(self, address: str) -> None:
        try:
            import distributed
        except ImportError:
            raise UsageError(
                "--cluster needs dask.distributed: pip install 'truefall[cluster]'"
            ) from None
        try:
            client: Any = distributed.Client
            self._client = client(address, timeout=20, set_as_default=False)
            threads = sum(self._client.nthreads().values())
        except (OSError, ValueError, TimeoutError) as error:
            raise InputError(
                f"no cluster answers there ({str(error).splitlines()[0][:120]})", address
            ) from None
        self.window = 2 * max(1, threads)

    def start(self) -> Executor:
        """See :class:`Workers`."""
        executor: Executor = self._client.get_executor(pure=False)
        return executor

    def stop(self) -> None:
        """See :class:`Workers`."""
        with contextlib.suppress(Exception):
            self._client.close(timeout=10)


def run_all(
    jobs: Iterable[J],
    workers: Workers,
    work: Callable[[J], R],
    lost: Callable[[J, str], R],
) -> Iterator[R]:
    """Results in the order in which they come, one for each job.

    Parameters
    ----------
    jobs : iterable
        Taken from when there is room, not before.
    work : callable
        Runs in a worker; must be importable there.
    lost : callable
        The result of a job whose worker died under it, with a sentence.

    Notes
    -----
    When local workers break, every job under way may be the culprit; each is run again alone in
    fresh workers, and the one that breaks them again is lost.  A cluster repeats such jobs by
    itself and gives up on one that killed several workers.
    """
    source = iter(jobs)
    suspects: deque[J] = deque()
    broke: set[int] = set()
    under_way: dict[Future[R], J] = {}
    executor = workers.start()
    more = True
    try:
        while more or suspects or under_way:
            broken = False
            try:
                if suspects:
                    if not under_way:
                        future = executor.submit(work, suspects[0])
                        under_way[future] = suspects.popleft()  # not before it was handed over
                else:
                    while more and len(under_way) < workers.window:
                        job = next(source, None)
                        if job is None:
                            more = False
                            continue
                        suspects.append(job)
                        future = executor.submit(work, job)
                        under_way[future] = suspects.pop()
            except BrokenExecutor:
                broken = True
            alone = len(under_way) == 1 and not broken
            done, _ = wait(under_way, return_when=FIRST_COMPLETED) if under_way else (set(), None)
            for future in done:
                job = under_way.pop(future)
                try:
                    result = future.result()
                except BrokenExecutor:
                    broken = True
                    if not alone or id(job) not in broke:
                        broke.add(id(job))
                        suspects.append(job)
                        continue
                    result = lost(job, "the process that ran it was killed twice")
                except Exception as error:
                    first = (str(error).splitlines() or [""])[0][:200]
                    result = lost(job, f"its worker was lost ({type(error).__name__}: {first})")
                yield result
            if broken:
                broke.update(map(id, under_way.values()))
                suspects.extend(under_way.values())
                under_way.clear()
                executor = workers.start()
    finally:
        workers.stop()
