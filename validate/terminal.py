"""What people see: words, colours and progress, each only where it is wanted.

Data go to stdout, progress and notes to stderr.  ``NO_COLOR`` (not empty) switches colour off,
``FORCE_COLOR`` on; without either a stream is coloured if it is a terminal.  Progress is shown
on a terminal only.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

import click

__all__ = ["prepare_streams", "say", "silence", "wants_colour", "working"]


def wants_colour(stream: TextIO) -> bool:
    """Whether a stream is to be coloured."""
    if os.environ.get("NO_COLOR"):
        return False
    if os.environ.get("FORCE_COLOR"):
        return True
    return stream.isatty() and os.environ.get("TERM") != "dumb"


def prepare_streams() -> None:
    """Let a terminal without UTF-8 show what it can instead of stopping the program."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="backslashreplace")


def say(text: str, *, err: bool = False, colour: str | None = None) -> None:
    """Print text; with a colour, its first word (up to two blanks) is painted.

    A reader that has left the pipe is no reason to stop: the verdict, and with it the exit
    status, does not depend on who listens.
    """
    stream = sys.stderr if err else sys.stdout
    painted = wants_colour(stream)
    if colour is not None and painted:
        head, newline, rest = text.partition("\n")
        word, gap, tail = head.partition("  ")
        text = click.style(word, fg=colour, bold=True) + gap + tail + newline + rest
    try:
        click.echo(text, err=err, color=painted)
    except BrokenPipeError:
        silence(stream)


def silence(stream: TextIO) -> None:
    """Send everything that a stream still holds to nowhere."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, stream.fileno())
    os.close(nowhere)


@contextmanager
def working(text: str) -> Iterator[Callable[[str], None]]:
    """A moving sign of life on stderr while something takes long; nothing without a terminal.

    Yields a function that changes the text.
    """
    if not sys.stderr.isatty() or os.environ.get("TERM") == "dumb":
        yield lambda _: None
        return
    from rich.console import Console

    console = Console(stderr=True, no_color=not wants_colour(sys.stderr), highlight=False)
    with console.status(text, spinner="dots") as status:
        yield status.update
