"""The whole flow in integers: the pump example, with counts of the plan for some inputs only, shipped and checked.

Expected: exit status 0 and every check held; with a planted mistake in one artefact, running it alone finds it.
"""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
from shipped import EXAMPLE

from export.check import check_release
from export.commands import main

COUNTED = (
    ("[-95.0, 250.0]", "{ bits = 12, gain = 0.1, offset = -95.0, signed = false }"),
    ("[0.0, 25.0]", "{ bits = 10, gain = 0.03, offset = -0.5, signed = false }"),
)
WRITE = 'write = ["python", "c", "onnx"]'


@pytest.fixture(scope="module", params=["int16", "int32"])
def release(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder: Path = tmp_path_factory.mktemp(request.param)
    shutil.copy(EXAMPLE / "runs.csv", folder)
    plan = (EXAMPLE / "plan.toml").read_text(encoding="utf-8")
    for limits, counts in COUNTED:
        assert plan.count(limits) == 1
        plan = plan.replace(limits, f"{limits}\ncounts = {counts}")
    for old, new in (
        ('"binary32"', f'"{request.param}"'),
        ("tolerance  = 0.001", "tolerance = 0.01"),
        ("[device]", "no_call = 0.5\n\n[device]"),
        (WRITE, 'write = ["python", "onnx"]'),
    ):
        assert plan.count(old) == 1, old
        plan = plan.replace(old, new)
    (folder / "plan.toml").write_text(plan, encoding="utf-8")
    assert main(["ship", str(folder / "plan.toml")]) == 0
    return folder / "release"


def test_release_in_integers_holds_every_check_in_every_way(release: Path) -> None:
    report = check_release(release, thorough=True)
    assert [check for check in report.checks if not check.ok] == []
    assert len([check for check in report.checks if check.target == "python"]) == 3
    assert len([check for check in report.checks if check.target == "onnx"]) == 7


def test_release_in_integers_has_chosen_counts_and_those_of_the_plan(release: Path) -> None:
    sealed = json.loads((release / "pump_cavitation.sealed.json").read_text(encoding="utf-8"))
    chosen = [entry["counts"] and entry["counts"]["chosen"] for entry in sealed["model"]["inputs"]]
    assert chosen == [False, True, True, False, True, None]


@pytest.mark.parametrize("table", ["NODES", "WEIGHT_FLOW"])
def test_running_finds_a_changed_number_in_the_module_of_a_release(release: Path, table: str, tmp_path: Path) -> None:
    """With the comparison of bytes off, and a self-test that finds nothing."""
    copy = tmp_path / "release"
    shutil.copytree(release, copy)
    module = copy / "pump_cavitation.py"
    text = module.read_text(encoding="ascii")
    number = " 28873," if table == "NODES" else next(x for x in text.splitlines() if x.startswith("WEIGHT_FLOW = "))
    other = " 28872," if table == "NODES" else f"WEIGHT_FLOW = {int(number.split()[2]) ^ 1}"
    assert text.count(number) == 1
    module.write_text(text.replace(number, other) + "\n\ndef self_test():\n    return 0\n", encoding="ascii")
    report = check_release(copy, compare_text=False)
    found = [check for check in report.checks if check.target == "python"]
    assert not report.ok
    assert all(check.ran and not check.ok and check.differences for check in found)
