"""Shared by all tests: the repository's root on the path of imports, and no silent skip where CI must run everything."""

from __future__ import annotations

import os
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
