"""Figures of all nights in SQLite, for trends and for noticing; made again from the nights."""

from __future__ import annotations

import contextlib
import json
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path

import numpy as np

from truefall.validate.errors import InputError
from truefall.validate.nightly.night_file import night_path, nights_in, read_night
from truefall.validate.nightly.noticing import Past
from truefall.validate.nightly.record import Night, Trend

__all__ = ["Trends"]

_VERSION = 1
_TABLES = """
CREATE TABLE IF NOT EXISTS nights (
    number INTEGER PRIMARY KEY, started TEXT NOT NULL, suite TEXT NOT NULL,
    verdict TEXT NOT NULL, exit_status INTEGER NOT NULL, segment INTEGER NOT NULL,
    fingerprint TEXT NOT NULL, environment TEXT NOT NULL, code TEXT, missing TEXT NOT NULL
);
CREATE TABLE IF NOT EXISTS figures (
    key TEXT NOT NULL, night INTEGER NOT NULL, error REAL, verdict TEXT NOT NULL,
    segment INTEGER NOT NULL, seconds REAL NOT NULL, margin REAL, digest TEXT NOT NULL,
    case_digest TEXT NOT NULL, errors TEXT NOT NULL, baseline TEXT NOT NULL, level TEXT NOT NULL,
    PRIMARY KEY (key, night)
) WITHOUT ROWID;
CREATE INDEX IF NOT EXISTS by_night ON figures (night);
"""


class Trends:
    """The database of one output folder.  Use as a context manager.

    It is a copy of what the nights say: whatever is wrong with it, it is made again from them.
    """

    def __init__(self, folder: Path, *, rebuild: bool = False) -> None:
        self.path, self.nights = folder / "trends.sqlite", folder / "nights"
        if rebuild:
            self._remove()
        try:
            self._open()
        except sqlite3.DatabaseError:
            self._remove()
            self._open()

    def _remove(self) -> None:
        for suffix in ("", "-wal", "-shm"):
            self.path.with_name(self.path.name + suffix).unlink(missing_ok=True)

    def _open(self) -> None:
        try:
            self._base = sqlite3.connect(self.path, timeout=30.0, isolation_level=None)
        except sqlite3.OperationalError as error:
            raise InputError(f"cannot be opened ({error})", self.path) from None
        base = self._base
        try:
            base.execute("PRAGMA journal_mode = WAL")
            base.execute("PRAGMA synchronous = NORMAL")
            version = base.execute("PRAGMA user_version").fetchone()[0]
            if version not in (0, _VERSION):
                raise sqlite3.DatabaseError("another version")
            base.executescript(_TABLES)
            base.execute(f"PRAGMA user_version = {_VERSION}")
            base.execute("SELECT count(*) FROM nights").fetchone()
        except sqlite3.DatabaseError:
            base.close()
            raise

    def __enter__(self) -> Trends:
        return self

    def __exit__(self, *_: object) -> None:
        self._base.close()

    @contextlib.contextmanager
    def _whole(self) -> Iterator[None]:
        """All of what happens inside, or nothing."""
        self._base.execute("BEGIN IMMEDIATE")
        try:
            yield
        except BaseException:
            self._base.execute("ROLLBACK")
            raise
        self._base.execute("COMMIT")

    def add(self, night: Night) -> None:
        """Take in one night; a second time changes nothing."""
        rows = [
            (
                c.key, night.number, c.position_error, c.verdict, night.segment, c.seconds,
                c.margin, c.digest, c.case_digest,
                json.dumps({q: e["max"] for q, e in c.errors.items() if e["max"] is not None}),
                json.dumps(dict(c.baseline)), json.dumps(dict(c.level)),
            )
            for c in night.cases
        ]  # fmt: skip
        with self._whole():
            self._forget(night.number)
            self._base.execute(
                "INSERT INTO nights VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                (night.number, night.started, night.suite, night.verdict, night.exit_status,
                 night.segment, night.fingerprint, json.dumps(dict(night.environment)),
                 night.commit, json.dumps(list(night.missing))),
            )  # fmt: skip
            self._base.executemany(f"INSERT INTO figures VALUES ({', '.join('?' * 12)})", rows)

    def _forget(self, number: int) -> None:
        self._base.execute("DELETE FROM figures WHERE night = ?", (number,))
        self._base.execute("DELETE FROM nights WHERE number = ?", (number,))

    def numbers(self) -> list[int]:
        """Nights that were taken in."""
        return [n for (n,) in self._base.execute("SELECT number FROM nights ORDER BY number")]

    def catch_up(self) -> list[int]:
        """Take in nights that are in the folder and not here, forget those that are gone.

        Returns
        -------
        list of int
            Nights taken in.

        Raises
        ------
        InputError
            If a night is damaged.
        """
        there, here = set(nights_in(self.nights)), set(self.numbers())
        for number in sorted(here - there):
            with self._whole():
                self._forget(number)
        for number in sorted(there - here):
            self.add(read_night(night_path(self.nights, number)))
        return sorted(there - here)

    def latest(self) -> dict[str, object] | None:
        """Number, suite, segment, fingerprint, environment, code and missing of the last night."""
        row = self._base.execute(
            "SELECT number, suite, segment, fingerprint, environment, code, missing FROM nights "
            "ORDER BY number DESC LIMIT 1"
        ).fetchone()
        if row is None:
            return None
        return {
            "number": row[0], "suite": row[1], "segment": row[2], "fingerprint": row[3],
            "environment": json.loads(row[4]), "code": row[5], "missing": json.loads(row[6]),
        }  # fmt: skip

    def past(self, also: Sequence[str] = ()) -> dict[str, Past]:
        """Latest figures of the keys of the last night, and of the keys named."""
        last = self._base.execute("SELECT max(number) FROM nights").fetchone()[0]
        what = "key, night, verdict, digest, case_digest, margin, errors, baseline, level"
        rows = self._base.execute(f"SELECT {what} FROM figures WHERE night = ?", (last,)).fetchall()
        there = {row[0] for row in rows}
        for key in also:
            if key not in there:
                rows += self._base.execute(
                    f"SELECT {what} FROM figures WHERE key = ? ORDER BY night DESC LIMIT 1", (key,)
                ).fetchall()
        return {row[0]: Past(*row[1:6], *(json.loads(text) for text in row[6:])) for row in rows}

    def trends(
        self, keys: Sequence[str] | None = None, latest: int | None = None
    ) -> Mapping[str, Trend]:
        """Figures over the nights, by key; of the ``latest`` so many nights, or of all."""
        numbers = self.numbers()
        first = 0 if latest is None or len(numbers) <= latest else numbers[-latest]
        found: dict[str, list[tuple[int, float | None, str, int, float]]] = {}
        wanted = None if keys is None else set(keys)
        for key, *row in self._base.execute(
            "SELECT key, night, error, verdict, segment, seconds FROM figures WHERE night >= ? "
            "ORDER BY key, night",
            (first,),
        ):
            if wanted is None or key in wanted:
                found.setdefault(key, []).append(tuple(row))
        return {key: _trend(rows) for key, rows in found.items()}


def _trend(rows: Sequence[tuple[int, float | None, str, int, float]]) -> Trend:
    nights, errors, verdicts, segments, seconds = zip(*rows, strict=True)
    return Trend(
        nights=np.array(nights, dtype=np.int64),
        error=np.array([np.nan if e is None else e for e in errors], dtype=np.float64),
        verdicts=tuple(verdicts),
        segments=np.array(segments, dtype=np.int64),
        seconds=np.array(seconds, dtype=np.float64),
    )
