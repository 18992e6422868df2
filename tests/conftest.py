"""What all tests share: tools of the system that a test may need, and hypothesis in step."""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable

import pytest
from hypothesis import settings

# The same examples every time: a test that fails must fail again.
settings.register_profile("truefall", derandomize=True, deadline=None, max_examples=60)
settings.load_profile("truefall")


@pytest.fixture(scope="session")
def require_tool() -> Callable[[str], str]:
    """The path of a program; without it the test is left out, under the project's CI it fails."""

    def require(name: str) -> str:
        path = shutil.which(name)
        if path is not None:
            return path
        reason = f"{name} is not installed on this machine"
        if os.environ.get("TRUEFALL_CI"):
            pytest.fail(reason)
        # at a user's desk a missing compiler or browser is no fault of the project
        return pytest.skip(reason)

    return require
