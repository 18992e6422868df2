"""The catalogue: reference orbits as data files, each with its class and why it is hard."""

from __future__ import annotations

import difflib
import textwrap
import tomllib
from dataclasses import dataclass
from functools import cache
from importlib import resources

from truefall.validate.errors import InputError, UsageError
from truefall.validate.orbit_file import OrbitSpec, parse_orbit

__all__ = ["Case", "case", "load_cases", "show_case"]

_LEVELS = ("lower", "average", "higher")


@dataclass(frozen=True)
class Case:
    """A case: its orbit file, and the words that go with it.

    ``level`` is lower, average or higher, after what makes the orbit hard (``why``).
    """

    name: str
    title: str
    orbit_class: str
    level: str
    why: str
    scenario: str
    spec: OrbitSpec
    text: str

    @property
    def orbit_file(self) -> str:
        """The orbit file alone, as text."""
        return self.text[: self.text.index("[case]")].rstrip() + "\n"


def _parse(name: str, text: str) -> Case:
    mapping = tomllib.loads(text)
    words = mapping["case"]
    missing = [k for k in ("title", "class", "level", "why", "scenario") if k not in words]
    if missing or words["level"] not in _LEVELS:
        raise InputError(f"[case] lacks {', '.join(missing) or 'a known level'}", f"{name}.toml")
    return Case(
        name=name,
        title=words["title"],
        orbit_class=words["class"],
        level=words["level"],
        why=" ".join(words["why"].split()),
        scenario=" ".join(words["scenario"].split()),
        spec=parse_orbit({**mapping, "name": name}, f"{name}.toml", need_samples=True),
        text=text,
    )


@cache
def load_cases() -> tuple[Case, ...]:
    """All cases in alphabetical order."""
    files = resources.files(__package__).iterdir()
    texts = {f.name[:-5]: f.read_text("utf-8") for f in files if f.name.endswith(".toml")}
    return tuple(_parse(name, texts[name]) for name in sorted(texts))


def case(name: str) -> Case:
    """The case of that name.

    Raises
    ------
    UsageError
        With the nearest name if there is none.
    """
    catalogue = {c.name: c for c in load_cases()}
    if name not in catalogue:
        near = difflib.get_close_matches(name, catalogue, n=1)
        hint = f"; did you mean {near[0]!r}?" if near else "; truefall cases lists them"
        raise UsageError(f"no case {name!r}{hint}")
    return catalogue[name]


def show_case(chosen: Case) -> str:
    """The story of a case, and its orbit file."""
    parts = [f"{chosen.name}: {chosen.title}", f"class {chosen.orbit_class}, level {chosen.level}"]
    for label, words in (("why it is hard", chosen.why), ("scenario", chosen.scenario)):
        parts.append("\n".join(textwrap.wrap(f"{label}: {words}", 80)))
    return "\n\n".join(["\n".join(parts[:2]), *parts[2:], chosen.orbit_file.rstrip()])
