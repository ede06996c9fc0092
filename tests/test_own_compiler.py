"""The compiler of the plan: the user's own command line takes the header, and its size is reported."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path

import pytest
from models import sample_sealed_models
from shipped import EXAMPLE

from export.commands import main
from export.targets import TARGETS
from export.targets.c.own_compiler import compile_own
from export.vectors import make_vectors, self_test_of

SEALED = sample_sealed_models()["one_input_binary32"][1]
HAVE = [name for name in ("gcc", "clang", "arm-none-eabi-gcc", "avr-gcc") if shutil.which(name)]


@pytest.fixture
def header(tmp_path: Path) -> Path:
    path = tmp_path / "model.h"
    path.write_bytes(TARGETS["c"].emit(SEALED, self_test_of(SEALED, make_vectors(SEALED))))
    return path


def script(folder: Path, text: str) -> str:
    """A compiler of our own making."""
    path = folder / "my compiler"
    path.write_text(f"#!/bin/sh\n{text}\n")
    path.chmod(0o755)
    return f"'{path}'"


COMMANDS = (
    "gcc -Os",
    "clang -O2 -Wall",
    "arm-none-eabi-gcc -mcpu=cortex-m4 -mfloat-abi=hard -Os",
    "arm-none-eabi-gcc -mcpu=cortex-m0 -Os",
    "avr-gcc -mmcu=atmega328p -Os",
)


@pytest.mark.parametrize("command", COMMANDS)
def test_size_of_what_the_compiler_makes_is_reported(command: str, header: Path) -> None:
    if command.split()[0] not in HAVE:
        pytest.skip(f"{command.split()[0]} is not installed")
    run, found = compile_own(command, header, SEALED)
    assert (run.ran, run.trouble) == (True, None)
    size = re.match(r"([\d,]+) bytes of program memory, [\d,]+ of data, the self-test and its rows among them", found)
    assert size, found
    assert 300 < int(size[1].replace(",", "")) < 20_000
    assert run.what == f"the plan's compiler: {command}"


@pytest.mark.parametrize(
    ("text", "ran", "found"),
    [
        ("exit 3", True, "it does not compile (status 3): no message"),
        (
            "echo 'model.h:1: error: no such type' >&2; exit 1",
            True,
            "it does not compile (status 1): model.h:1: error: no such type",
        ),
        ("kill -SEGV $$", True, "it does not compile (status -11): no message"),
        ("sleep 30", True, "the compiler did not finish (stopped after 1 s)"),
        ("exit 0", True, "the compiler says that it succeeded and wrote no object file; give it a command that does"),
    ],
)
def test_compiler_that_fails_is_told_in_one_sentence(
    text: str, ran: bool, found: str, header: Path, tmp_path: Path
) -> None:
    run, _ = compile_own(script(tmp_path, text), header, SEALED, seconds=1)
    assert (run.ran, run.trouble) == (ran, found)


def test_warning_is_quoted_and_does_not_fail_the_check(header: Path, tmp_path: Path) -> None:
    command = script(tmp_path, "echo 'warning: old target' >&2; printf x > code.o")
    run, found = compile_own(command, header, SEALED)
    assert run.trouble is None
    assert found == "compiled; the object is not ELF, so its size is not known; it warns: warning: old target"


def test_compiler_that_is_not_there_counts_as_not_run(header: Path) -> None:
    run, _ = compile_own("no-such-compiler -Os", header, SEALED)
    assert not run.ran
    assert run.trouble == (
        "no-such-compiler does not start (No such file or directory); install it, or change compiler in the plan"
    )


def test_header_that_is_not_there_ran_and_failed(tmp_path: Path) -> None:
    run, _ = compile_own("gcc", tmp_path / "model.h", SEALED)
    assert (run.ran, run.trouble) == (True, "the header cannot be read (No such file or directory)")


def test_plan_with_a_compiler_ships_and_reports_the_size(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    if "gcc" not in HAVE:
        pytest.skip("gcc is not installed")
    (tmp_path / "runs.csv").write_bytes((EXAMPLE / "runs.csv").read_bytes())
    plan = (EXAMPLE / "plan.toml").read_text()
    (tmp_path / "plan.toml").write_text(plan.replace("[device]", '[device]\ncompiler = "gcc -Os -DX=\\"1 2\\""'))
    assert main(["ship", str(tmp_path / "plan.toml"), "--json"]) == 0
    checks = json.loads(capsys.readouterr().out)["checks"]
    (own,) = [entry for entry in checks if entry["what"].startswith("the plan's compiler")]
    assert "bytes of program memory" in own["found"]
