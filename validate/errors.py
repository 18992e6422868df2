"""The two kinds of refusal, each one clear sentence for the user."""

from __future__ import annotations

from pathlib import Path

__all__ = ["InputError", "UsageError"]


_LONGEST = 600


def _one_line(message: str) -> str:
    """A sentence that quotes a stranger's file, safe to print: one line, no control characters."""
    plain = "".join(c if c.isprintable() else " " for c in message)
    return plain if len(plain) <= _LONGEST else plain[: _LONGEST - 4] + " ..."


class InputError(Exception):
    """An input (orbit file, sidecar, times file, trajectory) cannot be used: exit status 4.

    Parameters
    ----------
    message : str
        What is wrong, what is allowed, what to do.
    where : str or Path, optional
        The file, put in front of the sentence.
    """

    status = 4

    def __init__(self, message: str, where: str | Path | None = None) -> None:
        self.where = None if where is None else str(where)
        message = _one_line(message)
        super().__init__(message if where is None else f"{where}: {message}")


class UsageError(Exception):
    """The command line (or a suite file) is wrong: exit status 2."""

    status = 2
