"""One entrance for every method."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from truefall.integrators.request import Event, Request, check_events, check_request, three

__all__ = ["STATUS", "Event", "EventHit", "Run", "propagate"]

Floats = npt.NDArray[np.float64]

#: What the loop's numbers mean.
STATUS = {
    0: "step limit", 1: "finished", 2: "event", 3: "step too small", 4: "left the chart",
    5: "stages unsettled",
}  # fmt: skip
_MESSAGES = {
    "finished": "every time was reached",
    "event": "the run stopped at an event, as asked",
    "step limit": "the number of steps reached max_steps; raise it, or allow longer steps",
    "step too small": "no step is short enough for the tolerance; raise it, or the orbit ends here",
    "left the chart": "the state stopped being finite, or passed the edge of the chart",
    "stages unsettled": "the stages of a step do not settle; take shorter steps",
}
#: Steps between two reports of progress.
_STRETCH = 20_000
_HITS = 256


@dataclass(frozen=True)
class EventHit:
    """An event that happened.

    Attributes
    ----------
    name : str
    time, clock : float
        The chart's time; proper time or affine parameter since the start.
    position, velocity : (3,)
    """

    name: str
    time: float
    clock: float
    position: Floats
    velocity: Floats


@dataclass(frozen=True)
class Run:
    """A trajectory, GM = c = 1; rows that were not reached are NaN, and ``status`` says why.

    Attributes
    ----------
    time : (n,)
        The chart's time, as asked for.
    position, velocity : (n, 3)
        Cartesian in the chart; velocity is ``d position / d (chart time)``.
    clock : (n,)
        Proper time, or the affine parameter of a ray with E = 1, since the start.
    position_low, velocity_low, clock_low : as above, or None
        Second words of runs in double-double.
    steps, rejected, evaluations : int
        Steps kept, steps thrown away, evaluations of the right-hand side (series for Taylor).
    status : str
        "finished", "event", "step limit", "step too small", "left the chart" or "stages
        unsettled".
    message : str
        The status in a sentence.
    events : tuple of EventHit
        In the order in which they happened.
    """

    time: Floats
    position: Floats
    velocity: Floats
    clock: Floats
    position_low: Floats | None
    velocity_low: Floats | None
    clock_low: Floats | None
    steps: int
    rejected: int
    evaluations: int
    status: str
    message: str
    events: tuple[EventHit, ...]


def propagate(
    equations: str,
    position: npt.ArrayLike,
    velocity: npt.ArrayLike,
    times: npt.ArrayLike,
    *,
    method: str,
    particle: str = "massive",
    variable: str | None = None,
    step: float | None = None,
    tolerance: float | None = None,
    order: int | None = None,
    arithmetic: str = "compensated",
    events: Sequence[Event] = (),
    max_steps: int = 100_000_000,
    progress: Callable[[int, float], None] | None = None,
) -> Run:
    """Propagate a start to given times.

    Parameters
    ----------
    equations : str
        A name in ``EQUATIONS``.
    position, velocity : (3,) array_like
        At ``times[0]``, Cartesian in the chart; velocity is ``d position / d (chart time)``; of
        light only its direction counts.
    times : (n,) array_like
        The chart's time, strictly increasing or decreasing.
    method : str
        A name in ``METHODS``.
    particle : {"massive", "light"}
    variable : str, optional
        The independent variable, one of the equations' ``variables`` (default: their first).
    step : float, optional
        Fixed step in the independent variable.
    tolerance : float, optional
        Relative error allowed in a step, for methods that choose their steps.
    order : int, optional
        For methods of any order.
    arithmetic : {"compensated", "float64", "double-double"}
        Sums that keep what rounding drops, plain sums, or numbers of two words.
    events : sequence of Event
    max_steps : int
        Steps, rejected ones included, after which the run stops.
    progress : callable, optional
        ``progress(steps, time)``, called now and then on long runs.

    Raises
    ------
    ValueError
        For anything that cannot be done, in one sentence that says what to change.
    """
    request = check_request(
        equations, times, method=method, particle=particle, variable=variable, step=step,
        tolerance=tolerance, order=order, arithmetic=arithmetic,
    )  # fmt: skip
    x, v = three(position, "position")[None], three(velocity, "velocity")[None]
    codes, values = check_events(events)
    names = [event.name or event.kind for event in events]
    if not isinstance(max_steps, int) or max_steps < 1:
        raise ValueError(f"max_steps must be a whole number above 0, not {max_steps!r}")
    if arithmetic == "double-double":
        if events:
            raise ValueError("events are watched in float64 and compensated arithmetic only")
        from truefall.integrators.two_words import run_in_two_words

        return run_in_two_words(request, x, v, max_steps, progress)
    return _run(request, x, v, codes, values, names, max_steps, progress)


def _run(
    request: Request,
    x: Floats,
    v: Floats,
    codes: npt.NDArray[np.int64],
    values: Floats,
    names: Sequence[str],
    max_steps: int,
    progress: Callable[[int, float], None] | None,
) -> Run:
    from truefall.integrators.loop import loop_of
    from truefall.integrators.starts import begin, finish

    found, parts, stamps = request.equations, request.parts, request.stamps
    states, _, pars, _ = begin(found, x, v, request.light)
    y, par = states[0].copy(), pars[0].copy()
    y[found.time_row] = stamps[0]
    run, _ = loop_of(parts.name, parts.step, parts.dense, parts.keeps)
    rows = np.full((stamps.size, found.size), np.nan)
    rows[0] = y
    work = [np.zeros(parts.memory) for _ in range(3)]
    count = first_numbers(1)[0]
    real, places = real_numbers(request), first_places(x[0], v[0], len(codes) > 0)
    hits = np.zeros((_HITS + 2 * len(codes), 3), dtype=np.int64)
    hit_states = np.zeros((hits.shape[0], found.size + 1))
    seen: list[tuple[int, bool, Floats]] = []
    status, carry = 0, np.zeros_like(y)
    arguments = (numbers(request), par, parts.code, parts.table, real, y, carry, *work, stamps,
                 rows, places, codes, values, hits, hit_states, count)  # fmt: skip
    left = max_steps
    while status in (0, 6) and left > 0:
        before = count[0] + count[1]
        status = run(*arguments, min(_STRETCH, left))
        left -= int(count[0] + count[1] - before)
        seen += sorted_hits(hits, hit_states, count, request.direction)
        if progress is not None and status == 0:
            progress(int(count[0]), float(y[found.time_row]))
    word = STATUS[0 if status == 6 else int(status)]
    return assemble(request, finish(found, par, rows), count, word, [
        hit(finish(found, par, state[None]), float(state[found.time_row]), names[e])
        for e, _, state in until_stop(seen)
    ])  # fmt: skip


def numbers(request: Request) -> npt.NDArray[np.int64]:
    """The loop's integers; see loop.py."""
    found = request.equations
    return np.array(
        [found.kind, request.variable, found.time_row, request.arithmetic != "float64",
         found.static, request.step is None],
        dtype=np.int64,
    )  # fmt: skip


