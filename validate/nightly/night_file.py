"""A night's result set: one HDF5 file, written once, whole or not at all.

Layout, beside the attributes of every result set::

    /trajectory/<case>/             what was expected, with second words and proven bounds
    /obtained/<propagator>/<case>/  what the program wrote (nothing if it wrote nothing that can
                                    be read), with the verdict and figures as attributes
    /night                          attributes: number, suite, commit, fingerprint, verdict, ...
    /night/record                   bytes of a JSON document: everything in record.Night
"""

from __future__ import annotations

import contextlib
import json
import os
from collections.abc import Mapping
from dataclasses import asdict, fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from truefall.validate.errors import InputError
from truefall.validate.nightly.record import Alarm, CaseRecord, Night

if TYPE_CHECKING:
    from truefall.validate.nightly.one_case import CaseResult

__all__ = ["NightWriter", "night_path", "nights_in", "read_night"]

_PREFIX, _SUFFIX = "night-", ".h5"
_LARGEST = 1 << 30
_WORDS = ("verdict", "outcome", "reason", "digest", "orbit_class", "propagator", "case")


def night_path(folder: Path, number: int) -> Path:
    """Where a night's result set is."""
    return folder / f"{_PREFIX}{number:05d}{_SUFFIX}"


def nights_in(folder: Path) -> list[int]:
    """Numbers of the nights that are there, in order; unfinished ones do not count."""
    found = []
    for path in folder.glob(f"{_PREFIX}*{_SUFFIX}"):
        number = path.name[len(_PREFIX) : -len(_SUFFIX)]
        if number.isascii() and number.isdigit():
            found.append(int(number))
    return sorted(found)


def _plain(value: Any) -> Any:
    """What JSON can hold: no NaN, no infinity, no mapping types of ours."""
    if isinstance(value, float):
        return value if np.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, np.generic):
        return _plain(value.item())
    return value


def night_as_json(night: Night) -> dict[str, Any]:
    """All of a night as plain data."""
    shallow = {f.name: getattr(night, f.name) for f in fields(night)}
    shallow["cases"] = [{f.name: getattr(c, f.name) for f in fields(c)} for c in night.cases]
    shallow["alarms"] = [asdict(a) for a in night.alarms]
    plain: dict[str, Any] = _plain(shallow)
    return plain


def _night_from_json(stored: Mapping[str, Any]) -> Night:
    def chosen(kind: Any, table: Mapping[str, Any]) -> dict[str, Any]:
        names = {f.name for f in fields(kind)}  # a later version may say more
        return {k: v for k, v in table.items() if k in names}

    cases = []
    for table in stored["cases"]:
        known = chosen(CaseRecord, table)
        known["curve"] = tuple(tuple(part) for part in known.get("curve", ((), ())))
        known["findings"] = tuple(known.get("findings", ()))
        cases.append(CaseRecord(**known))
    alarms = [
        Alarm(**{**chosen(Alarm, a), "commits": tuple(a.get("commits", ()))})
        for a in stored["alarms"]
    ]
    known = chosen(Night, stored)
    known |= {"cases": tuple(cases), "alarms": tuple(alarms)}
    for key in ("commits", "missing"):
        known[key] = tuple(known.get(key, ()))
    return Night(**known)


def read_night(path: Path) -> Night:
    """The record of a night.

    Raises
    ------
    InputError
        If the file is damaged or no night.
    """
    import h5py

    try:
        with h5py.File(path, "r", locking="best-effort") as file:
            dataset = file["night"]["record"]
            if dataset.size > _LARGEST:
                raise InputError("its record claims more than 1 GB", path)
            return _night_from_json(json.loads(bytes(dataset[()])))
    except (OSError, RuntimeError, KeyError, TypeError, ValueError) as error:
        first = (str(error).splitlines() or [""])[0][:100]
        raise InputError(f"is no whole night ({first})", path) from None


