"""What the instrument measures of itself, each figure beside what it may be.

* reference: certified states against values computed elsewhere, with their proven bounds;
* table: the fast path against certified states at points it was not made from;
* files: every format written and read again; a copy with one bit changed is noticed;
* judge: the exact trajectory passes, an error of twice the budget fails;
* kernels: compiled code against its own source (:mod:`.kernels`).
"""

from __future__ import annotations

import json
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from decimal import Decimal, localcontext
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.trajectory import Trajectory

__all__ = ["Measure", "files", "judge", "kernels", "reference", "table"]

#: Digits of the stored values, relative to the size of their vector.
_STORED = Decimal("1e-33")
#: A system library with known faults in reading damaged files, below this version.
_HDF5_GOOD = (2, 2, 0)


@dataclass(frozen=True)
class Measure:
    """A figure of the self-test.

    Attributes
    ----------
    group, name : str
    good : bool
    value, limit : float
        What was found, and the most that it may be.
    unit : str
    text : str
        What to know if it is out; may be empty.
    """

    group: str
    name: str
    good: bool
    value: float
    limit: float
    unit: str
    text: str = ""


def _stored_orbits() -> list[dict[str, Any]]:
    path = Path(__file__).with_name("truth.json")
    found: list[dict[str, Any]] = json.loads(path.read_text("utf-8"))["orbits"]
    return found


def _orbit_of(stored: dict[str, Any]) -> Orbit:
    from truefall.reference import Orbit

    keys = ("system", "gm", "particle", "chart", "clock", "position", "velocity")
    return Orbit(**{key: stored[key] for key in keys})


def _excess(high: Any, low: Any, bound: Any, truth: list[str]) -> Iterator[tuple[Decimal, Decimal]]:
    """Error over its proven bound, and relative error of the two words, of each component."""
    size = max(abs(Decimal(t)) for t in truth)
    for k, text in enumerate(truth):
        off = Decimal(float(high[k])) - Decimal(text)
        share = max(abs(off) - _STORED * size, Decimal(0))
        limit = Decimal(float(bound[k]))
        over = share / limit if limit else (Decimal(0) if not share else Decimal("inf"))
        yield over, abs(off + Decimal(float(low[k]))) / size if size else Decimal(0)


def reference() -> Iterator[Measure]:
    """Certified states against states that no part of this package computed."""
    for stored in _stored_orbits():
        states = _orbit_of(stored).at(stored["times"])
        worst, words = Decimal(0), Decimal(0)
        with localcontext() as context:
            context.prec = 60
            for row, true in enumerate(stored["true"]):
                for key, value in true.items():
                    names = (key, f"{key}_low", f"{key}_bound")
                    high, low, bound = (getattr(states, name)[row] for name in names)
                    if not isinstance(value, list):
                        high, low, bound, value = [high], [low], [bound], [value]
                    for over, relative in _excess(high, low, bound, value):
                        worst, words = max(worst, over), max(words, relative)
        good = worst <= 1 and words <= Decimal("1e-30")
        yield Measure(
            "reference", stored["name"], good, float(worst), 1.0, "proven bounds",
            f"in two words off by {float(words):.1e}; the reference is not to be trusted here"
            if not good
            else f"in two words off by {float(words):.1e}",
        )  # fmt: skip


def table() -> Iterator[Measure]:
    """The table's values against certified ones, in units of the bound it claims."""
    import numpy as np

    from truefall.reference.table import build_table

    for stored in _stored_orbits():
        if stored["name"] not in ("bound-isotropic", "flyby-harmonic", "satellite-areal"):
            continue
        orbit = _orbit_of(stored)
        last = float(stored["times"][0])
        times = np.sort(np.random.default_rng(7).uniform(min(0.0, last), max(0.0, last), 40))
        found = build_table(orbit, min(0.0, last), max(0.0, last))
        position, velocity, _ = found.at(times)
        exact = orbit.at(times)
        worst = 0.0
        for k, (obtained, expected) in enumerate(
            ((position, exact.position), (velocity, exact.velocity))
        ):
            size = np.linalg.norm(expected, axis=1)
            size = np.maximum(size, found.slow) if k == 1 else size
            off = np.linalg.norm(obtained - expected, axis=1)
            # the certified values are rounded themselves: half a unit of each component
            worst = max(worst, float((off / (size * (found.error[k] + 2.0**-53))).max()))
        yield Measure("table", stored["name"], worst <= 1.0, worst, 1.0, "claimed errors",
                      "" if worst <= 1.0 else "long files are screened wrongly")  # fmt: skip


