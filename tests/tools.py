"""Tools that tests need: skipped where they are missing, a failure where CI is set."""

from __future__ import annotations

import os
import shutil

import pytest


def need(tool: str) -> str:
    """The path of a program; skips the test if it is missing, or fails it under CI=true."""
    path = shutil.which(tool)
    if path is None:
        message = f"{tool} is not on this machine"
        if os.environ.get("CI") == "true":
            pytest.fail(message)
        pytest.skip(message)
    return path