def real_numbers(request: Request) -> Floats:
    """The loop's real numbers; see loop.py."""
    first = request.step if request.step is not None else 1e300 if request.parts.chooses else 0.0
    ahead = request.direction
    return np.array([first * ahead, request.tolerance, request.parts.exponent, ahead, 0.0, 0.0])


def first_numbers(many: int) -> npt.NDArray[np.int64]:
    """Counters of runs whose first row is the start."""
    count = np.zeros((many, 5), dtype=np.int64)
    count[:, 3] = 1
    return count


def first_places(x: Floats, v: Floats, watched: bool) -> Floats:
    """The orbit's normal, two places to be filled, and the azimuth so far (for events only)."""
    places = np.zeros((4, 3))
    if watched:
        normal = np.cross(x, v)
        size = float(np.sqrt(normal @ normal))
        places[0] = normal / size if size > 0.0 else 0.0
    return places


def sorted_hits(
    hits: npt.NDArray[np.int64], states: Floats, count: npt.NDArray[np.int64], ahead: float
) -> list[tuple[int, bool, Floats]]:
    """Hits of a stretch in order: event, whether it ends the run, state; the store is emptied."""
    n = int(count[4])
    order = sorted(range(n), key=lambda i: (hits[i, 1], ahead * states[i, 0]))
    count[4] = 0
    return [(int(hits[i, 0]), bool(hits[i, 2]), states[i, 1:].copy()) for i in order]


def until_stop(seen: list[tuple[int, bool, Floats]]) -> list[tuple[int, bool, Floats]]:
    """The hits up to the first that ended the run."""
    ends = [row for row, (_, stops, _) in enumerate(seen) if stops]
    return seen[: ends[0] + 1] if ends else seen


def hit(row: Floats, time: float, name: str) -> EventHit:
    """An event's state for people."""
    return EventHit(name, time, float(row[0, 6]), row[0, :3].copy(), row[0, 3:6].copy())


def assemble(
    request: Request,
    rows: Floats,
    count: npt.NDArray[np.int64],
    word: str,
    hits: list[EventHit],
    low: Floats | None = None,
) -> Run:
    """The run from its rows (n, 7) and counters."""
    message = _MESSAGES[word]
    if word != "finished":
        done = int(count[3])
        message += f" (after {count[0]} steps; {done} of {request.stamps.size} times reached)"
    return Run(
        time=request.stamps,
        position=rows[:, :3],
        velocity=rows[:, 3:6],
        clock=rows[:, 6],
        position_low=None if low is None else low[:, :3],
        velocity_low=None if low is None else low[:, 3:6],
        clock_low=None if low is None else low[:, 6],
        steps=int(count[0]),
        rejected=int(count[1]),
        evaluations=int(count[2]),
        status=word,
        message=message,
        events=tuple(hits),
    )
