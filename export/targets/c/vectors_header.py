"""The vectors as a C header beside the model's own, to run on the real board: no library, no files, no heap."""

from __future__ import annotations

from collections.abc import Sequence

from export.targets import Vector
from export.targets.c.emit import vector_words
from export.targets.c.template import fill
from runtime_min.model import SealedModel


def emit_vectors_header(sealed: SealedModel, vectors: Sequence[Vector]) -> bytes:
    """`vectors.h`, ASCII: bits of inputs and answers, and `NAME_run_vectors()`. There is at least one vector."""
    return fill(
        ("vectors.h.jinja",),
        sealed,
        rows=[(vector.kind, vector_words(vector, sealed.arithmetic)) for vector in vectors],
        answers=[f"{{ {vector.expected.fault}, {vector.expected.decision} }}" for vector in vectors],
    )
