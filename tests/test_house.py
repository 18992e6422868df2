"""The house itself: who imports whom, what is forbidden, and whether its papers are true."""

from __future__ import annotations

import ast
import difflib
import os
import re
import subprocess
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
ROOMS = ("reference", "integrators", "validate")
#: What the top level may hold; the second line is what tools leave there, ignored by git.
VISIBLE = {
    "README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "CHANGELOG.md", "validate",
    "integrators", "reference", "tests",
}  # fmt: skip
LEFT_BY_TOOLS = {"build", "dist", "truefall.egg-info", "truefall-demo", "truefall-report"}
LONGEST_FILE = 400
LONGEST_FUNCTION = 70  # about 60, with room for a signature of many lines


def sources(*rooms: str) -> list[Path]:
    return [p for room in rooms for p in sorted((ROOT / room).rglob("*.py"))]


def parsed(path: Path) -> ast.Module:
    return ast.parse(path.read_text("utf-8"), str(path))


def short(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


def imported(tree: ast.AST) -> Iterator[str]:
    """Full names of everything imported anywhere in a file, also inside functions."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are written out, not relative"
            yield node.module or ""
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


EVERY = [pytest.param(p, id=short(p)) for p in sources(*ROOMS, "tests")]
INSTALLED = [pytest.param(p, id=short(p)) for p in sources(*ROOMS)]


# imports ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("room", "others"),
    [("reference", ("integrators", "validate")), ("integrators", ("reference", "validate"))],
)
def test_the_truth_shares_no_code_with_what_it_judges(room: str, others: tuple[str, ...]) -> None:
    files = sources(room)
    assert files
    forbidden = tuple(f"truefall.{other}" for other in others)
    for path in files:
        for name in imported(parsed(path)):
            assert not (name + ".").startswith(tuple(f + "." for f in forbidden)), short(path)
            assert name.split(".")[0] not in ROOMS, f"{short(path)} imports {name} by its folder"


@pytest.mark.parametrize("path", EVERY)
def test_outside_programs_and_second_routes_do_not_lean_on_the_truth(path: Path) -> None:
    """Right-hand sides of outside propagators are written from the metric, not imported."""
    if "outside" not in path.parts and not path.name.startswith("mp_"):
        return
    borrowed = [n for n in imported(parsed(path)) if n.startswith("truefall.reference")]
    if path.name.startswith("test_"):
        borrowed = [n for n in borrowed if ".exact" in n]
    assert not borrowed, f"{short(path)} imports {borrowed}"


def test_dynamic_imports_do_not_slip_past() -> None:
    for path in sources("reference", "integrators"):
        text = path.read_text("utf-8")
        assert "importlib" not in text, short(path)
        assert "__import__" not in text, short(path)


# constructs ------------------------------------------------------------------------------------


def forbidden_constructs(tree: ast.AST) -> Iterator[tuple[int, str]]:
    for node in ast.walk(tree):
        if isinstance(node, ast.While) and isinstance(node.test, ast.Constant) and node.test.value:
            yield node.lineno, "an unbounded loop"
        elif isinstance(node, ast.ExceptHandler) and node.type is None:
            yield node.lineno, "an except without a type"
        elif isinstance(node, ast.Assert) and isinstance(node.test, ast.Constant):
            yield node.lineno, "an assertion of a constant"
        elif isinstance(node, ast.Name) and node.id == "Not" + "ImplementedError":
            yield node.lineno, "something not implemented"
        elif isinstance(node, ast.Attribute) and node.attr == "x" + "fail":
            yield node.lineno, "an expected failure"


@pytest.mark.parametrize("path", EVERY)
def test_no_forbidden_constructs(path: Path) -> None:
    found = [f"{short(path)}:{line}: {what}" for line, what in forbidden_constructs(parsed(path))]
    text = path.read_text("utf-8")
    found += [f"{short(path)}: {w}" for w in ("TO" + "DO", "FIX" + "ME", "XX" + "X") if w in text]
    assert not found


def test_the_search_for_forbidden_constructs_finds_them() -> None:
    # text that the search is tried on; nothing of it is run
    bad = (
        "while True:\n    pass\nwhile 1:\n    pass\ntry:\n    pass\nexcept:\n    pass\n"
        "assert True\nraise Not" + "ImplementedError\npytest.mark.x" + "fail\n"
    )
    assert len(list(forbidden_constructs(ast.parse(bad)))) == 6


@pytest.mark.parametrize("path", EVERY)
def test_files_and_functions_are_short(path: Path) -> None:
    assert len(path.read_text("utf-8").splitlines()) <= LONGEST_FILE, short(path)
    for node in ast.walk(parsed(path)):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef) and node.end_lineno:
            body = node.body[0].lineno if ast.get_docstring(node) is None else node.body[-1].lineno
            first = node.body[1].lineno if ast.get_docstring(node) and len(node.body) > 1 else body
            length = node.end_lineno - first + 1
            assert length <= LONGEST_FUNCTION, f"{short(path)}: {node.name} has {length} lines"


@pytest.mark.parametrize("path", INSTALLED)
def test_every_module_says_what_it_is(path: Path) -> None:
    if path.read_text("utf-8").strip():
        assert ast.get_docstring(parsed(path)), short(path)


# layout ----------------------------------------------------------------------------------------


def test_top_level_holds_what_it_should() -> None:
    there = {p.name for p in ROOT.iterdir() if not p.name.startswith(".")}
    assert there >= VISIBLE
    if not (ROOT / ".git").exists():  # a copy of the checkout, as under .ci/run
        assert there - LEFT_BY_TOOLS == VISIBLE
        return
    listed = subprocess.run(
        ["git", "-c", "safe.directory=*", "ls-files"],
        cwd=ROOT, capture_output=True, text=True, check=True,
    ).stdout.split("\n")  # fmt: skip
    top = {name.split("/")[0] for name in listed if name}
    assert top == VISIBLE | {".ci", ".gitignore"}


def test_every_package_is_installed() -> None:
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))
    listed = set(settings["tool"]["setuptools"]["packages"])
    folders = {
        "truefall." + ".".join(p.parent.relative_to(ROOT).parts)
        for room in ROOMS
        for p in (ROOT / room).rglob("*.py")
    }
    assert folders == listed


def test_names_listed_twice_for_a_quick_start_agree() -> None:
    from truefall.reference import charts, declaration, units
    from truefall.validate import cli_parts, orbit_file

    assert set(cli_parts.CHARTS) == set(orbit_file.CHARTS) == set(charts.CHARTS)
    assert set(charts.CHARTS) == set(declaration.CHARTS)
    assert set(cli_parts.SYSTEMS) == set(orbit_file.SYSTEMS) == set(units.SYSTEMS)
    assert set(declaration.CLOCKS) == set(orbit_file.CLOCKS)
    assert set(declaration.PARTICLES) == set(orbit_file.PARTICLES)


# papers ----------------------------------------------------------------------------------------


def readme() -> str:
    return (ROOT / "README.md").read_text("utf-8")


def commands() -> list[str]:
    return re.findall(r"^    (python3 -m venv .*)$", readme(), re.MULTILINE)


def test_readme_opens_with_the_job_in_one_paragraph() -> None:
    parts = readme().split("\n\n")
    assert parts[0] == "# truefall"
    assert len(parts[1]) > 300
    assert parts[2].startswith("## ")


def test_readme_has_exactly_two_set_up_commands_and_ci_runs_the_second() -> None:
    first, second = commands()
    assert first.endswith(".venv/bin/truefall demo")
    assert second.endswith(".venv/bin/python -m pytest -n auto")
    pattern = re.search(r"sed -n 's(.)(.*?)\1", (ROOT / ".ci/run").read_text("utf-8"))
    assert pattern is not None
    # sed's basic expression in Python's writing
    expression = pattern[2].replace(r"\(", "(").replace(r"\)", ")")
    assert re.findall(expression, readme(), re.MULTILINE) == [second]


def test_ci_script_can_be_run() -> None:
    script = ROOT / ".ci/run"
    assert os.access(script, os.X_OK)
    text = script.read_text("utf-8")
    assert "set -euo pipefail" in text
    assert "TRUEFALL_CI=1" in text
    subprocess.run(["bash", "-n", str(script)], check=True)


def blocks(name: str) -> str:
    match = re.search(rf"<!-- example: {re.escape(name)} -->\n```\n(.*?)\n```", readme(), re.S)
    assert match is not None, name
    return match[1]


def test_readme_example_says_what_truefall_says(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from truefall.validate.cli import main

    (tmp_path / "probe.csv").write_text(blocks("probe.csv") + "\n")
    monkeypatch.chdir(tmp_path)
    prompt, _, promised = blocks("check").partition("\n")
    capsys.readouterr()
    with pytest.raises(SystemExit, match="1"):
        main(prompt.removeprefix("$ truefall ").split())
    said = capsys.readouterr().out.rstrip("\n")
    # numbers of rounding size may differ between machines; words and the rest may not
    assert _tamed(said) == _tamed(promised), "\n".join(
        difflib.unified_diff(promised.splitlines(), said.splitlines(), lineterm="")
    )


def _tamed(text: str) -> str:
    return re.sub(r"\d\.\de-(?:[2-9]\d|1[4-9])", "tiny", text)


def test_readme_orbit_file_is_one_and_its_count_of_cases_is_true() -> None:
    from truefall.validate.cases import load_cases
    from truefall.validate.orbit_file import parse_orbit

    block = re.search(r"```toml\n(.*?)```", readme(), re.S)
    assert block is not None
    spec = parse_orbit(tomllib.loads(block[1]), "README.md", need_samples=True)
    assert spec.orbit().orbit_class == "bound"
    assert f"{len(load_cases())} reference orbits" in readme()


def test_readme_names_every_exit_status_and_only_commands_that_exist() -> None:
    from truefall.validate.cli import cli

    listed = {int(n) for n in re.findall(r"^\| (\d+) \|", readme(), re.MULTILINE)}
    assert listed == {0, 1, 2, 3, 4, 5, 70, 130}
    used = set(re.findall(r"^(?:    |\$ )truefall ([a-z]+)", readme(), re.MULTILINE))
    assert used <= set(cli.commands)
    assert set(cli.commands) <= {n for n in cli.commands if f"truefall {n}" in readme()}


def test_files_named_in_the_papers_exist() -> None:
    text = (ROOT / "DEVELOPERS.md").read_text("utf-8") + readme()
    for name in re.findall(
        r"`((?:reference|validate|integrators|tests|exact|formats)/[\w/.]+)`", text
    ):
        if "NAME" in name:
            continue
        places = [ROOT / name, ROOT / "reference" / name, ROOT / "validate" / name]
        assert any(p.exists() for p in places), name


def test_versions_agree() -> None:
    from importlib.metadata import version

    settings = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))
    heading = re.search(r"^## (\d+\.\d+\.\d+)", (ROOT / "CHANGELOG.md").read_text("utf-8"), re.M)
    assert heading is not None
    assert heading[1] == settings["project"]["version"] == version("truefall")
