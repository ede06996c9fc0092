"""The generated Python module in int16 and int32: integers, policies, counts of readings, and what stands in it.

Expected values: the reference scorer's integers (what an artefact must reproduce), hand calculation on models whose
numbers are short binary fractions, mpmath for the logistic function, and rationals for counts.
"""

from __future__ import annotations

import ast
import io
import math
import random
import tokenize
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import mpmath
import numpy as np
import pytest
from line_models import HOSTILE, level_model, line_model, named_model, with_text
from python_modules import INFINITY, INTEGER_MODELS, INTEGERS, NAN, PYTHON, loaded, output, source, written

from export.targets.functions import exponential_of, table_of
from export.targets.python import lexical
from export.vectors import expected, make_vectors, random_row, self_test_of
from runtime_min.device_numbers import device_numbers
from runtime_min.folding import delivered, unit_map
from runtime_min.integer_score import missing_count
from runtime_min.model import SealedModel
from runtime_min.names import delivered_unit

# Names that the module or Python itself uses, lower-case as a plan's are.
# fmt: off
TRICKY_NAMES = [
    "inputs", "abs", "len", "range", "z", "i", "a", "q", "n", "x", "x_x", "n_x", "low", "high", "low_low",
    "missing", "counts", "count", "drop", "step", "nodes", "last", "half", "rest", "shift", "log_odds_shift", "datum",
    "weight", "weights", "typical", "fault", "no_log_odds", "model_id", "log_odds", "probability", "decide",
    "self_test", "numbers", "crc", "byte", "reading", "whole", "top", "bottom", "name", "gain", "offset",
    "intercept", "threshold",
]
# fmt: on

# One more than the least number of the accumulator, and what stands for log-odds on a fault.
LEAST = {"int16": -(2**31), "int32": -(2**63)}


# --- the same integers -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_module_gives_the_integers_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = INTEGER_MODELS[name]
    vectors = make_vectors(sealed)
    runs = list(PYTHON.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], True))
    assert [run.what.rsplit(", ", 1)[0] for run in runs] == [
        "CPython, fresh interpreter",
        "CPython, optimised (-O)",
        "CPython, whole numbers as float",
    ]
    for run in runs:
        assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, 0)
        assert list(run.outputs or ()) == [vector.expected for vector in vectors], run.what


def odd_rows(sealed: SealedModel) -> list[tuple[Any, ...]]:
    """A random row with each input in turn missing, infinite, between two counts, or far beyond every type."""
    rng = random.Random(5)
    rows = []
    for position, entry in enumerate(sealed.inputs):
        middle = (entry.low + entry.high) // 2
        values = [NAN, INFINITY, -INFINITY, middle + 0.5, entry.low - 0.5, entry.high + 0.5, -0.0, True]
        values += [10**30, -(10**30), -(2**15), -(2**31), -(2**15) - 1, 2**31, 1e300, float(middle)]
        for value in values:
            row = random_row(sealed, rng)
            rows.append((*row[:position], value, *row[position + 1 :]))
    return rows


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_module_treats_what_is_no_count_as_the_reference_scorer_does(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    module = loaded(source(sealed))
    for row in odd_rows(sealed):
        assert output(module, row, sealed.arithmetic) == expected(sealed, row), row


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_every_output_is_an_int(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    module = loaded(source(sealed))
    rows = [vector.inputs for vector in make_vectors(sealed)]
    for row in [*rows, *(tuple(map(float, row)) for row in rows), *odd_rows(sealed)]:
        for function in ("log_odds", "probability", "decide", "check_inputs"):
            assert type(module[function](row)) is int, function


@pytest.mark.parametrize("kind", [np.int16, np.int32, np.int64, np.float64])
@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_numpy_scalars_never_overflow_in_the_module(arithmetic: str, kind: Any) -> None:
    """A product of two np.int16 would wrap at 16 bits."""
    sealed = INTEGER_MODELS[f"counts_{arithmetic}"]
    module = loaded(source(sealed))
    for vector in make_vectors(sealed)[:150]:
        row = [x for x in vector.inputs if -(2**15) <= x < 2**15]
        if len(row) == len(sealed.inputs):
            assert output(module, [kind(x) for x in row], arithmetic) == expected(sealed, vector.inputs)
            assert output(module, np.array(row, kind), arithmetic) == expected(sealed, vector.inputs)


@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_names_of_inputs_never_meet_the_module_s_own(arithmetic: str, tmp_path: Path) -> None:
    sealed = named_model(arithmetic, TRICKY_NAMES)
    vectors = make_vectors(sealed)
    for run in PYTHON.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], False):
        assert (run.trouble, run.self_test) == (None, 0)
        assert list(run.outputs or ()) == [vector.expected for vector in vectors]


