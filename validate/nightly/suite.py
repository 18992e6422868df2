"""Suite files: which programs are tested, on which cases, within which budgets."""

from __future__ import annotations

import difflib
import fnmatch
import hashlib
import json
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from truefall.validate.errors import InputError, UsageError
from truefall.validate.nightly.suite_reader import SuiteReader

if TYPE_CHECKING:
    from truefall.validate.orbit_file import OrbitSpec

__all__ = ["Propagator", "Suite", "SuiteCase", "Thresholds", "read_suite"]

_TOP = ("name", "propagator", "cases", "budget", "alarms", "code", "run")
_PROPAGATOR = ("command", "python", "timeout", "memory", "output", "reads", "writes", "env",
               "cases")  # fmt: skip
_CASES = ("use", "files")
_ALARMS = ("growth", "drift", "margin")
_CODE = ("folder", "commit")
_RUN = ("repeat",)
_READS, _WRITES = ("toml", "json"), ("csv", "h5", "npz")
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]*", re.ASCII)
_FUNCTION = re.compile(r"[^\W\d]\w*(\.[^\W\d]\w*)*:[^\W\d]\w*(\.[^\W\d]\w*)*")
_PLACEHOLDERS = ("{orbit}", "{out}")


@dataclass(frozen=True)
class Propagator:
    """A program under test; sizes in bytes, None without a limit; ``timeout`` in seconds."""

    name: str
    command: tuple[str, ...] = ()
    python: str = ""
    timeout: float = 60.0
    memory: int | None = None
    output: int | None = 256 * 10**6
    reads: str = "toml"
    writes: str = "csv"
    env: Mapping[str, str] = field(default_factory=dict)
    cases: tuple[str, ...] = ("*",)


@dataclass(frozen=True)
class SuiteCase:
    """A case of the catalogue, or of an orbit file (``file``).

    ``budget`` is a [budget] table, ``own`` whether it is the case's and not the suite's.
    """

    name: str
    file: Path | None
    budget: Mapping[str, Any]
    digest: str
    title: str = ""
    why: str = ""
    own: bool = False

    def spec(self) -> OrbitSpec:
        """The orbit and its times, read when they are needed."""
        if self.file is None:
            from truefall.validate.cases import case

            return replace(case(self.name).spec, budget=self.budget)
        from truefall.validate.orbit_file import read_orbit_file

        return replace(
            read_orbit_file(self.file, need_samples=True), name=self.name, budget=self.budget
        )


@dataclass(frozen=True)
class Thresholds:
    """When to raise an alarm: see :mod:`.noticing`."""

    growth: float = 2.0
    drift: float = 1.25
    margin: float = 0.1


@dataclass(frozen=True)
class Suite:
    """A checked suite file.  ``pairs`` goes through all propagators and their cases."""

    name: str
    path: Path
    propagators: tuple[Propagator, ...]
    cases: tuple[SuiteCase, ...]
    thresholds: Thresholds = field(default_factory=Thresholds)
    code_folder: Path | None = None
    commit: str | None = None
    repeat: int = 1

    @property
    def folder(self) -> Path:
        """Where relative names start."""
        return self.path.parent

    def pairs(self) -> Iterator[tuple[Propagator, SuiteCase]]:
        """Every propagator with every case it is to run."""
        for propagator in self.propagators:
            for case in self.cases:
                if any(fnmatch.fnmatchcase(case.name, p) for p in propagator.cases):
                    yield propagator, case

    def keys(self) -> list[str]:
        """Keys of all pairs, in their order."""
        return [f"{p.name}/{c.name}" for p, c in self.pairs()]


