"""The program for the real board, compiled and run on an emulated part exactly as a user would do it."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

from export.parts import Part
from export.parts.program import (
    FLAGS,
    SECONDS,
    SpaceError,
    TroubleError,
    compile_program,
    folder_of,
    run_program,
)
from export.targets import TARGETS, Vector
from export.targets.c.vectors_header import piece_count
from runtime_min.model import SealedModel

BOARD = "board.c"


def run_board(part: Part, release: Path, sealed: SealedModel, vectors: Sequence[Vector]) -> str:
    """Its verdict, where that is good; all vectors at once, or in pieces where they do not fit.

    Raises TroubleError where the verdict is another, or there is none.
    """
    names = (BOARD, "vectors.h", TARGETS["c"].file(sealed))
    try:
        sources = {name: (release / name).read_bytes() for name in names}
    except OSError as error:
        raise TroubleError(f"{error.filename} cannot be read ({error.strerror})") from None
    try:
        return _verdict(part, sources, FLAGS, len(vectors))
    except SpaceError:
        pieces = piece_count(sealed, vectors)
        macro = f"-D{sealed.name.upper()}_VECTORS_PIECE="
        rows = [_verdict(part, sources, (*FLAGS, f"{macro}{piece}"), None) for piece in range(1, pieces + 1)]
        if sum(_rows_of(line) for line in rows) != len(vectors):
            raise TroubleError(f"the pieces of vectors.h have not {len(vectors)} rows") from None
        return f"PASS, all {len(vectors)} rows, in {pieces} pieces"


def _verdict(part: Part, sources: dict[str, bytes], flags: Sequence[str], rows: int | None) -> str:
    with folder_of(part, sources) as folder:
        compile_program(part, folder, flags)
        lines = run_program(part, folder, SECONDS, end=None)
    verdict = lines[0].partition(": ")[2] if len(lines) == 1 else ""
    if _rows_of(verdict) == 0 or rows not in (None, _rows_of(verdict)):
        said = (" | ".join(lines) or "nothing")[:100]
        raise TroubleError(f"the board's program says {said}")
    return verdict


def _rows_of(verdict: str) -> int:
    match = re.fullmatch(r"PASS, all ([0-9]+) rows(?: give the expected bits)?", verdict)
    return int(match[1]) if match else 0
