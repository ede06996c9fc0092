"""Compile and run small C programs round a generated header."""

from __future__ import annotations

import functools
import re
import shutil
import subprocess
from collections.abc import Sequence
from pathlib import Path

import pytest

from export.targets import TARGETS, Run
from export.targets.c import ways
from export.targets.c.runner import rows_as_bits, run_one
from export.targets.c.ways import Compiler, Way
from export.vectors import make_vectors, self_test_of
from runtime_min.model import SealedModel

C = TARGETS["c"]
FAMILIES = ("gcc", "clang")


def need(*tools: str) -> None:
    """Skip, by name, where a tool is missing."""
    missing = [tool for tool in tools if shutil.which(tool) is None]
    if missing:
        pytest.skip(f"needs {', '.join(missing)}: install it to run this test")


def compiler(family: str) -> Compiler:
    """gcc or clang with its C++ half; skips where it is missing."""
    need(family, "g++" if family == "gcc" else "clang++")
    return next(entry for entry in ways.compilers() if entry.version.startswith(family))


def fused_flags() -> tuple[str, ...]:
    """The flags that let a compiler fuse products and sums; skips where this processor cannot."""
    flags = ways.fused_flags()
    if not flags:
        pytest.skip("needs an x86 processor with FMA and AVX2: other ones show nothing here")
    return flags


@functools.cache
def header(sealed: SealedModel) -> str:
    """The header's text."""
    return C.emit(sealed, self_test_of(sealed, make_vectors(sealed))).decode("ascii")


def run_header(text: str, sealed: SealedModel, way: Way, folder: Path, rows: Sequence[Sequence[float]] = ()) -> Run:
    """Run a (perhaps edited) header in one way on rows; by default on the model's vectors."""
    rows = rows or [vector.inputs for vector in make_vectors(sealed)]
    path = folder / "edited.h"
    path.write_text(text, encoding="ascii", newline="\n")
    return run_one(way, path, sealed, rows_as_bits(rows, sealed), len(rows))


def unprotected(text: str, name: str) -> str:
    """The header without the barrier: each product and its sum written as one expression."""
    return re.sub(rf"\b{name}_round\((?!float product|double product)", "(", text)


def compiled(command: Sequence[str], folder: Path) -> subprocess.CompletedProcess[str]:
    """Run a compiler in the folder."""
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=120, check=False)


def status_of(source: str, command: Sequence[str], folder: Path) -> int:
    """Compile main.c, which must work, and run it: its exit status."""
    (folder / "main.c").write_text(source)
    done = compiled([*command, "main.c", "-o", "main", "-lm"], folder)
    assert done.returncode == 0, done.stderr
    return subprocess.run([str(folder / "main")], timeout=60, check=False).returncode
