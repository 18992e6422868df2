"""Expected states kept between nights, each under a digest of everything it depends on.

The digest covers the orbit, the times, every source file of ``truefall.reference`` and the
version of the library below it: whatever could change an expected value changes the name of the
file.  What is kept are numbers only, never code; a file that is damaged counts as missing.
"""

from __future__ import annotations

import contextlib
import hashlib
import io
import json
import os
import stat
import zipfile
from dataclasses import asdict, fields, replace
from functools import cache, cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from truefall.reference.states import Bounded, End, States

if TYPE_CHECKING:
    from truefall.reference import Orbit
    from truefall.validate.orbit_file import OrbitSpec

__all__ = ["KeptOrbit", "engine_digest", "expected_orbit", "kept_folder"]

Floats = npt.NDArray[np.float64]
_BOUNDED = (
    "energy", "energy_minus_one", "angular_momentum", "periapsis", "apoapsis", "radial_period",
    "proper_radial_period", "azimuth_per_radial_period",
)  # fmt: skip
_ENDS = ("ends_before", "ends_after")
_VECTORS = ("position", "velocity", "velocity_used")
_PLAIN = ("orbit_class", *_VECTORS)
_STATES = tuple(f.name for f in fields(States))


@cache
def engine_digest() -> str:
    """Of all that computes expected values."""
    import flint

    import truefall.reference.orbit as place

    found = hashlib.sha256(f"{flint.__version__} {flint.__FLINT_VERSION__}".encode())
    room = Path(place.__file__).resolve().parent
    for path in sorted(room.rglob("*.py")):
        found.update(path.relative_to(room).as_posix().encode() + b"\0" + path.read_bytes())
    return found.hexdigest()[:20]


@cache
def kept_folder() -> str | None:
    """The user's private folder for kept states; None without one.

    Others must not be able to write there: they could change what is called the truth.
    """
    base = os.environ.get("XDG_CACHE_HOME")
    try:
        folder = Path(base) if base else Path.home() / ".cache"
        folder = folder / "truefall" / f"expected-{engine_digest()}"
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        about = folder.stat()
    except (OSError, RuntimeError):
        return None
    foreign = about.st_uid != os.getuid() or about.st_mode & (stat.S_IWGRP | stat.S_IWOTH)
    return None if foreign or not os.access(folder, os.W_OK | os.X_OK) else str(folder)