class NightWriter:
    """Takes results as they come; ``finish`` puts the file in place.

    Use as a context manager: leaving it without ``finish`` leaves nothing.
    """

    def __init__(self, folder: Path, number: int) -> None:
        import h5py

        self.final = night_path(folder, number)
        self.temporary = folder / f".{self.final.name}.unfinished-{os.getpid()}"
        try:
            self._file: Any = h5py.File(self.temporary, "w", libver=("v108", "v110"))
        except OSError as error:
            raise InputError(f"cannot be written ({error})", self.temporary) from None
        self._expected = self._file.create_group("trajectory")
        self._obtained = self._file.create_group("obtained")

    def __enter__(self) -> NightWriter:
        return self

    def __exit__(self, *_: object) -> None:
        with contextlib.suppress(Exception):
            self._file.close()
        self.temporary.unlink(missing_ok=True)

    def add(self, result: CaseResult) -> None:
        """Store what was obtained and expected in one case."""
        from truefall.validate.formats.hdf5_write import ascii_text, put_trajectory
        from truefall.validate.formats.metadata import flatten

        record = result.record
        attributes = flatten(result.attributes)
        if result.expected and record.case not in self._expected:
            truth = {k: v for k, v in attributes.items() if k != "budget"}
            put_trajectory(self._expected, record.case, truth, result.expected, {})
        holder = self._obtained.require_group(record.propagator)
        if attributes:
            put_trajectory(holder, record.case, attributes, result.obtained, {})
        else:
            holder.create_group(record.case)
        group = holder[record.case]
        for name in _WORDS:
            group.attrs[name] = ascii_text(str(getattr(record, name))[:4000])
        group.attrs["seconds"] = np.float64(record.seconds)
        numbers = {"margin": record.margin, "floor": record.floor}
        for quantity, errors in record.errors.items():
            numbers |= {f"{quantity}_error_max": errors["max"],
                        f"{quantity}_error_rms": errors["rms"],
                        f"{quantity}_guard": record.guards.get(quantity)}  # fmt: skip
        for name, value in numbers.items():
            if value is not None:
                group.attrs[name] = np.float64(value)

    def finish(self, night: Night) -> Path:
        """Write the record, the digest, and put the file in place.

        Raises
        ------
        InputError
            If the file cannot be written, or a night of that number is there already.
        """
        try:
            self._close(night)
            with self.temporary.open("rb") as stream:
                os.fsync(stream.fileno())
            self.temporary.chmod(0o444)
            os.link(self.temporary, self.final)  # unlike a rename it never replaces a night
            self.temporary.unlink()
            handle = os.open(self.final.parent, os.O_RDONLY)
            try:
                os.fsync(handle)
            finally:
                os.close(handle)
        except OSError as error:
            raise InputError(f"cannot be written ({error.strerror or error})", self.final) from None
        return self.final

    def _close(self, night: Night) -> None:
        import h5py

        from truefall.validate.formats.files import creation_date, producer
        from truefall.validate.formats.hdf5_digest import content_digest
        from truefall.validate.formats.hdf5_write import FORMAT, FORMAT_VERSION, ascii_text

        file = self._file
        group = file.create_group("night")
        for name in ("started", "suite", "verdict", "fingerprint", "commit"):
            group.attrs[name] = ascii_text(str(getattr(night, name) or ""))
        for name in ("number", "segment", "exit_status"):
            group.attrs[name] = np.int64(getattr(night, name))
        for name, value in night.environment.items():
            group.attrs[f"environment {name}"] = ascii_text(value[:4000])
        data = json.dumps(night_as_json(night), allow_nan=False).encode()
        group.create_dataset(
            "record",
            data=np.frombuffer(data, dtype="u1"),
            chunks=True,
            compression="gzip",
            shuffle=False,
            fletcher32=True,
        ).attrs["long_name"] = ascii_text("bytes of a JSON document: everything about the night")
        about = {"format": FORMAT, "format_version": FORMAT_VERSION, "producer": producer(),
                 "created": creation_date(False)}  # fmt: skip
        for key, value in about.items():
            file.attrs[key] = ascii_text(value)
        file.close()
        # what counts is what can be read: the digest is that of the file opened again
        with h5py.File(self.temporary, "r+") as written:
            if bytes(written["night"]["record"][()]) != data:
                raise OSError("the record did not read back as written")
            written.attrs["content_digest"] = ascii_text(content_digest(written))
