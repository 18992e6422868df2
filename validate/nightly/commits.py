"""The commit of the code under test, given or found, and the commits between two nights."""

from __future__ import annotations

import os
import re
import subprocess
from pathlib import Path

from truefall.validate.nightly.suite import Suite

__all__ = ["commit_of", "commits_between"]

_MOST = 50
_HASH = re.compile(r"[0-9a-f]{7,64}(\+changes)?", re.ASCII)
_DIRTY = "+changes"


def _git(folder: Path, *words: str) -> str | None:
    """What git says; None if it cannot say anything."""
    try:
        done = subprocess.run(
            ["git", "-C", str(folder), *words],
            capture_output=True, timeout=20, stdin=subprocess.DEVNULL,
            env={**os.environ, "GIT_OPTIONAL_LOCKS": "0", "LC_ALL": "C"},
        )  # fmt: skip
    except (OSError, subprocess.TimeoutExpired):
        return None
    return done.stdout.decode("utf-8", "replace").strip() if done.returncode == 0 else None


def commit_of(suite: Suite) -> str | None:
    """Of the code under test: the environment's TRUEFALL_COMMIT, the suite's, or git's.

    git's carries "+changes" where tracked files differ from it; None without any.
    """
    given = os.environ.get("TRUEFALL_COMMIT") or suite.commit
    if given:
        return "".join(c if c.isprintable() else " " for c in given)[:200]
    if suite.code_folder is None:
        return None
    found = _git(suite.code_folder, "rev-parse", "HEAD")
    if found is None:
        return None
    changed = _git(suite.code_folder, "status", "--porcelain", "--untracked-files=no")
    return found + (_DIRTY if changed else "")


def commits_between(suite: Suite, before: str | None, now: str | None) -> tuple[str, ...]:
    """What could explain other results: "hash subject", the newest first, at most fifty."""
    if before is None or now is None:
        return ()
    found: list[str] = []
    clean = [c.removesuffix(_DIRTY) for c in (before, now)]
    if now.endswith(_DIRTY) or before.endswith(_DIRTY):
        found.append("changes that are not committed")
    if clean[0] == clean[1]:
        return tuple(found)
    log = None
    if suite.code_folder is not None and all(_HASH.fullmatch(c) for c in clean):
        log = _git(
            suite.code_folder, "log", f"-{_MOST + 1}", "--format=%h %s", f"{clean[0]}..{clean[1]}"
        )
    lines = [line[:200] for line in (log or "").splitlines()]
    if len(lines) > _MOST:
        lines[_MOST:] = ["and earlier ones"]
    return tuple(found + lines) if lines else (*found, f"from {clean[0]} to {clean[1]}")