def _trajectory(scale: float = 0.0) -> tuple[str, Any]:
    """A CSV of an exact orbit in shortest form, with an error of this size; and its columns."""
    import numpy as np

    from truefall.reference import Orbit

    times = np.linspace(0.0, 120.0, 61)
    orbit = Orbit(
        system="astronomical", gm=398600.4418, particle="massive", chart="harmonic",
        clock="coordinate", position=(7200.0, 0.0, 300.0), velocity=(0.01, 7.3, 1.2),
    )  # fmt: skip
    states = orbit.at(times)
    columns = np.column_stack([times, states.position, states.velocity])
    columns[30, 1] += scale
    keys = {"system": "astronomical", "particle": "massive", "chart": "harmonic",
            "clock": "coordinate"}  # fmt: skip
    lines = [f'# {key} = "{value}"' for key, value in keys.items()] + ["# gm = 398600.4418"]
    lines += ["time,x,y,z,vx,vy,vz"]
    lines += [",".join(repr(float(value)) for value in row) for row in columns]
    return "\n".join(lines) + "\n", columns


def _worst(obtained: Trajectory, expected: Trajectory) -> float:
    """Largest relative difference of times, positions and velocities; inf if rows are missing."""
    import numpy as np

    if len(obtained) != len(expected):
        return float("inf")
    worst = 0.0
    for name in ("time", "position", "velocity"):
        a, b = getattr(obtained, name), getattr(expected, name)
        worst = max(worst, float(np.abs(a - b).max() / np.abs(b).max()))
    return worst


def files() -> Iterator[Measure]:
    """Each format written and read again; a changed bit in a result set."""
    from truefall.validate.formats import read_trajectory, write_trajectory

    with tempfile.TemporaryDirectory(prefix="truefall-selftest-") as folder:
        source = Path(folder) / "probe.csv"
        source.write_text(_trajectory()[0])
        given = read_trajectory(source)
        keys = {k: given.metadata[k] for k in ("system", "gm", "particle", "chart", "clock")}
        for suffix in (".csv", ".h5", ".npz", ".parquet", ".oem"):
            if suffix == ".parquet":
                try:
                    import pyarrow  # noqa: F401
                except ImportError:
                    continue
            path = Path(folder) / f"copy{suffix}"
            write_trajectory(path, given)
            worst = _worst(read_trajectory(path, overrides=keys), given)
            limit = 5e-16 if suffix == ".oem" else 0.0  # an OEM keeps 16 digits
            text = "" if worst <= limit else "what is written is not what is read"
            yield Measure("files", suffix[1:], worst <= limit, worst, limit, "relative", text)
        yield _flipped(Path(folder) / "copy.h5")
    yield _library()


def _flipped(path: Path) -> Measure:
    """Whether a result set with one bit changed among its positions is noticed."""
    import h5py

    from truefall.validate.errors import InputError
    from truefall.validate.formats import read_trajectory

    with h5py.File(path) as file:
        (group,) = file["trajectory"].values()
        chunk = group["position"].id.get_chunk_info(0)
    data = bytearray(path.read_bytes())
    data[chunk.byte_offset + chunk.size // 2] ^= 1
    path.write_bytes(bytes(data))
    noticed = False
    try:
        read_trajectory(path)
    except InputError:
        noticed = True
    text = "" if noticed else "a damaged result set is read as if it were whole"
    return Measure("files", "changed bit", noticed, 0.0 if noticed else 1.0, 0.0, "missed", text)


def _library() -> Measure:
    import h5py

    found = tuple(int(n) for n in h5py.version.hdf5_version.split("-")[0].split(".")[:3])
    text = "" if found >= _HDF5_GOOD else (
        "HDF5 below 2.2.0 has known faults in reading damaged files; judge strangers' files "
        "on a machine you can spare"
    )  # fmt: skip
    version = ".".join(map(str, found))
    return Measure("files", f"HDF5 {version}", True, 0.0, 0.0, "note", text)


def judge() -> Iterator[Measure]:
    """The exact trajectory passes; an error of twice the budget in one row fails."""
    from truefall.validate.budget import parse_budget_options
    from truefall.validate.check import check_file

    with tempfile.TemporaryDirectory(prefix="truefall-selftest-") as folder:
        for name, scale, wanted in (("right", 0.0, "pass"), ("wrong", 2e-6, "fail")):
            path = Path(folder) / f"{name}.csv"
            path.write_text(_trajectory(scale)[0])
            budget = parse_budget_options(("position=1e-6",))
            (result,) = check_file(str(path), budget=budget)
            good = result.verdict == wanted
            text = "" if good else f"the verdict was {result.verdict}, not {wanted}"
            yield Measure("judge", f"{name} file", good, 0.0 if good else 1.0, 0.0, "missed", text)


def kernels(progress: Callable[[str], None]) -> Iterator[Measure]:
    """Every compiled function against its interpreted source."""
    from truefall.validate.selftest.kernels import hold_kernels

    words = {
        "differs": "computes something else than its source",
        "stands still": "does not come to an end",
        "refused": "cannot be compiled or fails",
        "no inputs": "has no sample inputs",
        "unknown": "is compiled in a way that is not held here",
    }
    for held in hold_kernels(progress=progress):
        text = words.get(held.outcome, "")
        text += f": {held.text}" if held.text else ""
        yield Measure(
            "kernels", held.name.removeprefix("truefall."), held.good, held.distance,
            held.allowed, "ulp", text,
        )  # fmt: skip
