"""What a bench run leaves behind: an HDF5 result set, a CSV table, a JSON document."""

from __future__ import annotations

import csv
import io
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from truefall.validate.bench.measure import Measured
from truefall.validate.formats.files import creation_date, producer, replace_file
from truefall.validate.formats.hdf5_write import ascii_text

if TYPE_CHECKING:
    from truefall.validate.bench.drifts import Drifting

__all__ = ["document", "orders_of", "write_csv", "write_set"]

_NUMBERS = {
    "position": "largest position error relative to its size",
    "velocity": "largest velocity error relative to its size",
    "clock": "largest error of proper time or affine parameter relative to the last reading",
    "energy": "largest drift of E relative to max(|E - 1|, GM/(c^2 r))",
    "momentum": "largest drift of the angular momentum vector relative to its size",
    "tilt": "largest angle between orbital planes",
    "norm": "largest g(v, v) of light",
    "growth": "measured rate of growth of the error on an unstable circle",
    "steps": "steps kept",
    "rejected": "steps thrown away",
    "evaluations": "evaluations of the right-hand side",
    "seconds": "best wall-clock time of up to three runs",
}
_UNITS = {"tilt": "rad", "seconds": "s"}


def _by_combination(rows: Sequence[Measured]) -> dict[tuple[str, ...], list[Measured]]:
    found: dict[tuple[str, ...], list[Measured]] = defaultdict(list)
    for row in rows:
        found[row.problem, row.equations, row.variable, row.method].append(row)
    return found


def write_set(
    path: Path, rows: Sequence[Measured], drifts: Sequence[Drifting], environment: Mapping[str, str]
) -> None:
    """The result set: ``/bench/CASE/EQUATIONS/VARIABLE/METHOD`` and ``/drift/METHOD``.

    Each method's group has ``control`` (tolerances, or numbers of steps) as the scale of its
    other datasets, and the statuses of its runs as an attribute.
    """

    def fill(temporary: Path) -> None:
        import h5py

        with h5py.File(temporary, "w", libver=("v108", "v110")) as file:
            file.attrs["format"] = ascii_text("truefall-bench")
            file.attrs["format_version"] = ascii_text("1")
            file.attrs["producer"] = ascii_text(producer())
            file.attrs["created"] = ascii_text(creation_date(False))
            for key, value in environment.items():
                file.attrs[key] = ascii_text(value)
            for combination, several in _by_combination(rows).items():
                _put(file.create_group("bench/" + "/".join(combination)), several)
            for drift in drifts:
                _put_drift(file.create_group(f"drift/{drift.method}"), drift)

    replace_file(path, fill)


def _dataset(group: Any, name: str, values: Any, words: str, unit: str) -> Any:
    dataset = group.create_dataset(name, data=np.asarray(values, dtype="<f8"), track_times=False)
    dataset.attrs["long_name"], dataset.attrs["units"] = ascii_text(words), ascii_text(unit)
    return dataset


def _put(group: Any, several: Sequence[Measured]) -> None:
    words = "tolerance, or number of steps over the run"
    control = _dataset(group, "control", [m.control for m in several], words, "1")
    control.make_scale("control")
    group.attrs["status"] = ascii_text(", ".join(m.status for m in several))
    for name, words in _NUMBERS.items():
        values = [getattr(m, name) for m in several]
        dataset = _dataset(group, name, values, words, _UNITS.get(name, "1"))
        dataset.dims[0].attach_scale(control)


def _put_drift(group: Any, drift: Drifting) -> None:
    group.attrs["equations"] = ascii_text(drift.equations)
    time = _dataset(group, "time", drift.time, "radial periods since the start", "1")
    time.make_scale("time")
    for name in ("position", "energy"):
        dataset = _dataset(group, name, getattr(drift, name), _NUMBERS[name], "1")
        dataset.dims[0].attach_scale(time)


def write_csv(path: Path, rows: Sequence[Measured]) -> None:
    """All runs, one a line."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    names = [f.name for f in fields(Measured)]
    writer.writerow(names)
    for row in rows:
        writer.writerow([getattr(row, name) for name in names])
    data = text.getvalue().encode()
    replace_file(path, lambda p: _put_bytes(p, data))


def _put_bytes(path: Path, data: bytes) -> None:
    path.write_bytes(data)


def orders_of(rows: Sequence[Measured]) -> dict[tuple[str, ...], float]:
    """Measured order of fixed-step runs: slope of log error over log steps, by combination.

    Only between runs whose errors lie between 1e-11 and 1e-3: above them the step is too long
    for the law, below them round-off rules.
    """
    from truefall.integrators import METHODS

    found = {}
    for combination, several in _by_combination(rows).items():
        if METHODS[combination[3]].adaptive:
            continue
        good = [m for m in several if 1e-11 < m.position < 1e-3]
        if len(good) >= 2:
            x = np.log([m.control for m in good])
            y = np.log([m.position for m in good])
            found[combination] = -float(np.polyfit(x, y, 1)[0])
    return found


def document(
    rows: Sequence[Measured], drifts: Sequence[Drifting], environment: Mapping[str, str]
) -> dict[str, Any]:
    """The JSON document: plain numbers, null where a run did not reach its end."""
    orders = orders_of(rows)
    return {
        "environment": dict(environment),
        "runs": [row.as_json() for row in rows],
        "orders": [
            dict(zip(("problem", "equations", "variable", "method"), key, strict=True))
            | {"order": value}
            for key, value in orders.items()
        ],
        "drifts": [
            {
                "method": d.method, "equations": d.equations, "periods": float(d.time[-1]),
                "position": float(d.position[-1]), "energy": float(np.max(d.energy)),
                "evaluations": d.evaluations,
            }
            for d in drifts
        ],
    }  # fmt: skip
