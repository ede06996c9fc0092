"""Read the table back: the header's bytes as a compiler lays them out, and the HEX file's bytes and addresses."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory

from export.targets import Run
from export.targets.c.runner import INSTALL, PLAIN_WORDS, RUN_SECONDS
from export.targets.c.ways import STRICT, Compiler, compilers
from export.targets.programs import run_program
from export.targets.table.layout import Layout, layout
from runtime_min.model import Placement, SealedModel

PROGRAM = """#include <stdio.h>
#include "table.h"
int main(void)
{{
    const unsigned char *bytes = (const unsigned char *)&{name}_coefficients;
    size_t at;
    if (sizeof {name}_coefficients != {upper}_TABLE_BYTES) {{
        return 1;
    }}
    puts({upper}_TABLE_MODEL_ID);
    for (at = 0; at < sizeof {name}_coefficients; at++) {{
        printf("%02x", (unsigned)bytes[at]);
    }}
    return 0;
}}
"""


def run(artefact: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool) -> Iterator[Run]:
    """The header with each compiler (one, where not `thorough`), and the HEX file. `rows` have no use here."""
    found = compilers()
    if not found:
        yield Run("C, read back", False, f"found no C compiler; {INSTALL}", None, None, None)
    for compiler in found if thorough else found[:1]:
        yield _header(artefact, sealed, compiler)
    yield _hex(artefact.with_name(f"{sealed.name}.hex"), sealed)


def _header(artefact: Path, sealed: SealedModel, compiler: Compiler) -> Run:
    what = f"{compiler.version}, bytes of the structure"

    def broken(trouble: str) -> Run:
        return Run(what, True, trouble, None, None, None)

    request = sealed.about.request
    native = Placement(0, "big" if sys.byteorder == "big" else "little")
    about = replace(sealed.about, request=replace(request, table=native))
    wanted = layout(replace(sealed, about=about))
    asked = layout(sealed)
    # The check word is of the bytes in the plan's byte order, whatever the order of this machine is.
    word = asked.crc.to_bytes(asked.width, "big" if sys.byteorder == "big" else "little")
    expected = wanted.data[: -asked.width] + word
    try:
        with TemporaryDirectory(prefix="firmlogit-") as folder:
            place = Path(folder)
            (place / "table.h").write_bytes(artefact.read_bytes())
            (place / "main.c").write_text(PROGRAM.format(name=sealed.name, upper=sealed.name.upper()))
            command = [*compiler.c, "-std=c99", "-O2", *STRICT, str(place / "main.c"), "-o", str(place / "main")]
            done = run_program(command, compiler.seconds, folder=folder, environment={**os.environ, **PLAIN_WORDS})
            if done.trouble or done.status != 0:
                said = done.err.decode("utf-8", "replace").strip().splitlines()[:1]
                return broken("it does not compile: " + (done.trouble or "".join(said)).replace(folder + "/", ""))
            done = run_program([str(place / "main")], RUN_SECONDS, folder=folder)
    except OSError as error:
        return Run(what, False, f"no temporary folder to compile in ({error.strerror})", None, None, None)
    if done.trouble or done.status != 0:
        return broken(done.trouble or f"the structure does not have the {len(expected)} bytes that it should")
    model_id, _, text = done.out.decode("ascii", "replace").partition("\n")
    trouble = _difference(asked, bytes.fromhex(text), expected)
    return Run(what, True, trouble, model_id, None, None)


def _hex(path: Path, sealed: SealedModel) -> Run:
    what = "Intel HEX, addresses and bytes"
    try:
        import bincopy
    except ImportError:
        return Run(what, False, "found no bincopy; pip install bincopy", None, None, None)
    table = layout(sealed)
    file = bincopy.BinFile()
    try:
        file.add_ihex(path.read_text(encoding="ascii"))
    except (OSError, UnicodeDecodeError, bincopy.Error) as error:
        return Run(what, True, f"{path.name} cannot be read back ({error})", None, None, None)
    segments = [(segment.address, bytes(segment.data)) for segment in file.segments]
    if [address for address, _ in segments] != [table.placement.address]:
        found = ", ".join(f"0x{address:08X}" for address, _ in segments) or "no data"
        trouble = f"{path.name} holds data at {found}, expected it at 0x{table.placement.address:08X} alone"
        return Run(what, True, trouble, None, None, None)
    return Run(what, True, _difference(table, segments[0][1], table.data), None, None, None)


def _difference(table: Layout, found: bytes, expected: bytes) -> str | None:
    """Which number of the table is another one; None where the bytes are the same."""
    if found == expected:
        return None
    if len(found) != len(expected):
        return f"found {len(found)} bytes, expected {len(expected)}"
    at = next(position for position in range(len(expected)) if found[position] != expected[position])
    named = [entry for entry in table.entries if entry.offset <= at < entry.offset + len(entry.data)]
    what = named[0].what if named else "the model id" if at < len(bytes(8)) else "the CRC"
    if named and found[named[0].offset :][: len(named[0].data)] == expected[named[0].offset :][: table.width][::-1]:
        what += ", whose bytes stand in the other order"
    return f"byte {at} is 0x{found[at]:02X}, expected 0x{expected[at]:02X}: {what}"
