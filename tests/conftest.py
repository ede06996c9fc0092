"""Shared by all tests: the root on the path of imports, a shipped example, and no silent skip where CI runs."""

from __future__ import annotations

import os
import shutil
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(item: pytest.Item, call: pytest.CallInfo[None]):
    """Where CI is set, a skipped test has failed: the toolchain that it needs must be installed there."""
    report = yield
    if report.skipped and os.environ.get("CI") == "true" and not hasattr(report, "wasxfail"):
        report.outcome = "failed"
        report.longrepr = f"skipped, where nothing may skip: {report.longrepr[2] if report.longrepr else ''}"
    return report


@pytest.fixture(scope="session")
def release(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A release of the pump example. Read it; do not write into it."""
    from shipped import ship_example

    return ship_example(tmp_path_factory.mktemp("shipped") / "release")


@pytest.fixture
def release_copy(release: Path, tmp_path: Path) -> Path:
    """A copy of that release, alone in its folder, to write into."""
    return Path(shutil.copytree(release, tmp_path / "copy"))
