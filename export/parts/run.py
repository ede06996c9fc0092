"""The header on an emulated part: its answers to rows of inputs, in programs that each carry as many as fit."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path

from export.parts import Part
from export.parts.program import TYPES, TroubleError, compile_program, folder_of, program, row_bytes, run_program
from export.targets import Output, Run
from export.targets.c.ways import STRICT
from runtime_min.arithmetic import from_bits, raw_bits
from runtime_min.model import FLOATS, SealedModel

# The dialect that the compiler takes where nothing is said: it may fuse products and sums.
FLAGS = ("-std=gnu99", "-Os")
MORE_FLAGS = (("-std=c99", "-O2"), ("-std=gnu99", "-O3", "-ffp-contract=fast"))
CODE_BYTES = 16_000  # program memory that is left to code, and more an input; rows have the rest
CODE_BYTES_AN_INPUT = 80
MOST_ROW_BYTES = 32_000  # and no more than one array takes on the smallest parts
SECONDS = 60


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
        what = f"{where}, {' '.join(flags)}"
        try:
            yield _run_way(part, header.read_bytes(), sealed, rows, flags, what)
        except TroubleError as trouble:
            yield Run(what, True, str(trouble), None, None, ())


def _run_way(
    part: Part, header: bytes, sealed: SealedModel, rows: Sequence[Sequence[float]], flags: Sequence[str], what: str
) -> Run:
    size = len(sealed.inputs) * TYPES[sealed.arithmetic].digits[0] // 2
    room = part.rom - CODE_BYTES - CODE_BYTES_AN_INPUT * len(sealed.inputs)
    batch = max(1, min(room, MOST_ROW_BYTES) // size)
    outputs: list[Output] = []
    model_id, self_test = "", 0
    for start in range(0, max(len(rows), 1), batch):
        texts = [row_bytes(row, sealed.arithmetic) for row in rows[start : start + batch]]
        source = program("rows.c.jinja", sealed, rows=texts, count=len(texts))
        with folder_of(part, {"model.h": header, "rows.c": source}) as folder:
            compile_program(part, folder, (*flags, *STRICT))
            lines = run_program(part, folder, SECONDS)
        head = re.fullmatch(r"([0-9a-zA-Z]{0,64}) (-?\d{1,5})", lines[0]) if lines else None
        found = [_output(line, sealed.arithmetic) for line in lines[1:]]
        if head is None or len(found) != len(texts):
            raise TroubleError(f"expected {len(texts)} rows of output, found {len(found)}")
        model_id, self_test = head[1], self_test or int(head[2])
        outputs += found
    return Run(what, True, None, model_id, self_test, tuple(outputs))


def _output(line: str, arithmetic: str) -> Output:
    _, log_odds, probability = TYPES[arithmetic].digits
    match = re.fullmatch(rf"(-?\d+) ([0-9a-f]{{{log_odds}}}) ([0-9a-f]{{{probability}}}) (-?\d+)", line)
    if match is None:
        raise TroubleError(f'expected a row of output, found "{line[:60]}"')
    z, p = int(match[2], 16), int(match[3], 16)
    if arithmetic in FLOATS:  # every NaN as the same one
        z, p = (raw_bits(from_bits(bits, arithmetic), arithmetic) for bits in (z, p))
    else:
        z -= (z >> 4 * log_odds - 1) << 4 * log_odds  # two's complement
    return Output(int(match[1]), (z,), (p,), int(match[4]))
