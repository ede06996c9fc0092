"""AVR: avr-gcc with avr-libc, and simavr. A program writes to the UART, and counts cycles by Timer 1."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from export.parts import Part

SUPPORT = ("part.h", "avr.h", "avr.c")


def compile_command(part: Part, flags: Sequence[str], sources: Sequence[str]) -> list[str]:
    """avr-gcc with its own start-up code."""
    command = ["avr-gcc", *part.options, *flags, "-ffunction-sections", "-fdata-sections", "-Wl,--gc-sections"]
    return [*command, *sources, "-o", "program.elf"]


def emulate_command(part: Part, counted: bool) -> list[str]:
    """simavr, which counts cycles always."""
    return ["simavr", "-m", part.machine[0], "-f", "16000000", "program.elf"]


def written(stdout: str, stderr: str) -> str:
    """The UART's lines on standard error, without the colours and the dot that simavr puts for each line's end."""
    plain = re.sub(r"\x1b\[[0-9;]*m", "", stderr)
    return "".join(line.removesuffix(".") + "\n" for line in plain.splitlines())


def counted(part: Part, ticks: int) -> int:
    """Timer 1 counts cycles."""
    return ticks
