"""The reference scorer of int16 and int32 under MicroPython (its WebAssembly build, run by node): the same integers.

What it prints is held against CPython's; those in turn are held against rationals in `test_integers`.
"""

from __future__ import annotations

from pathlib import Path

import pytest
from models import sample_integer_models
from test_micropython import SCORER, pytestmark, run_micropython

from export.vectors import make_vectors
from runtime_min import score
from runtime_min.codec import plain

__all__ = ["pytestmark"]

MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}

PROGRAM = """
import sys
sys.path.insert(0, "/house")
from runtime_min import outputs
from data import MODEL, ROWS

class Plain:
    pass

def plain(value):
    if isinstance(value, dict):
        result = Plain()
        for key in value:
            setattr(result, key, plain(value[key]))
        return result
    return [plain(entry) for entry in value] if isinstance(value, (list, tuple)) else value

model = plain(MODEL)
for row in ROWS:
    print(outputs(model, row))
"""


@pytest.mark.parametrize("name", MODELS)
def test_integer_scorer_gives_cpython_s_integers_under_micropython(name: str) -> None:
    sealed = MODELS[name]
    rows = [vector.inputs for vector in make_vectors(sealed)]
    here = Path(__file__).resolve().parent.parent / "runtime_min"
    files = {f"/house/runtime_min/{module}": (here / module).read_text(encoding="utf-8") for module in SCORER}
    model = {key: value for key, value in plain(sealed).items() if key != "about"}
    files["/house/data.py"] = f"MODEL = {model!r}\nROWS = {rows!r}\n"
    assert run_micropython(files, PROGRAM) == [repr(score.outputs(sealed, row)) for row in rows]
