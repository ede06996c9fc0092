"""The reference scorer and the generated Python module under MicroPython (its WebAssembly build, run by node).

Expected bits are those of the reference scorer under CPython: both interpreters claim IEEE 754 binary64.
"""

from __future__ import annotations

import json
import math
import shutil
import subprocess
from dataclasses import dataclass
from pathlib import Path

import pytest
from models import sample_extended_models, sample_sealed_models

from export.targets import TARGETS
from export.vectors import expected, make_vectors, self_test_of
from runtime_min.arithmetic import from_bits, raw_bits
from runtime_min.codec import sealed_text
from runtime_min.model import SealedModel

FOLDER = Path(__file__).resolve().parent / "micropython"
SCORER = ("__init__.py", "arithmetic.py", "score.py", "integer_score.py", "logistic_constants.py")

MISSING = [
    what
    for what, there in (
        ("node (Debian: nodejs)", shutil.which("node")),
        ("MicroPython (npm ci --prefix tests/micropython)", (FOLDER / "node_modules").is_dir()),
    )
    if not there
]
pytestmark = pytest.mark.skipif(bool(MISSING), reason=f"MicroPython was not run: install {' and '.join(MISSING)}")

MODELS = {name: sealed for name, (_, sealed) in {**sample_sealed_models(), **sample_extended_models()}.items()}


@dataclass(frozen=True)
class Line:
    """One row's outputs as printed: a fault, log-odds and probability in the model's arithmetic, a decision."""

    fault: int
    log_odds: int
    probability: int
    decision: int


def run_micropython(files: dict[str, str], program: str) -> list[str]:
    """What a program prints under MicroPython; a traceback fails the test."""
    asked = json.dumps({"files": files, "program": program})
    done = subprocess.run(
        ["node", str(FOLDER / "run.js")], input=asked, capture_output=True, text=True, timeout=120, check=False
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()


def score_rows(sealed: SealedModel, artefact: str, rows: list[tuple[float, ...]]) -> tuple[str, list[Line], list[Line]]:
    """First line (model id and self-test), then what the reference scorer and the generated module say of each row."""
    here = Path(__file__).resolve().parent.parent / "runtime_min"
    files = {f"/house/runtime_min/{name}": (here / name).read_text(encoding="utf-8") for name in SCORER}
    files["/house/artefact.py"] = artefact
    files["/house/model.json"] = json.dumps(json.loads(sealed_text(sealed))["model"])
    files["/house/rows.json"] = json.dumps([[f"{raw_bits(x, 'binary64'):016x}" for x in row] for row in rows])
    first, *printed = run_micropython(files, (FOLDER / "score_rows.py").read_text(encoding="utf-8"))
    lines = [line(text, sealed.arithmetic) for text in printed]
    return first, lines[0::2], lines[1::2]


def line(text: str, arithmetic: str) -> Line:
    """One printed line; a number that is none of the arithmetic's fails the test."""
    fault, z, p, decision = text.split()
    numbers = [from_bits(int(bits, 16), "binary64") for bits in (z, p)]
    kept = [from_bits(raw_bits(x, arithmetic), arithmetic) for x in numbers]
    assert all(x == y or x != x for x, y in zip(numbers, kept, strict=True)), text
    return Line(int(fault), raw_bits(numbers[0], arithmetic), raw_bits(numbers[1], arithmetic), int(decision))


def wanted(sealed: SealedModel, row: tuple[float, ...]) -> Line:
    """What CPython's reference scorer says."""
    output = expected(sealed, row)
    return Line(output.fault, output.log_odds[0], output.probability[0], output.decision)


@pytest.mark.parametrize("name", MODELS)
def test_scorer_and_module_give_cpython_s_bits_under_micropython(name: str) -> None:
    sealed = MODELS[name]
    vectors = make_vectors(sealed)
    artefact = TARGETS["python"].emit(sealed, self_test_of(sealed, vectors)).decode("ascii")
    rows = [vector.inputs for vector in vectors]
    # Beyond binary32, and between two of its numbers: the device rounds these itself.
    rows += [tuple(sign * 1e39 for _ in sealed.inputs) for sign in (1, -1)]
    rows += [tuple(entry.low + (entry.high - entry.low) / 3 for entry in sealed.inputs)]
    first, reference, generated = score_rows(sealed, artefact, rows)
    assert first == f"{sealed.model_id} 0"
    want = [wanted(sealed, row) for row in rows]
    assert reference == want
    assert generated == want


def test_self_test_finds_a_changed_weight_under_micropython() -> None:
    sealed = MODELS["plain_binary64"]
    artefact = TARGETS["python"].emit(sealed, self_test_of(sealed, make_vectors(sealed))).decode("ascii")
    weight = sealed.terms[0].weights[0][0]
    other = math.nextafter(weight, math.inf)
    planted = artefact.replace(f"= {weight!r}", f"= {other!r}")
    assert planted != artefact
    first, _, _ = score_rows(sealed, planted, [])
    assert first == f"{sealed.model_id} 1"


def test_wrong_number_of_inputs_is_named_under_micropython() -> None:
    sealed = MODELS["plain_binary32"]
    artefact = TARGETS["python"].emit(sealed, self_test_of(sealed, make_vectors(sealed))).decode("ascii")
    program = """
import sys
sys.path.insert(0, "/house")
import artefact
for inputs in ([1.0], [1.0] * 4):
    try:
        artefact.log_odds(inputs)
    except ValueError as error:
        print(error)
"""
    printed = run_micropython({"/house/artefact.py": artefact}, program)
    assert printed == [f"{sealed.name} takes 3 inputs, found {count}" for count in (1, 4)]
