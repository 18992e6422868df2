"""Run the battery: ``python tests/outside/battery/run.py [CASE,...] [FAULT,...] [SIZE,...]``.

Prints the faults whose cause is not named first, and the counts; a clean run's largest errors are
the floor that a fault must exceed tenfold to count.
"""

from __future__ import annotations

import collections
import sys
import time
from pathlib import Path

import numpy as np

from truefall.validate.causes import explain
from truefall.validate.check import check_trajectory
from truefall.validate.trajectory import Trajectory

sys.path.insert(0, str(Path(__file__).parent.parent))  # as for the tests: see pyproject.toml
from battery import faults


def judged(case, rows):
    """The result and the explanation of some rows, and the seconds of the latter."""
    metadata = {
        "system": "geometric" if case.gm == 1 else "SI", "gm": case.gm, "chart": case.chart,
        "particle": "light" if case.light else "massive", "clock": "coordinate",
        "start": {"time": 0.0, "position": list(case.position), "velocity": list(case.velocity)},
    }  # fmt: skip
    clock = rows[:, 7]
    result = check_trajectory(
        Trajectory("run", "run", rows[:, 0], rows[:, 1:4], rows[:, 4:7],
                   None if case.light else clock, None, clock if case.light else None, metadata)
    )  # fmt: skip
    begin = time.process_time()
    return result, explain(result), time.process_time() - begin


def sizes_of(result):
    c = result.comparison
    return np.array([c.distance.max(), c.velocity_error.max(), np.abs(c.clock_error).max()])


def main(cases, names, sizes):
    counts, seconds = collections.Counter(), []
    for case in faults.p.CASES:
        if cases and case.name not in cases:
            continue
        result, found, _ = judged(case, faults.p.fly(case))
        floor = np.maximum(sizes_of(result), 1e-300)
        print(f"{case.name}: floor {floor[0]:.1e}, clean: {[f.cause for f in found.findings]}")
        for name in names or faults.FAULTS:
            for size in sizes or (0.0, 0.5, 1.0):
                made = faults.FAULTS[name](case, size)
                if made is None:
                    continue
                result, found, took = judged(case, made[0])
                seconds.append(took)
                times = float((sizes_of(result) / floor)[: 3 if "clock" in name else 2].max())
                named = [f.cause for f in found.findings]
                listed = set(made[1]) & {c for group in found.ambiguous for c in group}
                right = bool(named) and named[0] in made[1]
                word = "first" if right else "listed" if listed else "missed"
                counts[word, times > 10] += 1
                if not right:
                    print(f"  {word}: {name} {size:g} ({times:.2g} floors): {named}", flush=True)
    for (word, above), count in sorted(counts.items()):
        print(f"{word}, {'above' if above else 'below'} ten floors: {count}")
    print(f"seconds: mean {np.mean(seconds):.2f}, largest {max(seconds):.2f}")


if __name__ == "__main__":
    lists = [a.split(",") if a else [] for a in [*sys.argv[1:], "", "", ""][:3]]
    main(lists[0], lists[1], [float(s) for s in lists[2]])
