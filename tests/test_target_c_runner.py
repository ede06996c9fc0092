"""The runner of the C header: whatever goes wrong becomes the trouble of a run, in words, and nothing is raised."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from c_programs import C, compiler, fused_flags, header, need, run_header
from line_models import line_model

from export.targets.c import runner, ways
from export.targets.c.ways import Compiler, Way
from runtime_min.model import SealedModel

SEALED: SealedModel = line_model("binary32")
BODY = "int line_self_test(void)\n{\n"


def planted(code: str) -> str:
    """The header with this code at the head of its self-test."""
    text = header(SEALED)
    assert text.count(BODY) == 1
    return text.replace(BODY, BODY + code + "\n")


def test_without_a_compiler_one_run_says_what_to_install(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(ways.shutil, "which", lambda name: None)
    monkeypatch.setattr(ways, "find_spec", lambda name: None)
    for thorough in (False, True):
        (run,) = C.run(tmp_path / "line.h", SEALED, [(4.0,)], thorough)
        assert not run.ran
        assert run.trouble == (
            "found no C compiler; install a C compiler "
            "(Debian: apt-get install gcc g++; or pip install 'firmlogit[compiler]')"
        )


def test_without_a_c_plus_plus_compiler_the_c_ways_remain(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    need("gcc")
    which = ways.shutil.which
    monkeypatch.setattr(ways.shutil, "which", lambda name: None if name in ("g++", "clang++") else which(name))
    (tmp_path / "line.h").write_text(header(SEALED))
    runs = list(C.run(tmp_path / "line.h", SEALED, [(4.0,)], False))
    assert [run.outputs[0].decision for run in runs] == [1, 1]


def test_cc_serves_where_gcc_and_clang_are_missing(monkeypatch: pytest.MonkeyPatch) -> None:
    need("gcc", "cc")
    which = ways.shutil.which
    hidden = ("gcc", "g++", "clang", "clang++")
    monkeypatch.setattr(ways.shutil, "which", lambda name: None if name in hidden else which(name))
    (found,) = ways.compilers()
    assert found.version.startswith("cc ")


@pytest.mark.parametrize(
    ("code", "trouble"),
    [
        ("#error planted", "it does not compile: artefact.h:LINE:2: error: #error planted"),
        ("int unused;", "unused variable"),
        ("*(volatile int *)0 = 1;", "the program ended with status -"),
        ("return missing();", "it does not compile"),
        ('extern int puts(const char *); puts("odd");', "expected 1 rows of output, found "),
        ("extern void exit(int); exit(3);", "the program ended with status 3"),
        ("extern void exit(int); exit(0);", "expected 1 rows of output, found 0"),
    ],
)
def test_mistake_in_the_header_is_the_trouble_of_the_run(code: str, trouble: str, tmp_path: Path) -> None:
    run = run_header(planted(code), SEALED, Way(compiler("gcc"), "c", ("-std=c99", "-O0")), tmp_path, [(4.0,)])
    assert run.ran
    assert run.trouble is not None
    text = planted(code)
    line = text[: text.index(code)].count("\n") + 1
    assert trouble.replace("LINE", str(line)) in run.trouble
    assert str(tmp_path) not in run.trouble
    assert "firmlogit-" not in run.trouble
    assert run.outputs == ()


def test_header_that_is_not_there_ran_and_failed(tmp_path: Path) -> None:
    """A missing artefact is not a missing tool: nothing may accept it as one that did not run."""
    for run in C.run(tmp_path / C.file(SEALED), SEALED, [(4.0,)], False):
        assert run.ran
        assert run.trouble == "the header cannot be read (No such file or directory)"


def test_program_that_hangs_is_stopped(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(runner, "RUN_SECONDS", 0.5)
    way = Way(compiler("gcc"), "c", ("-std=c99", "-O0"))
    run = run_header(planted("volatile int on = 1; while (on) { }"), SEALED, way, tmp_path, [(4.0,)])
    assert run.trouble == "the program did not finish (stopped after 0.5 s)"


def fake(folder: Path, script: str) -> Compiler:
    path = folder / "cc"
    path.write_text(f"#!/bin/sh\n{script}\n")
    path.chmod(0o755)
    return Compiler("fake 1", (str(path),), None, 1)


@pytest.mark.skipif(os.name != "posix", reason="the compiler here is a shell script")
@pytest.mark.parametrize(
    ("script", "trouble"),
    [
        ("exec sleep 20", "the compiler did not finish (stopped after 1 s)"),
        ("exit 1", "it does not compile: no message"),
        ("exit 0", "the program did not finish (No such file or directory)"),
    ],
)
def test_compiler_that_fails_is_the_trouble_of_the_run(script: str, trouble: str, tmp_path: Path) -> None:
    run = run_header(header(SEALED), SEALED, Way(fake(tmp_path, script), "c", ()), tmp_path, [(4.0,)])
    assert (run.ran, run.trouble) == (True, trouble)


def test_rows_are_rounded_to_the_arithmetic_as_bits() -> None:
    # IEEE 754-2019: 0.1 in binary32 is 3DCCCCCD; too large for binary32 is infinity
    rows = [(0.1, 1e39), (-0.0, float("nan"))]
    assert runner.rows_as_bits(rows, SEALED) == "3dcccccd 7f800000\n80000000 7fc00000\n"
    assert runner.rows_as_bits([(0.1,)], line_model("binary64")) == "3fb999999999999a\n"


def test_thousands_of_rows_and_none_at_all(tmp_path: Path) -> None:
    way = Way(compiler("gcc"), "c", ("-std=c99", "-O2"))
    rows = [(position / 1000.0,) for position in range(8001)]  # z = -1 + x / 2 >= 1 from x = 4 on
    run = run_header(header(SEALED), SEALED, way, tmp_path, rows)
    assert [one.decision for one in run.outputs] == [int(x >= 4.0) for (x,) in rows]
    text = runner.rows_as_bits([], SEALED)
    (tmp_path / "line.h").write_text(header(SEALED))
    none = runner.run_one(way, tmp_path / "line.h", SEALED, text, 0)
    assert (none.trouble, none.outputs, none.self_test) == (None, (), 0)


def test_quick_ways_are_three_and_one_of_them_may_fuse() -> None:
    shown = [way.what for way in ways.quick(compiler("gcc"))]
    assert len(shown) == 3
    assert sum(flag in what for what in shown for flag in fused_flags()) == 1
