"""Suite files: what they may say, and one clear sentence for everything else."""

from __future__ import annotations

from pathlib import Path

import nightly_parts as parts
import pytest

from truefall.validate.errors import UsageError
from truefall.validate.nightly.suite import read_suite

GOOD = """
[propagator.ours]
command = ["./propagate", "{orbit}", "{out}"]
timeout = 60.0
reads   = "toml"
writes  = "csv"
[propagator.in_process]
python  = "package.module:function"
[cases]
use     = ["bound-*", "flyby-*"]
[budget.default]
position = 1e-6
"""


def written(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "suite.toml"
    path.write_text(text)
    return path


def test_the_documented_suite_is_read(tmp_path: Path) -> None:
    suite = read_suite(written(tmp_path, GOOD))
    assert suite.name == "suite"
    ours, function = suite.propagators
    assert ours.command == ("./propagate", "{orbit}", "{out}")
    assert (ours.reads, ours.writes, ours.timeout, ours.memory) == ("toml", "csv", 60.0, None)
    assert function.python == "package.module:function"
    names = {c.name for c in suite.cases}
    assert {"bound-strong", "flyby-fast"} <= names
    assert all(n.startswith(("bound-", "flyby-")) for n in names)
    assert len(suite.keys()) == 2 * len(names) == len(set(suite.keys()))
    assert all(dict(c.budget) == {"position": 1e-6} for c in suite.cases)


def test_sizes_thresholds_and_cases_of_one_propagator(tmp_path: Path) -> None:
    text = GOOD.replace("timeout = 60.0", 'memory = "2 GB"\noutput = "1.5 MB"\ncases = ["flyby-*"]')
    suite = read_suite(written(tmp_path, text + "[alarms]\ngrowth = 3\nmargin = 0.2\n"))
    assert (suite.propagators[0].memory, suite.propagators[0].output) == (2 * 10**9, 1_500_000)
    assert (suite.thresholds.growth, suite.thresholds.drift, suite.thresholds.margin) == (
        3,
        1.25,
        0.2,
    )
    keys = suite.keys()
    assert not any(k.startswith("ours/bound") for k in keys)
    assert any(k.startswith("in_process/bound") for k in keys)


def test_the_budget_is_the_most_particular_one(tmp_path: Path) -> None:
    (tmp_path / "ring.toml").write_text(parts.circle())
    text = """
    [propagator.p]
    python = "m:f"
    [cases]
    use = ["light-deflected", "inner-planet"]
    files = ["ring.toml"]
    """
    own = {c.name: dict(c.budget) for c in read_suite(written(tmp_path, text)).cases}
    assert own["ring"] == {"position": 1e-9, "velocity": 1e-9}
    text += """
    [budget.default]
    position = 1.0
    energy = 1e-3
    [budget."*planet"]
    position = "1 km"
    [budget.ring]
    position = 7.0
    """
    found = {c.name: dict(c.budget) for c in read_suite(written(tmp_path, text)).cases}
    assert found["ring"] == {"position": 7.0}
    assert found["inner-planet"] == {"position": "1 km"}
    assert found["light-deflected"] == {"position": 1.0}  # light's energy is a matter of scaling


FAULTS = [
    ("[cases", "TOML"),
    ("", "names no program under test"),
    (GOOD.replace("timeout", "timout"), "line 4: unknown key 'timout' in [propagator.ours]; "
     "did you mean 'timeout'?"),
    (GOOD + "[bugdet.x]\nposition = 1\n", "key 'bugdet' in the suite; did you mean 'budget'?"),
    (GOOD.replace('"{orbit}", ', ""), "line 3: command of propagator 'ours' has no {orbit}"),
    (GOOD.replace(', "{out}"', ""), "has no {out}"),
    (GOOD.replace('"package.module:function"', '"x.y"'), 'must be "package.module:function"'),
    (GOOD.replace("[propagator.in_process]\npython", "python"), "not both"),
    ("[propagator.a]\ntimeout = 1\n[cases]\nuse=['*']\n", "not neither"),
    (GOOD.replace("60.0", "-1"), "line 4: timeout must be a positive number, not -1"),
    (GOOD.replace("60.0", "inf"), "timeout must be a positive number"),
    (GOOD.replace('reads   = "toml"', 'reads = "xml"'), "reads is 'xml'; allowed are toml, json"),
    (GOOD.replace('writes  = "csv"', 'writes = "parquet"'), "allowed are csv, h5, npz"),
    (GOOD.replace('"bound-*"', '"buond-strong"'), "line 10: use: 'buond-strong' matches no case of "
     "the catalogue; did you mean 'bound-strong'?"),
    (GOOD.replace('use     = ["bound-*", "flyby-*"]', 'files = ["*.orbit"]'), "matches no file"),
    (GOOD.replace('use     = ["bound-*", "flyby-*"]', ""), "names no cases"),
    (GOOD.replace("[propagator.ours]", '[propagator."a/b"]'), "a name consists of letters"),
    (GOOD.replace("timeout = 60.0", 'memory = "2 gigs"'), 'memory must be a size such as "512 MB"'),
    (GOOD.replace("timeout = 60.0", 'cases = ["light-*"]'), "match none of the suite's cases"),
    (GOOD.replace("position = 1e-6", "position = -1"), "budget position must be positive"),
    (GOOD.replace("position", "positoin"), "did you mean 'position'?"),
    (GOOD + '[budget."x-*"]\nposition = 1\n', "[budget.x-*] matches none of the cases"),
    (GOOD + "[alarms]\ngrowth = 0.5\n", "growth is a factor and must be above 1"),
    (GOOD + "[alarms]\nmargin = 2\n", "must be below 1"),
    (GOOD + '[code]\nfolder = "nowhere"\n', "is no folder beside the suite"),
    (GOOD + "[run]\nrepeat = 3\n", "repeat must be 1 or 2"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "sentence"), FAULTS)
def test_every_fault_is_one_sentence(tmp_path: Path, text: str, sentence: str) -> None:
    path = written(tmp_path, text)
    with pytest.raises(UsageError) as caught:
        read_suite(path)
    said = str(caught.value)
    assert sentence in said
    assert said.startswith(str(path))
    assert "\n" not in said


def test_faults_of_orbit_files_name_them(tmp_path: Path) -> None:
    (tmp_path / "a.toml").write_text(parts.circle().replace("chart", "charrt"))
    text = '[propagator.p]\npython = "m:f"\n[cases]\nfiles = ["a.toml"]\n'
    with pytest.raises(UsageError, match=r"a\.toml: unknown key 'charrt'.*did you mean 'chart'"):
        read_suite(written(tmp_path, text))
    with pytest.raises(UsageError, match="there is no such file"):
        read_suite(tmp_path / "none.toml")


def test_two_cases_of_one_name_are_refused(tmp_path: Path) -> None:
    for name in ("a", "b"):
        (tmp_path / f"{name}.toml").write_text('name = "same"\n' + parts.circle())
    text = '[propagator.p]\npython = "m:f"\n[cases]\nfiles = ["a.toml", "b.toml"]\n'
    with pytest.raises(UsageError, match="two cases are called 'same'"):
        read_suite(written(tmp_path, text))
