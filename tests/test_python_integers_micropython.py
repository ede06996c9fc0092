"""The generated Python module of int16 and int32 under MicroPython (its WebAssembly build, run by node).

Expected integers are those of the reference scorer under CPython, and for counts those of the module under CPython.
"""

from __future__ import annotations

import math

import pytest
from python_modules import INTEGER_MODELS, loaded, source
from test_micropython import pytestmark, run_micropython

from export.targets import SELF_TEST_TABLES
from export.vectors import make_vectors
from runtime_min import score
from runtime_min.model import SealedModel

__all__ = ["pytestmark"]

PROGRAM = """
import sys
sys.path.insert(0, "/house")
import artefact
from data import COUNTED, ROWS
print(artefact.MODEL_ID, artefact.self_test())
NAN, INFINITY = float("nan"), float("inf")
for inputs in ROWS:
    given = [NAN if x is None else x for x in inputs]
    print(artefact.check_inputs(given), artefact.log_odds(given), artefact.probability(given), artefact.decide(given))
for name, readings in COUNTED:
    print(name, [artefact.count(name, reading) for reading in readings + [NAN, INFINITY, -INFINITY]])
"""


def under_micropython(
    artefact: str, rows: list[tuple[float | None, ...]], counted: list[tuple[str, list[float]]]
) -> list[str]:
    """What the program prints; None in a row stands for NaN, which has no literal."""
    files = {"/house/artefact.py": artefact, "/house/data.py": f"ROWS = {rows!r}\nCOUNTED = {counted!r}\n"}
    return run_micropython(files, PROGRAM)


def readings(sealed: SealedModel) -> list[tuple[str, list[float]]]:
    """For each input with counts, readings on and between its limits."""
    shares = [0.0, 0.1, 0.25, 1 / 3, 0.5, 0.77, 1.0]
    result = []
    for entry in sealed.inputs:
        if entry.counts is not None:
            (asked,) = [asked for asked in sealed.about.request.inputs if asked.name == entry.name]
            low, high = float(str(asked.low)), float(str(asked.high))
            result.append((entry.name, [low + (high - low) * share for share in shares]))
    return result


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_integer_module_gives_cpython_s_integers_under_micropython(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    whole = [vector.inputs for vector in make_vectors(sealed)]
    # The same as floats, a missing one as NaN, and one between two counts.
    rows: list[tuple[float | None, ...]] = [*whole, *(tuple(map(float, row)) for row in whole[:40])]
    rows += [(None, *whole[0][1:]), (whole[0][0] + 0.5, *whole[0][1:])]
    module, counted = loaded(source(sealed)), readings(sealed)
    first, *printed = under_micropython(source(sealed), rows, counted)
    assert first == f"{sealed.model_id} 0"
    want = []
    for row in rows:
        fault, (z,), (p,), decision = score.outputs(sealed, [math.nan if x is None else x for x in row])
        want.append(f"{fault} {z} {p} {decision}")
    odd = [math.nan, math.inf, -math.inf]
    want += [f"{key} {[module['count'](key, x) for x in values + odd]}" for key, values in counted]
    assert printed == want


@pytest.mark.parametrize("name", ["pump_int16", "pump_int32"])
def test_self_test_finds_a_changed_node_under_micropython(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    artefact = source(sealed)
    planted = artefact.replace(" 28873,", " 28874,")
    assert planted != artefact
    assert under_micropython(planted, [], []) == [f"{sealed.model_id} {SELF_TEST_TABLES}"]