# --- by hand ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", INTEGERS)
@pytest.mark.parametrize(
    ("outside", "missing", "want"),
    [
        # z = -1 + x / 2 of these readings; a fault is None
        ("fault", "fault", (-1.0, 3.0, 1.5, None, None, None, None, None)),
        ("clamp", "fault", (-1.0, 3.0, 1.5, -1.0, 3.0, 3.0, -1.0, None)),
        ("fault", "typical", (-1.0, 3.0, 1.5, None, None, None, None, 0.5)),
        ("clamp", "typical", (-1.0, 3.0, 1.5, -1.0, 3.0, 3.0, -1.0, 0.5)),
    ],
)
def test_policies_by_hand(arithmetic: str, outside: str, missing: str, want: tuple[float | None, ...]) -> None:
    module = loaded(source(line_model(arithmetic, outside=outside, missing=missing)))
    readings = (0.0, 8.0, 5.0, -1.0, 9.0, INFINITY, -INFINITY, NAN)
    for x, z in zip(readings, want, strict=True):
        row = [module["count"]("x", x)]
        assert type(row[0]) is int
        if z is None:
            assert (module["log_odds"](row), module["probability"](row)) == (LEAST[arithmetic], 0xFFFF)
            assert (module["check_inputs"](row), module["decide"](row)) == (1, module["FAULT"])
        else:
            assert Fraction(module["log_odds"](row), 2 ** module["LOG_ODDS_SHIFT"]) == z
            assert (module["check_inputs"](row), module["decide"](row)) == (0, int(z >= 1.0))


@pytest.mark.parametrize("arithmetic", INTEGERS)
@pytest.mark.parametrize(("missing", "when_missing"), [("fault", None), ("typical", -3.0)])
def test_levels_by_hand(arithmetic: str, missing: str, when_missing: float | None) -> None:
    module = loaded(source(level_model(arithmetic, missing=missing)))
    assert "COUNTS" not in module
    assert "count" not in module
    right = [(0, -1.0), (-0.0, -1.0), (1, -0.75), (2.0, -3.0), (module["MISSING"], when_missing), (NAN, when_missing)]
    for x, z in [*right, *((wrong, None) for wrong in (0.5, 1.5, 3, -1, INFINITY, -INFINITY))]:
        units = LEAST[arithmetic] if z is None else z * 2 ** module["LOG_ODDS_SHIFT"]
        assert module["log_odds"]([x]) == units
        assert module["check_inputs"]([x]) == int(z is None)
        assert module["decide"]([x]) == (-2 if z is None else int(z >= -1.0))


@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_between_two_thresholds_is_no_call(arithmetic: str) -> None:
    sealed = line_model(arithmetic)
    one = 2 ** (sealed.accumulator_shift or 0)
    module = loaded(source(replace(sealed, decision=replace(sealed.decision, low=0, high=2 * one))))
    rows = [[module["count"]("x", x)] for x in (1.5, 2.0, 5.5, 6.0, NAN)]
    assert [module["decide"](row) for row in rows] == [0, -1, -1, 1, -2]
    assert (module["NO_CALL"], module["FAULT"], module["THRESHOLDS"]) == (-1, -2, (0, 2 * one))


@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_a_model_with_a_no_call_decides_all_three(arithmetic: str) -> None:
    sealed = INTEGER_MODELS[f"rare_{arithmetic}"]
    module = loaded(source(sealed))
    low, high = module["THRESHOLDS"]
    seen = set()
    for vector in make_vectors(sealed):
        z = module["log_odds"](vector.inputs)
        right = -2 if z == LEAST[arithmetic] else 1 if z >= high else 0 if z < low else -1
        assert module["decide"](vector.inputs) == right
        seen.add(right)
    assert seen == {-2, -1, 0, 1}


