"""Put the real output of the README's command into the README: python tests/readme_output.py [--check]"""

from __future__ import annotations

import contextlib
import io
import re
import sys
import tempfile
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from export.commands import main  # noqa: E402

README = ROOT / "README.md"
BLOCK = re.compile(r"(?<=<!-- ship -->\n```\n).*?(?=```\n<!-- /ship -->)", re.DOTALL)


def shipped_output() -> str:
    """What shipping the example prints, the folder named as a reader's would be."""
    out = io.StringIO()
    with tempfile.TemporaryDirectory() as folder, contextlib.redirect_stdout(out):
        main(["ship", str(ROOT / "examples/pump_alarm/plan.toml"), "--into", f"{folder}/release"])
    return out.getvalue().replace(f"{folder}/release", "examples/pump_alarm/release")


if __name__ == "__main__":
    README.write_text(BLOCK.sub(lambda _: shipped_output(), README.read_text()))
