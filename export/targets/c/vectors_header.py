"""The vectors as a C header beside the model's own, and the program that runs them on the real board.

Neither needs a library, files or a heap.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from export.targets import Vector
from export.targets.c.emit import vector_words
from export.targets.c.template import fill
from runtime_min.integer_score import count_bits
from runtime_min.model import INTEGERS, SealedModel

# The smallest parts have 32 KiB of program memory, and a compiler there takes no larger array.
PIECE_BYTES = 12000

Words = tuple[str, list[str]]


def emit_vectors_header(sealed: SealedModel, vectors: Sequence[Vector]) -> bytes:
    """`vectors.h`, ASCII: bits of inputs and answers, and `NAME_run_vectors()`. There is at least one vector."""
    rows = [(vector.kind, vector_words(vector, sealed)) for vector in vectors]
    pieces, integers = list(_pieces(sealed, rows)), sealed.arithmetic in INTEGERS
    return fill(("vectors.h.jinja",), sealed, count=len(rows), pieces=pieces, integers=integers)


def emit_board(sealed: SealedModel, vectors: Sequence[Vector]) -> bytes:
    """`board.c`, ASCII: a `main` that prints the verdict of the self-test and of every vector."""
    return fill(("board.c.jinja",), sealed, count=len(vectors))


def piece_count(sealed: SealedModel, vectors: Sequence[Vector]) -> int:
    """How many values NAME_VECTORS_PIECE takes."""
    return len(list(_pieces(sealed, [(vector.kind, vector_words(vector, sealed)) for vector in vectors])))


def _pieces(sealed: SealedModel, rows: Sequence[Words]) -> Iterator[Sequence[Words]]:
    bits = count_bits(sealed) if sealed.arithmetic in INTEGERS else 32
    size = max(1, PIECE_BYTES * 8 // (bits * len(rows[0][1])))
    for start in range(0, len(rows), size):
        yield rows[start : start + size]
