"""The header on processors that are not here: compiled for them by clang, to assembly that is read, not run.

Shows that the barrier's operand constraints are taken there, and that no fused instruction is left although the
compiler is told to fuse; an unprotected copy has them, or the test shows nothing.
"""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from c_programs import compiled, header, need, unprotected
from models import sample_sealed_models

from export.targets.c.lexical import REAL

MODELS = {name: sealed for name, (_, sealed) in sample_sealed_models().items()}

# Fused multiply-add of each instruction set, as its assembler spells it.
FUSED = {
    "x86_64 -march=haswell": r"\bvfn?m(add|sub)\w+",
    "x86_64 -march=skylake-avx512": r"\bvfn?m(add|sub)\w+",
    "aarch64-linux-gnu": r"\bf(n?m(add|sub)|ml[as])\b",
    "thumbv7em-none-eabihf -mcpu=cortex-m7 -mfpu=fpv5-sp-d16 -mfloat-abi=hard": r"\bvfn?m[as]\.",
    "thumbv7em-none-eabihf -mcpu=cortex-m7 -mfloat-abi=hard": r"\bvfn?m[as]\.",
    "riscv64 -march=rv64gc -mabi=lp64d": r"\bfn?m(add|sub)\.",
    "powerpc64le-linux-gnu": r"\bx?sn?m(add|sub)\w+|\bfn?m(add|sub)s?\b",
    "s390x-linux-gnu": r"\bw?f?m[as](e|d)?br\b|\bwfm[as]db\b",
}
WITHOUT = (
    "thumbv7em-none-eabihf -mcpu=cortex-m4 -mfloat-abi=hard",  # it has them, but clang does not choose them
    "thumbv6m-none-eabi -mcpu=cortex-m0",
    "thumbv7m-none-eabi -mcpu=cortex-m3",
    "riscv32 -march=rv32imac -mabi=ilp32",
    "avr -mmcu=atmega328p",
    "mips-linux-gnu",  # the most significant byte first
)
ONE_PRECISION = "fpv5-sp"  # its unit has no binary64: nothing to fuse


def assembly(text: str, name: str, target: str, folder: Path) -> str:
    real = REAL[MODELS[name].arithmetic]
    (folder / "model.h").write_text(text)
    (folder / "main.c").write_text(
        f'#include "model.h"\n{real} z(const {real} *x);\n{real} p(const {real} *x);\nint s(void);\n'
        f"{real} z(const {real} *x) {{ return {name}_log_odds(x); }}\n"
        f"{real} p(const {real} *x) {{ return {name}_probability(x); }}\n"
        f"int s(void) {{ return {name}_self_test(); }}\n"
    )
    command = ["clang", *f"--target={target}".split(), "-std=c99", "-ffreestanding", "-O2", "-ffp-contract=fast"]
    command += ["-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-S", "main.c", "-o", "main.s"]
    done = compiled(command, folder)
    assert done.returncode == 0, done.stderr
    assert "warning: " not in done.stderr.replace("clang: warning", ""), done.stderr
    return (folder / "main.s").read_text()


@pytest.mark.parametrize("target", FUSED)
@pytest.mark.parametrize("name", ["many_binary32", "many_binary64"])
def test_no_fused_instruction_is_left(name: str, target: str, tmp_path: Path) -> None:
    need("clang")
    bare = re.findall(FUSED[target], assembly(unprotected(header(MODELS[name]), name), name, target, tmp_path))
    if name == "many_binary64" and ONE_PRECISION in target:
        assert not bare
    else:
        assert bare, f"{target} does not fuse even without the barrier: this shows nothing"
    assert not re.findall(FUSED[target], assembly(header(MODELS[name]), name, target, tmp_path))


@pytest.mark.parametrize("target", WITHOUT)
def test_header_compiles_where_nothing_is_fused(target: str, tmp_path: Path) -> None:
    need("clang")
    text = assembly(header(MODELS["pump_binary32"]), "pump_binary32", target, tmp_path)
    assert "pump_binary32" in text or "main.c" in text
    for pattern in FUSED.values():
        assert not re.search(pattern, text)
