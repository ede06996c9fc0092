"""A gigabyte of line and a million columns: one sentence, in bounded memory, and at once."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from test_ship_bad_input import CSV, PLAN

from export.commands import main

HUNGRY = """
import json, resource, sys
from pathlib import Path
import numpy, scipy.special
from export.commands import main
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
status = main(["ship", sys.argv[1]])
print(json.dumps([status, (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) / 1024]))
"""
GIGABYTE = 2**30
TOO_LONG = "found a row of more than 1000000 bytes; look for missing line ends, or for a quote that is never closed"
MANY = "keep the columns that the plan names"


@pytest.mark.parametrize(
    ("start", "size", "sentence"),
    [
        (b"", GIGABYTE, f"line 1: {TOO_LONG}"),
        (CSV.encode(), GIGABYTE, f"line 10: {TOO_LONG}"),
        (CSV.encode() + b'10,"', GIGABYTE, f"line 10: {TOO_LONG}"),
        (b"," * 999_999 + b"\n", 1_000_000, f"line 1: found 1000000 fields, more than 4096; {MANY}"),
        (CSV.encode() + b"," * 999_999 + b"\n", None, f"line 10: found 1000000 fields, more than 4096; {MANY}"),
        (",".join(f"c{at}" for at in range(1_000_000)).encode(), None, f"line 1: {TOO_LONG}"),
        (b"flow,wheel,state,hours\n" + b'"' + b"open\n" * 2_000_000, None, "line 2: found a field that is too long"),
    ],
    ids=["in the header", "in a row", "in quotes", "empty headers", "empty fields", "headers", "an open quote"],
)
def test_gigabyte_of_line_and_million_columns_end_in_a_sentence_in_bounded_memory(
    start: bytes, size: int | None, sentence: str, tmp_path: Path
) -> None:
    (tmp_path / "plan.toml").write_text(PLAN)
    with (tmp_path / "runs.csv").open("wb") as stream:
        stream.write(start)
        stream.truncate(size)  # sparse: a gigabyte of NUL takes no room on the disk
    command = [sys.executable, "-c", HUNGRY, str(tmp_path / "plan.toml")]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60)
    status, megabytes = json.loads(done.stdout)
    assert status == 2
    (line,) = done.stderr.splitlines()
    assert line.startswith(f"{tmp_path / 'runs.csv'}: {sentence}")
    assert megabytes <= 100


def test_gigabyte_of_plan_ends_in_a_sentence(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with (tmp_path / "plan.toml").open("wb") as stream:
        stream.truncate(GIGABYTE)
    assert main(["ship", str(tmp_path / "plan.toml")]) == 2
    assert capsys.readouterr().err == (
        f"{tmp_path / 'plan.toml'}: found more than 1000000 bytes; give a plan, and name the rows in it\n"
    )