class KeptOrbit:
    """An orbit whose states at certain times are known; asked for more it builds the orbit."""

    def __init__(
        self, spec: OrbitSpec, constants: dict[str, Any], asked: Floats, states: States,
        inside: npt.NDArray[np.bool_], folder: str | None = None,
    ) -> None:  # fmt: skip
        self._spec, self._constants, self._folder = spec, constants, folder
        self._asked, self._states, self._inside = asked, states, inside
        self.start_time = spec.start_time

    @property
    def known(self) -> States:
        """The states at those times that the orbit reaches."""
        return self._states

    @cached_property
    def _orbit(self) -> Orbit:
        return self._spec.orbit()

    def __getattr__(self, name: str) -> Any:
        constants = self.__dict__.get("_constants", {})
        if name in constants:
            return constants[name]
        if name.startswith("_"):
            raise AttributeError(name)
        return getattr(self._orbit, name)

    def at(self, times: npt.ArrayLike, *, digits: int = 32) -> States:
        """As :meth:`truefall.reference.Orbit.at`."""
        stamps = np.atleast_1d(np.asarray(times, dtype=np.float64))
        if digits <= 32 and np.array_equal(stamps, self._states.time):
            return self._states
        if digits == 32 and (other := self._other(stamps)) is not None and other._inside.all():
            return other._states
        return self._orbit.at(times, digits=digits)

    def reachable(self, times: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """As :meth:`truefall.reference.Orbit.reachable`."""
        stamps = np.atleast_1d(np.asarray(times, dtype=np.float64))
        if np.array_equal(stamps, self._asked):
            return self._inside.copy()
        if np.array_equal(stamps, self._states.time):
            return np.ones(stamps.shape, dtype=bool)
        if (other := self._other(stamps)) is not None:
            return other._inside.copy()
        return self._orbit.reachable(times)

    def _other(self, stamps: Floats) -> KeptOrbit | None:
        """The same orbit at other times, such as stamps moved by half a unit of their digits."""
        if self._folder is None or not stamps.size > 1 or not np.isfinite(stamps).all():
            return None
        return _found_or_made(replace(self._spec, times=tuple(stamps.tolist())), self._folder, self)

    def only_from_now_on(self) -> None:
        """Keep nothing more: what follows asks for times that no other night will ask for."""
        self._folder = None


def _name(spec: OrbitSpec) -> str:
    about = [
        1, engine_digest(), spec.system, spec.gm.hex(), spec.particle, spec.chart, spec.clock,
        spec.start_time.hex(), [v.hex() for v in (*(spec.position or ()), *(spec.velocity or ()))],
        sorted((k, v.hex()) for k, v in (spec.elements or {}).items()),
    ]  # fmt: skip
    digest = hashlib.sha256(json.dumps(about).encode())
    digest.update(np.asarray(spec.times, dtype="<f8").tobytes())
    return digest.hexdigest() + ".npz"


def expected_orbit(spec: OrbitSpec, folder: str | None) -> KeptOrbit:
    """The orbit of a case with its states at the case's times, from the folder if it is there.

    Raises
    ------
    InputError
        If the start is no orbit.
    """
    return _found_or_made(spec, folder, None)


def _found_or_made(spec: OrbitSpec, folder: str | None, known: KeptOrbit | None) -> KeptOrbit:
    path = None if folder is None else Path(folder) / _name(spec)
    if path is not None:
        found = _load(spec, path, folder)
        if found is not None:
            return found
    made = _make(spec, folder, known)
    if path is not None:
        with contextlib.suppress(OSError):
            _save(made, path)
    return made


def _make(spec: OrbitSpec, folder: str | None, known: KeptOrbit | None) -> KeptOrbit:
    orbit = spec.orbit() if known is None else known._orbit
    asked = np.asarray(spec.times, dtype=np.float64)
    inside = orbit.reachable(asked)
    states = orbit.at(asked[inside])
    constants = {name: getattr(orbit, name) for name in (*_BOUNDED, *_ENDS, *_PLAIN)}
    constants["angular_momentum_direction"] = orbit.angular_momentum_direction
    return KeptOrbit(spec, constants, asked, states, inside, folder)


def _save(made: KeptOrbit, path: Path) -> None:
    """Write to a name of this process's own, then put it in place."""
    plain: dict[str, Any] = {}
    for name, value in made._constants.items():
        if isinstance(value, Bounded | End):
            plain[name] = asdict(value)
        elif isinstance(value, np.ndarray):
            plain[name] = value.tolist()
        else:
            plain[name] = value
    arrays: dict[str, Any] = {"asked": made._asked, "inside": made._inside}
    for name in _STATES:
        if (values := getattr(made._states, name)) is not None:
            arrays[f"states.{name}"] = values
    out = io.BytesIO()
    np.savez(out, words=np.array(json.dumps(plain)), **arrays)
    temporary = path.with_name(f".{path.name}.{os.getpid()}-{id(made)}")
    temporary.write_bytes(out.getvalue())
    temporary.replace(path)


def _load(spec: OrbitSpec, path: Path, folder: str | None) -> KeptOrbit | None:
    try:
        with np.load(path, allow_pickle=False) as stored:
            plain = json.loads(str(stored["words"]))
            arrays = {key: stored[key] for key in stored.files if key != "words"}
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
        return None
    for name in _BOUNDED:
        if plain[name] is not None:
            plain[name] = Bounded(**plain[name])
    for name in _ENDS:
        if plain[name] is not None:
            plain[name] = End(**plain[name])
    for name in _VECTORS:
        plain[name] = tuple(plain[name])
    plain["angular_momentum_direction"] = np.array(plain["angular_momentum_direction"])
    states = States(**{name: arrays.get(f"states.{name}") for name in _STATES})  # type: ignore[arg-type]
    return KeptOrbit(spec, plain, arrays["asked"], states, arrays["inside"], folder)
