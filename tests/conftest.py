"""Shared by all tests: a cache of compiled libraries of their own, and the long profile."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "normal", max_examples=25, deadline=None, suppress_health_check=list(HealthCheck),
    derandomize=os.environ.get("CI") == "true",  # there a failure must be the change's own
)  # fmt: skip
settings.register_profile("long", parent=settings.get_profile("normal"), max_examples=250)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "normal"))


@pytest.fixture(autouse=True)
def _somewhere_else(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Commands that write to build_out unless told otherwise write below the test's own folder."""
    monkeypatch.chdir(tmp_path)


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--long", action="store_true", help="also run the tests marked long")


def pytest_configure(config: pytest.Config) -> None:
    if "DEMILUNE_TEST_CACHE" not in os.environ:  # set once, inherited by the workers
        folder = tempfile.mkdtemp(prefix="demilune-tests-")
        os.environ["DEMILUNE_TEST_CACHE"] = folder
        config.add_cleanup(lambda: __import__("shutil").rmtree(folder, ignore_errors=True))
    os.environ["DEMILUNE_CACHE"] = os.environ["DEMILUNE_TEST_CACHE"]


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    if not config.getoption("--long"):
        skip = pytest.mark.skip(reason="runs only with --long")
        for item in items:
            if "long" in item.keywords:
                item.add_marker(skip)