def read_suite(path: str | Path) -> Suite:
    """Read and check a suite file.

    Raises
    ------
    UsageError
        One sentence: file, line, what is wrong, what is allowed.
    """
    path = Path(path)
    reader = SuiteReader(path)
    given = reader.known(reader.table, _TOP, "")
    name = given.get("name", path.stem)
    if not isinstance(name, str) or not name or not name.isprintable():
        raise reader.wrong(f"name must be a line of text, not {name!r}", "", "name")
    propagators = given.get("propagator", {})
    if not isinstance(propagators, Mapping) or not propagators:
        raise reader.wrong(
            "names no program under test; add [propagator.NAME] with command or python"
        )
    found = tuple(_propagator(reader, key, table) for key, table in propagators.items())
    alarms = reader.known(given.get("alarms", {}), _ALARMS, "alarms")
    code = reader.known(given.get("code", {}), _CODE, "code")
    commit = code.get("commit")
    if commit is not None and (not isinstance(commit, str) or not commit.isprintable()):
        raise reader.wrong(f"commit must be a text, not {commit!r}", "code", "commit")
    run = reader.known(given.get("run", {}), _RUN, "run")
    repeat = run.get("repeat", 1)
    if repeat not in (1, 2) or isinstance(repeat, bool):
        raise reader.wrong(f"repeat must be 1 or 2, not {repeat!r}", "run", "repeat")
    suite = Suite(
        name=name,
        path=path.absolute(),
        propagators=found,
        cases=tuple(_cases(reader, given)),
        thresholds=_thresholds(reader, alarms),
        code_folder=_code_folder(reader, path, code),
        commit=commit,
        repeat=repeat,
    )
    paired = {p.name for p, _ in suite.pairs()}
    for propagator in found:
        if propagator.name not in paired:
            raise reader.wrong(
                f"cases of propagator {propagator.name!r} match none of the suite's cases",
                f"propagator.{propagator.name}", "cases",
            )  # fmt: skip
    return suite


def _thresholds(reader: SuiteReader, alarms: Mapping[str, Any]) -> Thresholds:
    usual = Thresholds()
    found = Thresholds(
        reader.number("alarms", alarms, "growth", usual.growth),
        reader.number("alarms", alarms, "drift", usual.drift),
        reader.number("alarms", alarms, "margin", usual.margin),
    )
    for key in ("growth", "drift"):
        if getattr(found, key) <= 1:
            raise reader.wrong(f"{key} is a factor and must be above 1", "alarms", key)
    if found.margin >= 1:
        raise reader.wrong(
            "margin is a share of the budget and must be below 1", "alarms", "margin"
        )
    return found


def _code_folder(reader: SuiteReader, path: Path, code: Mapping[str, Any]) -> Path:
    value = code.get("folder", ".")
    if not isinstance(value, str) or not value or not (path.parent / value).is_dir():
        raise reader.wrong(f"folder {value!r} is no folder beside the suite", "code", "folder")
    return (path.absolute().parent / value).resolve()


def _propagator(reader: SuiteReader, name: str, given: Any) -> Propagator:
    label = f"propagator.{name}"
    if not _NAME.fullmatch(name):
        raise reader.wrong(
            f"propagator {name!r}: a name consists of letters, digits, dot, dash, underscore", label
        )
    table = reader.known(given, _PROPAGATOR, label)
    if ("command" in table) == ("python" in table):
        raise reader.wrong(
            f"[{label}] needs either command (a program) or python (a function), not "
            + ("both" if "command" in table else "neither"),
            label,
        )
    command: tuple[str, ...] = ()
    python = ""
    if "command" in table:
        command = reader.texts(label, table, "command")
        for placeholder in _PLACEHOLDERS:
            if not any(placeholder in part for part in command):
                raise reader.wrong(
                    f"command of propagator {name!r} has no {placeholder}: the program must be "
                    "told which orbit file to read and where to write, for example "
                    '["./propagate", "{orbit}", "{out}"]',
                    label, "command",
                )  # fmt: skip
    else:
        python = table["python"]
        if not isinstance(python, str) or not _FUNCTION.fullmatch(python):
            raise reader.wrong(
                f'python must be "package.module:function", not {python!r}', label, "python"
            )
    env = table.get("env", {})
    if not isinstance(env, Mapping) or not all(isinstance(v, str) for v in env.values()):
        raise reader.wrong("env must be a table of texts", label, "env")
    words = {}
    for key, allowed in (("reads", _READS), ("writes", _WRITES)):
        words[key] = table.get(key, allowed[0])
        if words[key] not in allowed:
            raise reader.wrong(
                f"{key} is {words[key]!r}; allowed are {', '.join(allowed)}", label, key
            )
    return Propagator(
        name=name, command=command, python=python,
        timeout=reader.number(label, table, "timeout", 60.0),
        memory=reader.size(label, table, "memory", None),
        output=reader.size(label, table, "output", 256 * 10**6),
        reads="json" if python else words["reads"],
        writes="npz" if python else words["writes"],
        env=dict(env),
        cases=reader.texts(label, table, "cases") if "cases" in table else ("*",),
    )  # fmt: skip


