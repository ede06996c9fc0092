"""Mistakes in what a release holds beside the artefacts: models, witness, vectors, documents, manifest.

Where a sealed model is forged, every other file follows from it and agrees with it: only sealing anew, the budget or
the witness can find it.
"""

from __future__ import annotations

import json
import math
import struct
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from export import check
from export.contents import MANIFEST, contents
from export.vector_files import decimal_text
from export.vectors import make_vectors
from planted import Planted
from planted.bench import NAME, Bench, Edit
from runtime_min.codec import load, load_trained
from runtime_min.model import SealedModel, Thresholds, TrainedModel

SEALED, TRAINED = f"{NAME}.sealed.json", f"{NAME}.trained.json"


def forged(
    sealed_edit: Callable[[SealedModel], SealedModel] = lambda sealed: sealed,
    trained_edit: Callable[[TrainedModel], TrainedModel] = lambda trained: trained,
) -> Callable[[Bench], list[str]]:
    """A release that agrees with itself, of a sealed or a trained model that is not what it should be."""

    def found(bench: Bench) -> list[str]:
        sealed, trained = load(bench.release / SEALED), load_trained(bench.release / TRAINED)
        other, taught = sealed_edit(sealed), trained_edit(trained)
        assert (other, taught) != (sealed, trained), "the mistake was not planted"
        manifest = json.loads((bench.release / MANIFEST).read_text())
        for name, data in contents(other, taught, manifest["write"], make_vectors(other, taught)).items():
            (bench.release / name).write_bytes(data)
        manifest["model_id"] = other.model_id
        (bench.release / MANIFEST).write_text(json.dumps(manifest))
        return bench.check(None)

    return found


def with_weight(sealed: SealedModel, change: Callable[[float], float]) -> SealedModel:
    """Another weight of the second input."""
    term = replace(sealed.terms[1], weights=((change(sealed.terms[1].weights[0][0]),),))
    return replace(sealed, terms=(sealed.terms[0], term, *sealed.terms[2:]))


def with_high(sealed: SealedModel) -> SealedModel:
    """A wider range of the first input."""
    return replace(sealed, inputs=(replace(sealed.inputs[0], high=300.0), *sealed.inputs[1:]))


def older_polynomial(sealed: SealedModel) -> SealedModel:
    """Taylor's coefficients of exp in the place of those that were fitted to the interval."""
    assert sealed.exponential is not None
    numbers = tuple(float(np.float32(1 / math.factorial(power))) for power in range(7))
    return replace(sealed, exponential=replace(sealed.exponential, coefficients=numbers))


def of_another_fit(trained: TrainedModel) -> TrainedModel:
    """As after one row more: every weight a little off, and the witness agrees with that."""
    score = trained.scores[0]
    weights = tuple(weight * 1.01 for weight in score.weights)
    return replace(trained, scores=(replace(score, weights=weights),))


def next_up(value: float) -> float:
    """The next binary32 number."""
    return float(np.nextafter(np.float32(value), np.float32(np.inf)))


def in_json(file: str, edit: Callable[[Any], None], *, compare_text: bool = False) -> Callable[[Bench], list[str]]:
    """Edit a JSON file in its place."""

    def change(text: str) -> str:
        parsed = json.loads(text)
        edit(parsed)
        return json.dumps(parsed)

    return in_text(file, change, compare_text=compare_text)


def in_text(file: str, edit: Edit, *, compare_text: bool = False) -> Callable[[Bench], list[str]]:
    """Edit a file in its place and check everything but the artefacts."""

    def found(bench: Bench) -> list[str]:
        bench.edit(file, edit)
        return bench.check(None, compare_text)

    return found


def twice_the_weight(sealed: Any) -> None:
    sealed["model"]["terms"][1]["weights"][0][0] *= 2


def off_by_a_hundredth(trained: Any) -> None:
    trained["trained"]["witness"][3]["log_odds"][0] += 0.01


def off_within_a_wide_bound(trained: Any) -> None:
    off_by_a_hundredth(trained)
    trained["trained"]["witness"][3]["bounds"][0] = 1.0


def no_witness(trained: Any) -> None:
    trained["trained"]["witness"] = []


def edited_vector(text: str) -> str:
    """Decimal and bits of one log-odds are edited together, so that the file still reads well."""
    lines = text.splitlines(keepends=True)
    fields = lines[7].split(",")
    bits = int(fields[-4], 16) ^ 1
    fields[-4] = f"{bits:08X}"
    fields[-5] = decimal_text(struct.unpack("<f", struct.pack("<I", bits))[0], "binary32")
    return "".join([*lines[:7], ",".join(fields), *lines[8:]])


def without_header(bench: Bench) -> list[str]:
    """The C header is edited, and the manifest no longer speaks of it."""
    bench.edit(f"{NAME}.h", lambda text: text.replace("z >= ", "z > "))
    manifest = json.loads((bench.release / MANIFEST).read_text())
    del manifest["files"][f"{NAME}.h"]
    (bench.release / MANIFEST).write_text(json.dumps(manifest))
    return bench.check(None)


