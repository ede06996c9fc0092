"""Long streams of random rows, drawn on a part itself and here in the same way; their answers' running checksum."""

from __future__ import annotations

import binascii
import itertools
import math
import subprocess
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

from c_programs import compiler, header

from export.parts import Part
from export.parts.program import FLAGS, compile_program, folder_of, program, run_program, types_of
from export.vectors import expected
from runtime_min.arithmetic import NAN
from runtime_min.integer_score import missing_count
from runtime_min.model import FLOATS, Input, SealedModel

SEED = 2463534242
SECONDS = 300
MOST = 1 << 16  # whole numbers, times 2^bits of them, that one input takes

HOST_PART = b"#include <stdint.h>\nvoid put_char(char c);\n"
HOST_PUT_CHAR = b'#include "part.h"\n#include <stdio.h>\nvoid put_char(char c)\n{\n    putchar(c);\n}\n'


@dataclass(frozen=True)
class Drawn:
    """How one input is drawn: first + k, k below count, then `bits` more bits; times `step`. In two ways."""

    within: tuple[int, int]
    beyond: tuple[int, int]
    bits: int
    step: Fraction


def drawn(entry: Input, floating: bool) -> Drawn:
    """Over the limits, and over limits a little wider."""
    low, high = Fraction(entry.low), Fraction(entry.high)
    if entry.levels:
        return Drawn((0, len(entry.levels)), (-1, len(entry.levels) + 2), 0, Fraction(1))
    if floating:
        # At most 2^23 steps from 0 and at most 2^24 of them: every reading is a number of binary32.
        step, bits = Fraction(2) ** (math.frexp(float(max(-low, high, (high - low) / 2)))[1] - 23), 8
    else:
        step, bits = Fraction(1), 0 if high - low < MOST else 16
    first, last = math.ceil(low / step), math.floor(high / step)
    count = min((last - first + 1) >> bits, MOST)
    margin = 0 if not floating and count << bits >= MOST // 2 else max(1, (last - first) >> 7)
    return Drawn((first, count), (first - margin, min(count + (2 * margin >> bits), MOST)), bits, step)


def stream_source(sealed: SealedModel, count: int, block: int) -> bytes:
    """The program."""
    floating = sealed.arithmetic in FLOATS
    inputs = [drawn(entry, floating) for entry in sealed.inputs]
    least = f"(-{-missing_count(sealed) - 1}L - 1)" if not floating else '__builtin_nanf("")'
    return program(
        str(Path(__file__).parent / "stream.c.jinja"),
        sealed,
        ranges=[(*entry.within, *entry.beyond, entry.bits) for entry in inputs],
        steps=[repr(float(entry.step)) + "f" for entry in inputs],
        floating=floating,
        missing=least,
        seed=f"{SEED}UL",
        count=count,
        block=block,
    )


def on_part(part: Part, sealed: SealedModel, count: int, block: int) -> list[str]:
    """The checksums that the part prints."""
    sources = {"model.h": header(sealed).encode(), "stream.c": stream_source(sealed, count, block)}
    with folder_of(part, sources) as folder:
        compile_program(part, folder, FLAGS)
        if part.family == "avr" and sealed.arithmetic in FLOATS:
            return _by_qemu(folder)
        return run_program(part, folder, SECONDS)


def _by_qemu(folder: Path) -> list[str]:
    """An ATmega328P under QEMU, which counts no cycles and is six times as fast as simavr. It never ends by itself.

    QEMU 7.2 hangs where an instruction skips a RET, as in the integers' multiplication in libgcc; they need simavr.
    """
    command = ["qemu-system-avr", "-M", "uno", "-bios", "program.elf", "-nographic", "-monitor", "none"]
    with subprocess.Popen(
        [*command, "-serial", "stdio"],
        cwd=folder,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    ) as emulator:
        watch = threading.Timer(SECONDS, emulator.kill)
        watch.start()
        assert emulator.stdout is not None
        lines = list(itertools.takewhile(lambda line: line != "end", map(str.strip, emulator.stdout)))
        emulator.kill()
        watch.cancel()
    return lines


def on_host(sealed: SealedModel, count: int, block: int, folder: Path) -> list[str]:
    """The checksums of the same program here."""
    files = {"model.h": header(sealed).encode(), "stream.c": stream_source(sealed, count, block)}
    files |= {"part.h": HOST_PART, "put_char.c": HOST_PUT_CHAR}
    for name, data in files.items():
        (folder / name).write_bytes(data)
    command = [*compiler("gcc").c, "-std=c99", "-O2", "stream.c", "put_char.c", "-o", "stream"]
    subprocess.run(command, cwd=folder, check=True, timeout=60)
    done = subprocess.run(["./stream"], cwd=folder, check=True, timeout=SECONDS, capture_output=True, text=True)
    *lines, end = done.stdout.split()
    assert end == "end"
    return lines


def of_reference(sealed: SealedModel, count: int) -> str:
    """The checksum after `count` rows of the reference scorer's answers."""
    types = types_of(sealed)
    sizes = [digits // 2 for digits in types.digits[1:]]
    checksum = 0
    for row in rows(sealed, count):
        output = expected(sealed, row)
        data = b"".join(
            bits.to_bytes(8, "little")[:size]
            for bits, size in zip((*output.log_odds, *output.probability), sizes, strict=True)
        )
        data += output.fault.to_bytes(2, "little") + output.decision.to_bytes(2, "little", signed=True)
        checksum = binascii.crc32(data, checksum)
    return f"{checksum ^ 0xFFFFFFFF:08x}"  # the program leaves out the last step, so that it can go on


def rows(sealed: SealedModel, count: int) -> Iterator[tuple[float, ...]]:
    """The rows that the program draws."""
    floating = sealed.arithmetic in FLOATS
    inputs = [drawn(entry, floating) for entry in sealed.inputs]
    absent = NAN if floating else missing_count(sealed)
    state = SEED
    for row in range(count):
        values: list[float] = []
        for entry in inputs:
            state = state * 1664525 + 1013904223 & 0xFFFFFFFF
            draw = state ^ state >> 16
            first, span = entry.beyond if row % 8 == 7 else entry.within
            n = first + ((draw >> 16) * span >> 16 << entry.bits | draw & (1 << entry.bits) - 1)
            missing = row % 8 == 7 and draw >> 8 & 0xFF == 0
            values.append(absent if missing else float(n * entry.step) if floating else n)
        yield tuple(values)
