"""What a release holds: every file that follows from the sealed and the trained model, as bytes; nothing is written."""

from __future__ import annotations

from collections.abc import Sequence

from export.handoff import coefficients_csv, handoff_md
from export.targets import TARGETS, Vector
from export.targets.c.vectors_header import emit_board, emit_vectors_header
from export.vector_files import vectors_csv, witness_csv
from export.vectors import self_test_of
from runtime_min.codec import sealed_text, trained_text
from runtime_min.model import SealedModel, TrainedModel

MANIFEST = "manifest.json"
MANIFEST_FORMAT = "firmlogit release 1"


def artefacts(
    sealed: SealedModel, write: Sequence[str], vectors: Sequence[Vector], prevalence: str | None = None
) -> dict[str, bytes]:
    """Every file that follows from the sealed model alone; HANDOFF.md says the prevalence where one is given."""
    self_test = self_test_of(sealed, vectors)
    files: dict[str, bytes] = {}
    for name in write:
        files |= TARGETS[name].files(sealed, self_test)
    return {
        **files,
        f"{sealed.name}.sealed.json": sealed_text(sealed).encode(),
        "coefficients.csv": coefficients_csv(sealed),
        "HANDOFF.md": handoff_md(sealed, vectors, write, prevalence),
        "vectors.csv": vectors_csv(sealed, vectors),
        "vectors.h": emit_vectors_header(sealed, vectors),
        "board.c": emit_board(sealed, vectors),
    }


def contents(
    sealed: SealedModel, trained: TrainedModel, write: Sequence[str], vectors: Sequence[Vector]
) -> dict[str, bytes]:
    """Every file of a release but its manifest."""
    return {
        **artefacts(sealed, write, vectors, trained.prevalence),
        f"{sealed.name}.trained.json": trained_text(trained).encode(),
        "witness.csv": witness_csv(trained),
    }
