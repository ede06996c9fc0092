"""Generated Python modules, as text, as names and as files, for the tests that look into them."""

from __future__ import annotations

import functools
import math
from pathlib import Path
from typing import Any

from models import sample_extended_models, sample_integer_models, sample_sealed_models

from export.targets import (
    TARGETS,
    Output,
)
from export.vectors import make_vectors, self_test_of
from runtime_min.arithmetic import raw_bits
from runtime_min.model import SealedModel

MODELS = {name: sealed for name, (_, sealed) in {**sample_sealed_models(), **sample_extended_models()}.items()}
INTEGER_MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}
ARITHMETICS = ("binary64", "binary32")
INTEGERS = ("int16", "int32")
PYTHON = TARGETS["python"]
NAN, INFINITY = math.nan, math.inf


@functools.cache
def source(sealed: SealedModel) -> str:
    """The module's text."""
    return PYTHON.emit(sealed, self_test_of(sealed, make_vectors(sealed))).decode("ascii")


def loaded(text: str) -> dict[str, Any]:
    """The names of the module."""
    names: dict[str, Any] = {"__name__": "generated"}
    exec(compile(text, "generated.py", "exec"), names)
    return names


def output(module: dict[str, Any], inputs: Any, arithmetic: str) -> Output:
    """What the module says of one row."""
    return Output(
        module["check_inputs"](inputs),
        (raw_bits(module["log_odds"](inputs), arithmetic),),
        (raw_bits(module["probability"](inputs), arithmetic),),
        module["decide"](inputs),
    )


def written(sealed: SealedModel, folder: Path, text: str | None = None) -> Path:
    """The artefact as a file."""
    path = folder / PYTHON.file(sealed)
    path.write_text(source(sealed) if text is None else text, encoding="ascii", newline="\n")
    return path
