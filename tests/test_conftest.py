"""A missing tool of the system leaves a test out, and fails it under the project's CI."""

from __future__ import annotations

import sys

import pytest

ABSENT = "truefall-no-such-tool"


def test_a_missing_tool_skips_with_its_name(require_tool, monkeypatch):
    monkeypatch.delenv("TRUEFALL_CI", raising=False)
    with pytest.raises(pytest.skip.Exception, match=ABSENT):
        require_tool(ABSENT)


def test_a_missing_tool_fails_under_ci(require_tool, monkeypatch):
    monkeypatch.setenv("TRUEFALL_CI", "1")
    with pytest.raises(pytest.fail.Exception, match=ABSENT):
        require_tool(ABSENT)


def test_a_tool_that_is_there_is_found(require_tool):
    assert require_tool(sys.executable) == sys.executable
