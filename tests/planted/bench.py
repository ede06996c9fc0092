"""Where a mistake is planted: a copy of the example's release, or a small plan that is shipped in this process."""

from __future__ import annotations

import contextlib
import hashlib
import importlib
import io
import json
import random
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from export import check
from export.commands import main
from export.contents import MANIFEST

NAME = "pump_cavitation"
Edit = Callable[[str], str]

PLAN = """
model = "pump"
[rows]
file = "rows.csv"
label = "state"
classes = ["sound", "cavitating"]
weight = "hours"
group = "pump"
held_out = 0.25
seed = 3
[[input]]
name = "head"
range = [900, 1100]
[[input]]
name = "flow"
range = [0, 60]
missing = "typical"
outside = "clamp"
[[input]]
name = "impeller"
levels = ["closed", "semi_open", "open"]
[prior]
sd = 1.0
[decision]
cost_miss = 10.0
prevalence = 0.05
no_call = 0.2
[device]
tolerance = 0.01
[release]
write = ["python"]
"""


def invented_rows() -> str:
    """320 invented rows of 40 pumps, with hours as weights, some flows missing and some out of range."""
    chance = random.Random(5)
    lines = ["state,hours,pump,head,flow,impeller"]
    for row in range(320):
        head, flow = chance.gauss(1000, 25), chance.gauss(30, 12)
        level = chance.choice(["closed", "semi_open", "open"])
        z = -(head - 1000) / 25 + (flow - 30) / 12 + 0.8 * (level == "open") - 0.7 + chance.gauss(0, 1.5)
        flow_text = "" if row % 17 == 3 else f"{flow:.2f}"
        state = "cavitating" if z > 0 else "sound"
        lines.append(f"{state},{chance.choice([1, 2, 5.5])},p{row % 40},{head:.2f},{flow_text},{level}")
    return "\n".join(lines) + "\n"


@dataclass(frozen=True)
class Bench:
    """`release`: a copy of the example's release, to write into. `patch`: undone after the test."""

    release: Path
    folder: Path
    patch: pytest.MonkeyPatch

    def ship(self) -> list[str]:
        """Ship the small plan; what failed, each as one sentence."""
        (self.folder / "rows.csv").write_text(invented_rows())
        plan = self.folder / "plan.toml"
        plan.write_text(PLAN)
        out, err = io.StringIO(), io.StringIO()
        with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            status = main(["ship", str(plan), "--json"])
        if err.getvalue():
            return err.getvalue().splitlines()
        assert status == int(not json.loads(out.getvalue())["ok"])
        return _sentences(json.loads(out.getvalue())["checks"])

    def check(self, target: str | None, compare_text: bool = False) -> list[str]:
        """Check the copy, of its artefacts only `target`'s (None: none of them); what failed, each as one sentence.

        Unless text is compared, no mistake is found for its bytes: its digest in the manifest is made right.
        """
        path = self.release / MANIFEST
        manifest = json.loads(path.read_text())
        manifest["write"] = [target] if target else []
        for name in manifest["files"]:
            if (self.release / name).exists() and not compare_text:
                manifest["files"][name] = hashlib.sha256((self.release / name).read_bytes()).hexdigest()
        path.write_text(json.dumps(manifest))
        report = check.check_release(self.release, compare_text=compare_text)
        return _sentences([vars(entry) for entry in report.checks])

    def edit(self, file: str, change: Edit) -> None:
        """Change a text file of the copy."""
        path = self.release / file
        before = path.read_text()
        after = change(before)
        assert after != before, "the mistake was not planted"
        path.write_text(after)

    def wrap(self, where: str, around: Callable[..., object]) -> None:
        """Replace a function, named with its module, by one that gets it as its first argument."""
        module, _, name = where.rpartition(".")
        inner = getattr(importlib.import_module(module), name)
        self.patch.setattr(where, lambda *given, **named: around(inner, *given, **named))


def _sentences(checks: list[dict[str, object]]) -> list[str]:
    return [f"{entry['artefact']}: {entry['what']}: {entry['found']}" for entry in checks if not entry["ok"]]
