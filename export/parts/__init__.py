"""The table of parts: small processors, emulated, that run the C header for a check and say what it costs there.

A part is a row of `PARTS`: a compiler with its options, an emulator with its own, how much memory there is. The module
of its family (`cortex_m`, `avr`) knows how that toolchain is called. `run` and `measure` know no part by name. Adding a
part is adding a row; adding a family is adding a module with what `Family` says, and C that starts a program there.
"""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Sequence
from dataclasses import dataclass
from importlib import import_module
from pathlib import Path
from typing import Protocol, cast

HERE = Path(__file__).parent
ALL = "all"


@dataclass(frozen=True)
class Tool:
    """A program that a part needs (with `library`: a library of that compiler), and the Debian package that has it."""

    command: str
    package: str
    library: str | None = None

    def missing(self) -> bool:
        """Whether it is not installed."""
        if shutil.which(self.command) is None:
            return True
        if self.library is None:
            return False
        asked = [self.command, f"-print-file-name={self.library}"]
        done = subprocess.run(asked, capture_output=True, text=True, timeout=30, check=False)
        return not Path(done.stdout.strip()).is_absolute()  # where there is none, the name comes back as it was


@dataclass(frozen=True)
class Part:
    """One emulated part. `counts`: what its emulator counts. `rom`, `ram`: bytes for programs and for data.

    `options` go to the compiler, `machine` to the emulator.
    """

    name: str
    shown: str
    family: str
    counts: str
    arithmetics: tuple[str, ...]
    tools: tuple[Tool, ...]
    options: tuple[str, ...]
    machine: tuple[str, ...]
    rom: int
    ram: int

    @property
    def chain(self) -> Family:
        """The module that knows how this part's toolchain is called."""
        return cast(Family, import_module(f"export.parts.{self.family}"))

    def compiler(self) -> str:
        """The compiler with its version: "avr-gcc 5.4.0"."""
        command = self.tools[0].command
        done = subprocess.run([command, "-dumpversion"], capture_output=True, text=True, timeout=30, check=False)
        return f"{command} {done.stdout.strip()}"

    def missing(self) -> str | None:
        """What is not installed and which packages have it, as a sentence; None where everything is there."""
        absent = [tool for tool in self.tools if tool.missing()]
        if not absent:
            return None
        names = ", ".join(tool.library or tool.command for tool in absent)
        packages = " ".join(dict.fromkeys(tool.package for tool in absent))
        return f"found no {names}; install it (Debian: apt-get install {packages})"


class Family(Protocol):
    """What the module of a toolchain offers. Commands run in the folder of the sources."""

    # Files of this folder that stand beside every program; those that end in .c are linked with it.
    SUPPORT: tuple[str, ...]

    @staticmethod
    def compile_command(part: Part, flags: Sequence[str], sources: Sequence[str]) -> list[str]:
        """Compiles and links the sources to `program.elf`."""

    @staticmethod
    def emulate_command(part: Part, counted: bool) -> list[str]:
        """Runs `program.elf`; `counted`: with a counter that is exact, which costs speed."""

    @staticmethod
    def written(stdout: str, stderr: str) -> str:
        """What the program wrote with put_char(), out of what the emulator wrote."""

    @staticmethod
    def counted(part: Part, ticks: int) -> int:
        """Instructions or cycles, from what read_count() returned."""


_EVERY = ("binary64", "binary32", "int16", "int32")
_ARM = (
    Tool("arm-none-eabi-gcc", "gcc-arm-none-eabi"),
    Tool("arm-none-eabi-gcc", "libnewlib-arm-none-eabi", "libc_nano.a"),
    Tool("qemu-system-arm", "qemu-system-arm"),
)
_AVR = (Tool("avr-gcc", "gcc-avr"), Tool("avr-gcc", "avr-libc", "libm.a"), Tool("simavr", "simavr"))
_MPS2 = {"rom": 4 << 20, "ram": 4 << 20}

PARTS = {
    part.name: part
    for part in (
        Part(
            "cortex-m0", "Cortex-M0", "cortex_m", "instructions", _EVERY, _ARM,
            ("-mcpu=cortex-m0",), ("microbit",), rom=256 << 10, ram=16 << 10,
        ),
        Part(
            "cortex-m3", "Cortex-M3", "cortex_m", "instructions", _EVERY, _ARM,
            ("-mcpu=cortex-m3",), ("mps2-an385",), **_MPS2,
        ),
        Part(
            "cortex-m4f", "Cortex-M4F", "cortex_m", "instructions", _EVERY, _ARM,
            ("-mcpu=cortex-m4", "-mfpu=fpv4-sp-d16", "-mfloat-abi=hard"), ("mps2-an386",), **_MPS2,
        ),
        # double has 32 bits there, so that binary64 cannot run.
        Part(
            "atmega328p", "ATmega328P", "avr", "cycles", ("binary32", "int16", "int32"), _AVR,
            ("-mmcu=atmega328p",), ("atmega328p",), rom=32 << 10, ram=2 << 10,
        ),
    )
}  # fmt: skip
