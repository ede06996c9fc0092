"""Compile the header in several ways, run each program on the rows, and say what came of it.

The driver reads and prints bits, so nothing is lost in decimals. Whatever a compiler or program does that it should
not (a warning, a crash, a hang, odd output) becomes the trouble of that run; nothing is raised.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from tempfile import TemporaryDirectory

from export.targets import Output, Run
from export.targets.c import ways
from export.targets.c.template import fill
from export.targets.c.ways import Way
from export.targets.programs import run_program
from runtime_min.arithmetic import ACCUMULATOR_BITS, ROUND, from_bits, raw_bits
from runtime_min.integer_score import count_bits
from runtime_min.model import INTEGERS, SealedModel

INSTALL = "install a C compiler (Debian: apt-get install gcc g++; or pip install 'firmlogit[compiler]')"
RUN_SECONDS = 30
SHOWN_LINES = 3
PLAIN_WORDS = {"LC_ALL": "C"}  # a compiler speaks English in ASCII

_HEAD = re.compile(r"([0-9a-zA-Z]{0,64}) (-?\d{1,9})")
_ROW = {
    arithmetic: re.compile(rf"(-?\d{{1,9}}) ([0-9a-f]{{{log_odds}}}) ([0-9a-f]{{{probability}}}) (-?\d{{1,9}})")
    for arithmetic, log_odds, probability in (
        ("binary32", 8, 8),
        ("binary64", 16, 16),
        ("int16", 8, 4),
        ("int32", 16, 4),
    )
}


def run(artefact: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool) -> Iterator[Run]:
    """One run a way of compiling: three with the first compiler found, or (thorough) all ways of all compilers."""
    found = ways.compilers()
    if not found:
        yield Run("C", False, f"found no C compiler; {INSTALL}", None, None, ())
        return
    text = rows_as_bits(rows, sealed)
    for way in [way for compiler in found for way in ways.thorough(compiler)] if thorough else ways.quick(found[0]):
        yield run_one(way, artefact, sealed, text, len(rows))


def run_one(way: Way, artefact: Path, sealed: SealedModel, text: str, row_count: int) -> Run:
    """Compile in one way and run."""

    def broken(trouble: str) -> Run:
        return Run(way.what, True, trouble, None, None, ())

    try:
        header = artefact.read_bytes()
    except OSError as error:
        return broken(f"the header cannot be read ({error.strerror or error})")
    try:
        with TemporaryDirectory(prefix="firmlogit-") as folder:
            sources = _write_sources(Path(folder), header, sealed, way.separate)
            program = Path(folder) / "program"
            command = [*way.command, *map(str, sources), "-o", str(program)]
            done = run_program(command, way.compiler.seconds, folder=folder, environment={**os.environ, **PLAIN_WORDS})
            if done.trouble:
                return broken(f"the compiler did not finish ({done.trouble})")
            if done.status is not None and done.status < 0:
                return broken(f"the compiler was killed by signal {-done.status}")
            if done.status != 0:
                return broken("it does not compile: " + _shown(done.err, folder))
            if b"warning" in done.err:
                return broken("it compiles with a warning: " + _shown(done.err, folder))
            done = run_program([str(program)], RUN_SECONDS, text.encode(), folder)
            if done.trouble:
                return broken(f"the program did not finish ({done.trouble})")
            if done.status != 0:
                return broken(f"the program ended with status {done.status}: " + _shown(done.err, folder))
    except OSError as error:
        trouble = f"no temporary folder to compile in ({error.strerror or error}); free space or set TMPDIR"
        return Run(way.what, False, trouble, None, None, ())
    return _parsed(way.what, done.out.decode("utf-8", "replace"), sealed.arithmetic, row_count)


def rows_as_bits(rows: Sequence[Sequence[float]], sealed: SealedModel) -> str:
    """One row a line, each number's bits in hexadecimal; numbers are first rounded to the arithmetic.

    In integers they are counts, in two's complement.
    """
    if sealed.arithmetic in INTEGERS:
        digits, mask = count_bits(sealed) // 4, (1 << count_bits(sealed)) - 1
        return "".join(" ".join(f"{int(value) & mask:0{digits}x}" for value in row) + "\n" for row in rows)
    arithmetic, rounded = sealed.arithmetic, ROUND[sealed.arithmetic]
    digits = 8 if arithmetic == "binary32" else 16
    return "".join(
        " ".join(f"{raw_bits(rounded(float(value)), arithmetic):0{digits}x}" for value in row) + "\n" for row in rows
    )


def _write_sources(folder: Path, header: bytes, sealed: SealedModel, separate: bool) -> list[Path]:
    (folder / "artefact.h").write_bytes(header)
    driver = folder / "driver.c"
    text = _driver(sealed)
    if not separate:
        driver.write_bytes(text)
        return [driver]
    prefix = sealed.name.upper()
    code = folder / "code.c"
    code.write_text(f'#define {prefix}_SEPARATE\n#define {prefix}_CODE_HERE\n#include "artefact.h"\n')
    driver.write_bytes(f"#define {prefix}_SEPARATE\n".encode() + text)
    return [driver, code]


def _driver(sealed: SealedModel) -> bytes:
    if sealed.arithmetic not in INTEGERS:
        return fill(("driver.c.jinja",), sealed, header="artefact.h")
    widths = {"count_bits": count_bits(sealed), "sum_bits": ACCUMULATOR_BITS[sealed.arithmetic]}
    return fill(("integer_driver.c.jinja",), sealed, header="artefact.h", **widths)


def _parsed(what: str, text: str, arithmetic: str, row_count: int) -> Run:
    lines = text.splitlines()
    head = _HEAD.fullmatch(lines[0]) if lines else None
    rows = [_ROW[arithmetic].fullmatch(line) for line in lines[1:]]
    if head is None or len(rows) != row_count or not all(rows):
        found = next((line for line, row in zip(lines[1:], rows, strict=True) if row is None), "")
        shown = f', among them "{found[:60]}"' if found else ""
        return Run(what, True, f"expected {row_count} rows of output, found {len(rows)}{shown}", None, None, ())
    outputs = tuple(
        Output(int(row[1]), (_bits(row[2], arithmetic),), (_bits(row[3], arithmetic),), int(row[4]))
        for row in rows
        if row
    )
    return Run(what, True, None, head[1], int(head[2]), outputs)


def _bits(text: str, arithmetic: str) -> int:
    """The printed bits, every NaN as the same one."""
    if arithmetic in INTEGERS:
        return int(text, 16)
    bits: int = raw_bits(from_bits(int(text, 16), arithmetic), arithmetic)
    return bits


def _shown(words: bytes, folder: str) -> str:
    """The first lines of a message, without the folder, which is another one each time."""
    text = words.decode("utf-8", "replace").replace(folder + "/", "")
    lines = [line.strip() for line in text.splitlines()]
    wanted = [line for line in lines if "error" in line or "warning" in line] or lines
    shown = " | ".join(wanted[:SHOWN_LINES]) or "no message"
    return "".join(character if character.isprintable() else "?" for character in shown)
