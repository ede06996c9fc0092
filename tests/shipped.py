"""One release of the pump example, shipped once for all tests that look at one."""

from __future__ import annotations

import contextlib
import io
from pathlib import Path

from export.commands import main

EXAMPLE = Path(__file__).resolve().parent.parent / "examples" / "pump_alarm"


def ship_example(into: Path) -> Path:
    """Ship the example into a folder; every check must hold."""
    out = io.StringIO()
    with contextlib.redirect_stdout(out):
        status = main(["ship", str(EXAMPLE / "plan.toml"), "--into", str(into)])
    assert status == 0, out.getvalue()
    return into