def unnamed_witness(bench: Bench) -> list[str]:
    """A file that the release must hold, and that the manifest no longer speaks of."""
    manifest = json.loads((bench.release / MANIFEST).read_text())
    del manifest["files"]["witness.csv"]
    (bench.release / MANIFEST).write_text(json.dumps(manifest))
    report = check.check_release(bench.release)
    return [f"{entry.artefact}: {entry.what}: {entry.found}" for entry in report.checks if not entry.ok]


def removed(bench: Bench) -> list[str]:
    """One file is gone."""
    (bench.release / "HANDOFF.md").unlink()
    return bench.check(None, compare_text=True)


MISTAKES = (
    Planted(
        "sealed model",
        "last digit of a weight, everywhere",
        forged(lambda sealed: with_weight(sealed, next_up)),
        "sealed anew: .*weights",
    ),
    Planted("sealed model", "a range wider than the plan's, everywhere", forged(with_high), "sealed anew: .*high"),
    Planted(
        "sealed model",
        "the logistic's polynomial from another version, everywhere",
        forged(older_polynomial),
        "sealed anew: .*coefficients",
    ),
    Planted(
        "sealed model",
        "another threshold, everywhere",
        forged(lambda sealed: replace(sealed, decision=Thresholds(0.0, 0.0))),
        "sealed anew: .*decision",
    ),
    Planted(
        "sealed model",
        "classes reversed, everywhere",
        forged(lambda sealed: replace(sealed, classes=sealed.classes[::-1])),
        "sealed anew: .*classes",
    ),
    Planted(
        "sealed model",
        "a policy that the plan does not have, everywhere",
        forged(lambda sealed: replace(sealed, inputs=(replace(sealed.inputs[0], outside="clamp"), *sealed.inputs[1:]))),
        "loads: .*inputs",
    ),
    Planted("sealed model", "a weight edited in the file alone", in_json(SEALED, twice_the_weight), "model id"),
    Planted(
        "trained model",
        "sealed and trained from different fits",
        forged(trained_edit=of_another_fit),
        "sealed anew: .*the trained model gives",
    ),
    Planted(
        "trained model",
        "sealed and trained from different fits, seen by the budget",
        forged(lambda sealed: with_weight(sealed, lambda weight: float(np.float32(weight * 1.01)))),
        "error budget: .*tolerance",
    ),
    Planted(
        "trained model", "witness edited", in_json(TRAINED, off_by_a_hundredth), "witness.csv: .*row 4 is the first"
    ),
    Planted(
        "trained model",
        "witness edited, and its own bound widened to hide it",
        in_json(TRAINED, off_within_a_wide_bound),
        "witness.csv: .*row 4 is the first",
    ),
    Planted("trained model", "no witness at all", in_json(TRAINED, no_witness), "no witness row|witness"),
    Planted("vectors", "an expected output edited, decimal and bits", in_text("vectors.csv", edited_vector), "line 8"),
    Planted(
        "vectors",
        "all rows cut off",
        in_text("vectors.csv", lambda text: text.splitlines(keepends=True)[0]),
        "vectors.csv: .*holds no row",
    ),
    Planted(
        "vectors",
        "most rows cut off",
        in_text("vectors.csv", lambda text: "".join(text.splitlines(keepends=True)[:9]), compare_text=True),
        "other bytes in .*vectors.csv",
    ),
    Planted(
        "witness file",
        "witness.csv other than the trained model's",
        in_text("witness.csv", lambda text: text.replace("1", "2", 1), compare_text=True),
        "witness.csv",
    ),
    Planted(
        "documents",
        "a coefficient edited",
        in_text("coefficients.csv", lambda text: text.replace("0.", "1.", 1), compare_text=True),
        "not as written: coefficients.csv",
    ),
    Planted(
        "documents",
        "HANDOFF.md edited",
        in_text("HANDOFF.md", lambda text: text + "\nUse it for anything.\n", compare_text=True),
        "other bytes in HANDOFF.md",
    ),
    Planted("documents", "a file removed", removed, "not as written: HANDOFF.md"),
    Planted(
        "manifest",
        "another model's id",
        in_json(MANIFEST, lambda manifest: manifest.update(model_id="0123456789abcdef")),
        "the manifest names another",
    ),
    Planted(
        "manifest",
        "other rows",
        in_json(MANIFEST, lambda manifest: manifest.update(rows_sha256="0" * 64)),
        "the manifest's rows_sha256 is not that of the sealed model",
    ),
    Planted(
        "manifest",
        "an edited artefact taken out of it",
        without_header,
        f"digest of every file: named like the model, and not in the manifest: {NAME}.h",
    ),
    Planted(
        "manifest",
        "a document taken out of it",
        unnamed_witness,
        "written anew: the manifest does not name witness.csv",
    ),
)