def _cases(reader: SuiteReader, given: Mapping[str, Any]) -> list[SuiteCase]:
    from truefall.validate.cases import load_cases

    table = reader.known(given.get("cases", {}), _CASES, "cases")
    if not table:
        raise reader.wrong('names no cases; add [cases] with use = ["*"] or files = ["*.toml"]',
                           "cases")  # fmt: skip
    budgets = reader.known(given.get("budget", {}), tuple(given.get("budget", {})), "budget")
    found: dict[str, SuiteCase] = {}
    for pattern in reader.texts("cases", table, "use") if "use" in table else ():
        matching = [c for c in load_cases() if fnmatch.fnmatchcase(c.name, pattern)]
        if not matching:
            near = difflib.get_close_matches(pattern.strip("*"), [c.name for c in load_cases()], 1)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise reader.wrong(
                f"use: {pattern!r} matches no case of the catalogue{hint} (truefall cases lists "
                "them)",
                "cases", "use",
            )  # fmt: skip
        for c in matching:
            found[c.name] = _case(reader, budgets, c.name, None, c.spec, c.title, c.why)
    for pattern in reader.texts("cases", table, "files") if "files" in table else ():
        for path in _orbit_files(reader, pattern):
            case = _of_file(reader, budgets, path)
            if case.name in found:
                raise reader.wrong(f"two cases are called {case.name!r}", "cases", "files")
            found[case.name] = case
    for pattern in budgets:
        if pattern != "default" and not any(fnmatch.fnmatchcase(n, pattern) for n in found):
            raise reader.wrong(f"[budget.{pattern}] matches none of the cases", f"budget.{pattern}")
    return [found[name] for name in sorted(found)]


def _orbit_files(reader: SuiteReader, pattern: str) -> list[Path]:
    try:
        files = sorted(reader.path.absolute().parent.glob(pattern))
    except (RuntimeError, ValueError):
        files = [Path(pattern)] if Path(pattern).is_file() else []
    if not files:
        raise reader.wrong(f"files: {pattern!r} matches no file beside the suite", "cases", "files")
    return files


def _of_file(reader: SuiteReader, budgets: Mapping[str, Any], path: Path) -> SuiteCase:
    from truefall.validate.orbit_file import read_orbit_file

    try:
        spec = read_orbit_file(path, need_samples=True)
    except InputError as error:
        raise UsageError(f"{reader.path}: {error}") from None
    if not _NAME.fullmatch(spec.name.replace(" ", "-")):
        raise UsageError(
            f"{path}: name {spec.name!r}: the name of a case consists of letters, digits, dot, "
            "dash, underscore and blanks"
        )
    return _case(reader, budgets, spec.name.replace(" ", "-"), path, spec, "", "")


def _case(
    reader: SuiteReader, budgets: Mapping[str, Any], name: str, file: Path | None, spec: OrbitSpec,
    title: str, why: str,
) -> SuiteCase:  # fmt: skip
    """With the budget that applies: by name, by pattern, the default, the case's own."""
    from truefall.validate.budget import parse_budget

    patterns = [p for p in budgets if p != "default" and fnmatch.fnmatchcase(name, p)]
    chosen = name if name in budgets else next(iter(patterns), "default")
    budget: Mapping[str, Any] = spec.budget
    if chosen in budgets:
        budget = budgets[chosen]
        if not isinstance(budget, Mapping):
            raise reader.wrong(f"[budget.{chosen}] must be a table", "budget", chosen)
        if spec.particle == "light":  # whose energy is a matter of scaling
            budget = {k: v for k, v in budget.items() if k != "energy"}
    try:
        parse_budget(budget, spec.system)
    except InputError as error:
        raise reader.wrong(f"{error} (case {name})", f"budget.{chosen}") from None
    about = [
        spec.system, spec.gm, spec.particle, spec.chart, spec.clock, spec.start_time,
        spec.position, spec.velocity, spec.elements, spec.times, dict(budget),
    ]  # fmt: skip
    digest = hashlib.sha256(json.dumps(about, sort_keys=True).encode()).hexdigest()[:32]
    return SuiteCase(name, file, dict(budget), digest, title, why, chosen not in budgets)