@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_probability_is_the_logistic_function_within_the_table_s_error(arithmetic: str) -> None:
    """mpmath at 30 digits; 1/2048 is the error that the table is made for. Exact at 0, symmetric, never falling."""
    mpmath.mp.dps = 30
    module = loaded(source(INTEGER_MODELS[f"steep_{arithmetic}"]))
    shift = module["LOG_ODDS_SHIFT"]
    found = []
    for step in range(-2600, 2601):
        units = step * 2**shift // 256
        module["log_odds"] = lambda inputs, units=units: units
        q = module["probability"]([0])
        exact = 1 / (1 + mpmath.exp(-mpmath.mpf(units) / mpmath.mpf(2) ** shift))
        assert abs(mpmath.mpf(q) / 32768 - exact) <= mpmath.mpf(1) / 2048, step
        found.append(q)
    assert found == sorted(found)
    assert [a + b for a, b in zip(found, reversed(found), strict=True)] == [32768] * len(found)
    assert found[len(found) // 2] == 16384


def test_wrong_number_of_inputs_is_named() -> None:
    module = loaded(source(INTEGER_MODELS["pump_int16"]))
    for count in (0, 5, 7):
        for function in ("log_odds", "probability", "decide", "check_inputs"):
            with pytest.raises(ValueError, match=f"^pump_int16 takes 6 inputs, found {count}$"):
                module[function]([1] * count)


# --- counts of readings ----------------------------------------------------------------------------------------------


def counted() -> list[tuple[str, str]]:
    return [
        (name, entry.name)
        for name, sealed in INTEGER_MODELS.items()
        for entry in sealed.inputs
        if entry.counts is not None
    ]


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_counts_carry_the_scaling_exactly(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    counts = loaded(source(sealed)).get("COUNTS", {})
    found = {key: tuple(Fraction(*pair) for pair in pairs) for key, pairs in counts.items()}
    assert found == {entry.name: unit_map(entry) for entry in sealed.inputs if entry.counts is not None}


@pytest.mark.parametrize(("name", "entry_name"), counted())
def test_count_is_the_nearest_one_of_exact_rationals(name: str, entry_name: str) -> None:
    sealed = INTEGER_MODELS[name]
    count = loaded(source(sealed))["count"]
    (entry,) = [entry for entry in sealed.inputs if entry.name == entry_name]
    gain, offset = unit_map(entry)
    rng = random.Random(3)
    ends = [float(offset + gain * int(end)) for end in (entry.low, entry.high)]
    readings = [rng.uniform(min(ends), max(ends)) for _ in range(200)]
    readings += [*ends, 0.0, *(float(offset + gain * (Fraction(k) + Fraction(1, 2))) for k in range(-3, 4))]
    for reading in readings:
        want = delivered(entry, Fraction(reading), sealed.arithmetic)
        if abs(want) < -missing_count(sealed):
            assert count(entry_name, reading) == want, reading


@pytest.mark.parametrize(("name", "entry_name"), counted())
def test_readings_beyond_all_counts_are_beyond_all_limits(name: str, entry_name: str) -> None:
    """On the same side, and never taken for a missing one, not even where the count would be that number."""
    sealed = INTEGER_MODELS[name]
    count = loaded(source(sealed))["count"]
    (entry,) = [entry for entry in sealed.inputs if entry.name == entry_name]
    gain, offset = unit_map(entry)
    missing = missing_count(sealed)
    below = math.copysign(INFINITY, -gain)
    for reading in (below, math.copysign(1e300, below), float(offset + gain * missing)):
        assert count(entry_name, reading) < entry.low
        assert count(entry_name, reading) != missing
    for reading in (-below, math.copysign(1e300, -below)):
        assert count(entry_name, reading) > entry.high
    assert count(entry_name, NAN) == missing


def test_count_breaks_ties_to_even() -> None:
    """1/8192 A a count, from 0: 1.5 counts are 2, 2.5 counts are 2. Whole numbers and NumPy's scalars are readings."""
    count = loaded(source(INTEGER_MODELS["counts_int16"]))["count"]
    halves = [count("shunt", k / 16384) for k in (-5, -3, -1, 1, 3, 5, 7)]
    assert halves == [-2, -2, 0, 0, 2, 2, 4]
    assert [count("shunt", one) for one in (1, np.float32(1.0), np.int16(1), Fraction(1))] == [8192] * 4
    assert [count("adc", reading) for reading in (-95.0, -94.9, 250)] == [0, 1, 3450]
    assert [count("falling", reading) for reading in (95.5, 95.39, -10)] == [0, 1, 959]


# --- what stands in the module ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_module_names_the_model(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    module = loaded(source(sealed))
    assert (module["MODEL_ID"], module["ARITHMETIC"]) == (sealed.model_id, sealed.arithmetic)
    assert module["CLASSES"] == sealed.classes
    assert module["THRESHOLDS"] == (sealed.decision.low, sealed.decision.high)
    assert module["LOG_ODDS_SHIFT"] == sealed.accumulator_shift
    assert (module["MISSING"], module["NO_PROBABILITY"]) == (missing_count(sealed), 0xFFFF)
    assert module["NO_LOG_ODDS"] == LEAST[sealed.arithmetic]
    assert module["INPUTS"] == tuple(
        (entry.name, delivered_unit(entry), entry.low, entry.high) for entry in sealed.inputs
    )
    assert sealed.model_id in module["__doc__"]
    assert "not a safety function" in module["__doc__"]
    for entry in sealed.inputs:
        assert delivered_unit(entry) in module["__doc__"]


def test_units_are_counts_in_the_words_of_the_plan() -> None:
    units = [unit for _, unit, _, _ in loaded(source(INTEGER_MODELS["counts_int16"]))["INPUTS"]]
    assert units == [
        "counts of 0.1 kPa from -95",
        "counts of 0.0001220703125 A from 0",
        "counts of -0.11 °C from 95.5",
        "",
    ]


def tokens(text: str) -> list[tokenize.TokenInfo]:
    return list(tokenize.generate_tokens(io.StringIO(text).readline))


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_no_step_of_the_module_is_in_floating_point(name: str) -> None:
    """No import, no literal of a float, no division; float() only where a reading becomes a count."""
    text = source(INTEGER_MODELS[name])
    tree = ast.parse(text, feature_version=(3, 8))
    for node in ast.walk(tree):
        assert not isinstance(node, ast.Import | ast.ImportFrom | ast.Div | ast.Pow)
        assert not (isinstance(node, ast.Constant) and isinstance(node.value, float | complex))
    using = [
        part for part in tree.body if "float" in {node.id for node in ast.walk(part) if isinstance(node, ast.Name)}
    ]
    assert [part.name for part in using if isinstance(part, ast.FunctionDef)] == (["count"] if using else [])
    assert len(using) <= 1


@pytest.mark.parametrize("name", INTEGER_MODELS)
def test_every_number_is_written_as_it_is(name: str) -> None:
    sealed = INTEGER_MODELS[name]
    numbers = {token.string for token in tokens(source(sealed)) if token.type == tokenize.NUMBER}
    for place, number in device_numbers(sealed):
        assert str(abs(number)) in numbers, place


class Blanked(ast.NodeTransformer):
    """Every string constant, the docstrings among them, becomes the same one."""

    def visit_Constant(self, node: ast.Constant) -> ast.Constant:
        return ast.Constant("") if isinstance(node.value, str) else node


def shape(text: str) -> tuple[str, int]:
    """The module's syntax tree without what its strings say, and the number of comments."""
    comments = sum(token.type == tokenize.COMMENT for token in tokens(text))
    return ast.dump(Blanked().visit(ast.parse(text))), comments


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_text_from_the_plan_stays_text(text: str) -> None:
    sealed = INTEGER_MODELS["counts_int16"]
    hostile = with_text(sealed, text)
    test = self_test_of(hostile, make_vectors(hostile))
    made, plain = (PYTHON.emit(model, test).decode("ascii") for model in (hostile, with_text(sealed, "plain")))
    assert made.isascii()
    assert not set(made) & {chr(code) for code in range(32) if code != 10}
    assert shape(made) == shape(plain)
    module = loaded(made)
    assert not {"PLANTED", "os"} & set(module)
    assert module["CLASSES"] == (text, text + "1")
    assert text.rstrip() in module["INPUTS"][0][1]
    assert text in module["__doc__"]
    assert module["self_test"]() == 0


def test_a_number_that_is_not_whole_has_no_literal() -> None:
    with pytest.raises(ValueError, match=r"no whole number is 1\.5"):
        lexical.integer(1.5)


def test_the_other_kind_s_logistic_function_is_refused() -> None:
    with pytest.raises(ValueError, match=r"^line has no exponential: its arithmetic is int16$"):
        exponential_of(line_model("int16"))
    with pytest.raises(ValueError, match=r"^line has no table: its arithmetic is binary32$"):
        table_of(line_model("binary32"))
