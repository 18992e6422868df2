"""Many orbits at once: threads over compiled loops, the same bits as one by one."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from truefall.integrators.request import Request, check_request
from truefall.integrators.run import STATUS, first_numbers, numbers, real_numbers

__all__ = ["Ensemble", "ensemble"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Ensemble:
    """Trajectories of many starts; rows that were not reached are NaN.

    Attributes
    ----------
    time : (n,)
    position, velocity : (m, n, 3)
    clock : (m, n)
    steps, rejected, evaluations : (m,)
    status : (m,) of str
    """

    time: Floats
    position: Floats
    velocity: Floats
    clock: Floats
    steps: npt.NDArray[np.int64]
    rejected: npt.NDArray[np.int64]
    evaluations: npt.NDArray[np.int64]
    status: npt.NDArray[np.str_]


def ensemble(
    equations: str,
    positions: npt.ArrayLike,
    velocities: npt.ArrayLike,
    times: npt.ArrayLike,
    *,
    method: str,
    particle: str = "massive",
    variable: str | None = None,
    step: float | None = None,
    tolerance: float | None = None,
    order: int | None = None,
    arithmetic: str = "compensated",
    max_steps: int = 100_000_000,
    threads: int | None = None,
) -> Ensemble:
    """Propagate many starts to the same times; arguments as for ``propagate``.

    Parameters
    ----------
    positions, velocities : (m, 3) array_like
    threads : int, optional
        Number of threads (default: one for each processor).

    Raises
    ------
    ValueError
        As ``propagate``; the message counts starts from 0.  Double-double is not offered here.
    """
    request = check_request(
        equations, times, method=method, particle=particle, variable=variable, step=step,
        tolerance=tolerance, order=order, arithmetic=arithmetic,
    )  # fmt: skip
    if arithmetic == "double-double":
        raise ValueError("ensembles run in float64 or compensated arithmetic; use propagate")
    x, v = _starts(positions, "positions"), _starts(velocities, "velocities")
    if x.shape != v.shape:
        raise ValueError(f"{len(x)} positions but {len(v)} velocities")
    workers = (os.cpu_count() or 1) if threads is None else threads
    if workers < 1:
        raise ValueError(f"threads must be 1 or more, not {threads!r}")
    return _run(request, x, v, max_steps, workers)


def _starts(values: npt.ArrayLike, name: str) -> Floats:
    found = np.array(values, dtype=np.float64)
    if found.ndim != 2 or found.shape[1:] != (3,) or not np.all(np.isfinite(found)):
        raise ValueError(f"{name} must be a list of three finite numbers for each start")
    return found


def _run(request: Request, x: Floats, v: Floats, max_steps: int, workers: int) -> Ensemble:
    from truefall.integrators.loop import loop_of
    from truefall.integrators.starts import begin, finish_many

    found, parts, stamps = request.equations, request.parts, request.stamps
    many = len(x)
    states, pars = np.empty((many, found.size)), np.empty((many, 3))
    rows = np.full((many, stamps.size, found.size), np.nan)
    counts, status = first_numbers(many), np.zeros(many, dtype=np.int64)
    reals = np.tile(real_numbers(request), (many, 1))
    size = np.array([*parts.memory, max_steps], dtype=np.int64)
    _, run = loop_of(parts.name, parts.step, parts.dense, parts.keeps)
    out = np.empty((many, stamps.size, 7))

    def work(first: int) -> None:
        end = min(first + chunk, many)
        own = slice(first, end)
        states[own], _, pars[own], _ = begin(found, x[own], v[own], request.light, first)
        states[own, found.time_row] = stamps[0]
        rows[own, 0] = states[own]
        run(numbers(request), pars, parts.code, parts.table, reals, states, size, stamps, rows,
            counts, status, first, end)  # fmt: skip
        finish_many(found, pars, rows, out, first, end)

    # Small chunks, so that a thread with long orbits does not keep the others waiting.
    chunk = max(1, min(256, -(-many // (8 * workers))))
    firsts = range(0, many, chunk)
    if workers == 1 or len(firsts) == 1:
        for first in firsts:
            work(first)
    else:
        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(work, firsts))
    return Ensemble(
        time=stamps,
        position=out[:, :, :3],
        velocity=out[:, :, 3:6],
        clock=out[:, :, 6],
        steps=counts[:, 0],
        rejected=counts[:, 1],
        evaluations=counts[:, 2],
        status=np.array([STATUS[int(s)] for s in status]),
    )
