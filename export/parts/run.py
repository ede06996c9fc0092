"""The header on an emulated part: its answers to rows of inputs, in programs that each carry as many as fit."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path

from export.parts import Part
from export.parts.program import (
    FLAGS,
    SECONDS,
    SpaceError,
    TroubleError,
    compile_program,
    folder_of,
    program,
    row_bytes,
    run_program,
    types_of,
)
from export.targets import Output, Run
from export.targets.c.ways import STRICT
from runtime_min.arithmetic import from_bits, raw_bits
from runtime_min.model import SealedModel

MORE_FLAGS = (("-std=c99", "-O1"), ("-std=gnu99", "-O2", "-ffp-contract=fast"))
MOST_ROW_BYTES = 32_000  # no more than one array takes on the smallest parts


def run_part(
    part: Part, header: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool = False
) -> Iterator[Run]:
    """Run a header on a part: as firmware is compiled, and (thorough) in other ways too. One Run a way.

    Where a tool is missing, or the arithmetic does not suit the part, `trouble` says so.
    """
    where = f"{part.shown}, emulated"
    if sealed.arithmetic not in part.arithmetics:
        fitting = ", ".join(part.arithmetics)
        yield Run(where, False, f"{sealed.arithmetic} does not suit this part; seal for {fitting}", None, None, ())
        return
    missing = part.missing()
    if missing:
        yield Run(where, False, missing, None, None, ())
        return
    for flags in (FLAGS, *MORE_FLAGS) if thorough else (FLAGS,):
        what = f"{where}, {part.compiler()} {' '.join(flags)}"
        try:
            yield _run_way(part, header.read_bytes(), sealed, rows, flags, what)
        except TroubleError as trouble:
            yield Run(what, True, str(trouble), None, None, ())


def _run_way(
    part: Part, header: bytes, sealed: SealedModel, rows: Sequence[Sequence[float]], flags: Sequence[str], what: str
) -> Run:
    model_id, self_test = "", 0
    outputs: list[Output] = []
    texts = [row_bytes(row, sealed) for row in rows]
    size = len(sealed.inputs) * types_of(sealed).digits[0] // 2
    batch = max(1, min(part.rom // 2, MOST_ROW_BYTES) // size)
    while len(outputs) < len(rows):
        some = texts[len(outputs) : len(outputs) + batch]
        try:
            head, found = _batch(part, header, sealed, some, flags)
        except SpaceError:
            if batch == 1:
                raise
            batch //= 2
            continue
        model_id, self_test = head[1], self_test or int(head[2])
        outputs += found
    return Run(what, True, None, model_id, self_test, tuple(outputs))


def _batch(
    part: Part, header: bytes, sealed: SealedModel, texts: Sequence[str], flags: Sequence[str]
) -> tuple[re.Match[str], list[Output]]:
    """Model id and self-test, and the answers to a few rows."""
    source = program("rows.c.jinja", sealed, rows=texts, count=len(texts))
    with folder_of(part, {"model.h": header, "rows.c": source}) as folder:
        compile_program(part, folder, (*flags, *STRICT))
        lines = run_program(part, folder, SECONDS)
    head = re.fullmatch(r"([0-9a-zA-Z]{0,64}) (-?\d{1,5})", lines[0]) if lines else None
    found = [_output(line, sealed) for line in lines[1:]]
    if head is None or len(found) != len(texts):
        raise TroubleError(f"expected {len(texts)} rows of output, found {len(found)}")
    return head, found


def _output(line: str, sealed: SealedModel) -> Output:
    _, log_odds, probability = types_of(sealed).digits
    match = re.fullmatch(rf"(-?\d+) ([0-9a-f]{{{log_odds}}}) ([0-9a-f]{{{probability}}}) (-?\d+)", line)
    if match is None:
        raise TroubleError(f'expected a row of output, found "{line[:60]}"')
    # Every NaN as the same one.
    z, p = (raw_bits(from_bits(int(bits, 16), sealed.arithmetic), sealed.arithmetic) for bits in match.group(2, 3))
    return Output(int(match[1]), (z,), (p,), int(match[4]))
