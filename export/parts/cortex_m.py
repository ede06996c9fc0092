"""Cortex-M: gcc for bare metal, and QEMU. A program writes by semihosting, and counts instructions by SysTick.

Under `-icount shift=10` an instruction takes 1024 ns of the emulated time, which SysTick then measures exactly.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from export.parts import Part

SUPPORT = ("part.h", "cortex_m.h", "cortex_m.c", "cortex_m.ld")
SHIFT = 10  # the largest that QEMU takes
CLOCK = {"microbit": 16_000_000, "mps2-an385": 25_000_000, "mps2-an386": 25_000_000}  # Hz, of SysTick


def compile_command(part: Part, flags: Sequence[str], sources: Sequence[str]) -> list[str]:
    """gcc, with the start-up code and memory map of this folder instead of a vendor's."""
    memory = [f"-Wl,--defsym=rom_bytes={part.rom}", f"-Wl,--defsym=ram_bytes={part.ram}"]
    command = ["arm-none-eabi-gcc", "-mthumb", *part.options, *flags, "-ffunction-sections", "-fdata-sections"]
    command += ["-nostartfiles", "--specs=nano.specs", "-Wl,--gc-sections", "-T", "cortex_m.ld", *memory]
    return [*command, *sources, "-o", "program.elf"]


def emulate_command(part: Part, counted: bool) -> list[str]:
    """QEMU without a screen, a monitor or a serial line."""
    command = ["qemu-system-arm", "-M", *part.machine, "-kernel", "program.elf", "-nographic", "-monitor", "none"]
    command += ["-serial", "none", "-semihosting-config", "enable=on,target=native"]
    return command + (["-icount", f"shift={SHIFT}"] if counted else [])


def written(stdout: str, stderr: str) -> str:
    """Semihosting writes to standard error."""
    return stderr


def counted(part: Part, ticks: int) -> int:
    """Instructions."""
    return round(ticks * 1_000_000_000 / (CLOCK[part.machine[0]] << SHIFT))
