"""The generated Python module: bits, policies, what stands in it, and text from the plan.

Expected values: the reference scorer's bits (what an artefact must reproduce), hand calculation on models whose numbers
are short binary fractions, and mpmath for the logistic function.
"""

from __future__ import annotations

import ast
import io
import math
import re
import subprocess
import sys
import tokenize
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import mpmath
import numpy as np
import pytest
from line_models import HOSTILE, level_model, line_model, named_model, with_text
from python_modules import ARITHMETICS, INFINITY, MODELS, NAN, PYTHON, loaded, output, source, written

from export.targets.python import lexical
from export.vectors import expected, make_vectors, self_test_of
from runtime_min.arithmetic import raw_bits
from runtime_min.errors import ReleaseError
from runtime_min.names import delivered_unit
from runtime_min.validity import device_numbers

# Names that the module or Python itself uses, lower-case as a plan's are.
# fmt: off
TRICKY_NAMES = (
    "inputs", "round", "abs", "len", "range", "z", "e", "k", "r", "p", "s", "t", "u", "x", "x_x", "low", "high",
    "low_low", "nan", "infinity", "weight", "weights", "weights_x", "datum", "typical", "fault", "model_id",
    "inputs_x", "log_odds", "probability", "decide", "check_inputs", "self_test", "number", "numbers", "crc", "byte",
    "first", "rest", "print", "type", "object", "none", "value", "layout", "count", "bound", "c0", "c1", "threshold",
    "exp",
)
# fmt: on


# --- the same bits ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_module_gives_the_bits_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    vectors = make_vectors(sealed)
    runs = list(PYTHON.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], True))
    assert len(runs) == 3
    for run in runs:
        assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, 0)
        assert list(run.outputs) == [vector.expected for vector in vectors], run.what


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_quick_run_is_one_fresh_interpreter(arithmetic: str, tmp_path: Path) -> None:
    sealed = line_model(arithmetic)
    runs = list(PYTHON.run(written(sealed, tmp_path), sealed, [(4.0,)], False))
    assert [run.outputs[0].decision for run in runs] == [1]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_module_rounds_inputs_that_are_no_numbers_of_the_arithmetic(arithmetic: str) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    module = loaded(source(sealed))
    third = tuple(float(entry.low + (entry.high - entry.low) / 3) for entry in sealed.inputs)
    rows = [third, (1e39,) * 6, (-1e39,) * 6, (1e39, *third[1:]), (3.4028235677973366e38, *third[1:])]
    for row in rows:
        assert output(module, row, arithmetic) == expected(sealed, row)


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_names_of_inputs_never_meet_the_module_s_own(arithmetic: str, tmp_path: Path) -> None:
    sealed = named_model(arithmetic, list(TRICKY_NAMES))
    vectors = make_vectors(sealed)
    for run in PYTHON.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], False):
        assert (run.trouble, run.self_test) == (None, 0)
        assert list(run.outputs) == [vector.expected for vector in vectors]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_numpy_scalars_give_the_bits_of_floats(arithmetic: str) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    module = loaded(source(sealed))
    for vector in make_vectors(sealed)[:60]:
        row = tuple(float(np.float32(x)) for x in vector.inputs)
        for kind in (np.float32, np.float64):
            assert output(module, [kind(x) for x in row], arithmetic) == expected(sealed, row)
        assert output(module, np.array(row, np.float32), arithmetic) == expected(sealed, row)


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_whole_numbers_and_fractions_are_taken(arithmetic: str) -> None:
    module = loaded(source(line_model(arithmetic)))
    assert [module["log_odds"]([x]) for x in (4, True, Fraction(5, 2), (np.int16(6)))] == [1.0, -0.5, 0.25, 2.0]


# --- by hand ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(
    ("outside", "missing", "given", "want"),
    [
        # z = -1 + x / 2; a fault is None
        ("fault", "fault", (0.0, -0.0, 8.0, 5.0), (-1.0, -1.0, 3.0, 1.5)),
        ("fault", "fault", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (None, None, None, None, None)),
        ("clamp", "fault", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (-1.0, 3.0, 3.0, -1.0, None)),
        ("fault", "typical", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (None, None, None, None, 0.5)),
        ("clamp", "typical", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (-1.0, 3.0, 3.0, -1.0, 0.5)),
    ],
)
def test_policies_by_hand(
    arithmetic: str, outside: str, missing: str, given: tuple[float, ...], want: tuple[float | None, ...]
) -> None:
    module = loaded(source(line_model(arithmetic, outside=outside, missing=missing)))
    for x, z in zip(given, want, strict=True):
        if z is None:
            assert math.isnan(module["log_odds"]([x]))
            assert math.isnan(module["probability"]([x]))
            assert (module["check_inputs"]([x]), module["decide"]([x])) == (1, module["FAULT"])
        else:
            assert module["log_odds"]([x]) == z
            assert (module["check_inputs"]([x]), module["decide"]([x])) == (0, int(z >= 1.0))


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(("missing", "when_missing"), [("fault", None), ("typical", -3.0)])
def test_levels_by_hand(arithmetic: str, missing: str, when_missing: float | None) -> None:
    module = loaded(source(level_model(arithmetic, missing=missing)))
    right = [(0.0, -1.0), (-0.0, -1.0), (1.0, -0.75), (2.0, -3.0), (NAN, when_missing)]
    for x, z in [*right, *((wrong, None) for wrong in (0.5, 1.5, 3.0, -1.0, INFINITY, -INFINITY))]:
        found = module["log_odds"]([x])
        assert found == z if z is not None else math.isnan(found)
        assert module["check_inputs"]([x]) == int(z is None)
        assert module["decide"]([x]) == (-2 if z is None else int(z >= -1.0))


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_between_two_thresholds_is_no_call(arithmetic: str) -> None:
    sealed = line_model(arithmetic)
    module = loaded(source(replace(sealed, decision=replace(sealed.decision, low=0.0, high=2.0))))
    assert [module["decide"]([x]) for x in (1.5, 2.0, 5.5, 6.0, NAN)] == [0, -1, -1, 1, -2]
    assert (module["NO_CALL"], module["FAULT"], module["THRESHOLDS"]) == (-1, -2, (0.0, 2.0))


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_zero_log_odds_keep_their_sign_and_give_one_half(arithmetic: str) -> None:
    """IEEE 754-2019, 6.3: +0 + -0 is +0, so that log-odds from an intercept of 0 are +0."""
    sealed = replace(line_model(arithmetic), intercepts=(0.0,))
    module = loaded(source(sealed))
    for x in (0.0, -0.0):
        assert raw_bits(module["log_odds"]([x]), arithmetic) == 0
        assert module["probability"]([x]) == 0.5


@pytest.mark.parametrize(("arithmetic", "digits", "ulps"), [("binary64", 53, 3.0), ("binary32", 24, 2.41)])
def test_probability_is_the_logistic_function_to_a_few_ulps(arithmetic: str, digits: int, ulps: float) -> None:
    """Against mpmath at 60 digits. Bounds in ulps: derived (binary64), found by trying every argument (binary32)."""
    mpmath.mp.dps = 60
    sealed = line_model(arithmetic, outside="clamp")
    wide = replace(sealed, inputs=(replace(sealed.inputs[0], low=-150.0, high=150.0),))
    module = loaded(source(wide))
    for step in range(-600, 601):
        x = step / 4
        z = module["log_odds"]([x])
        exact = 1 / (1 + mpmath.exp(-mpmath.mpf(z)))
        ulp = mpmath.mpf(2) ** (mpmath.floor(mpmath.log(exact, 2)) + 1 - digits)
        assert abs(mpmath.mpf(module["probability"]([x])) - exact) <= ulps * ulp, z


def test_wrong_number_of_inputs_is_named() -> None:
    module = loaded(source(MODELS["pump_binary32"]))
    for count in (0, 5, 7):
        for function in ("log_odds", "probability", "decide", "check_inputs"):
            with pytest.raises(ValueError, match=f"^pump_binary32 takes 6 inputs, found {count}$"):
                module[function]([1.0] * count)


# --- what stands in the module ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_module_names_the_model(name: str) -> None:
    sealed = MODELS[name]
    module = loaded(source(sealed))
    assert module["MODEL_ID"] == sealed.model_id
    assert module["ARITHMETIC"] == sealed.arithmetic
    assert module["CLASSES"] == sealed.classes
    assert module["THRESHOLDS"] == (sealed.decision.low, sealed.decision.high)
    named = tuple((entry.name, delivered_unit(entry), entry.low, entry.high) for entry in sealed.inputs)
    assert module["INPUTS"] == named
    assert sealed.model_id in module["__doc__"]
    assert "not a safety function" in module["__doc__"]
    for entry in sealed.inputs:
        assert entry.unit in module["__doc__"]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_units_say_what_is_delivered(arithmetic: str) -> None:
    """An origin and counts, in the words of the plan: 101325 Pa; 0.1 kPa a count, from -95."""
    text = source(MODELS[f"mixed_{arithmetic}"])
    units = [unit for _, unit, _, _ in loaded(text)["INPUTS"]]
    assert units == ["Pa above 101325", "counts of 0.1 kPa from -95", "m\xb3/h", ""]
    assert re.search(r"^WEIGHT_ADC = \S+  # per count$", text, re.MULTILINE)
    assert re.search(r"^WEIGHT_PRESSURE = \S+  # per Pa$", text, re.MULTILINE)


@pytest.mark.parametrize("name", [name for name in MODELS if name.startswith(("mixed", "undecided"))])
def test_no_call_is_decided_between_the_thresholds(name: str) -> None:
    """Each decision where the log-odds that the module itself gives lie; "undecided" reaches no class 0."""
    sealed = MODELS[name]
    module = loaded(source(sealed))
    low, high = module["THRESHOLDS"]
    assert low < high
    seen = set()
    for vector in make_vectors(sealed):
        z = module["log_odds"](vector.inputs)
        right = -2 if math.isnan(z) else 1 if z >= high else 0 if z < low else -1
        assert module["decide"](vector.inputs) == right
        seen.add(right)
    assert seen >= {-2, -1, 1}


@pytest.mark.parametrize("name", MODELS)
def test_every_number_is_written_in_its_shortest_decimal(name: str) -> None:
    sealed = MODELS[name]
    numbers = {token.string for token in tokens(source(sealed)) if token.type == tokenize.NUMBER}
    for place, number in device_numbers(sealed):
        assert repr(abs(number)) in numbers, place


@pytest.mark.parametrize("name", MODELS)
def test_module_imports_math_and_struct_alone_and_is_python_3_8(name: str) -> None:
    tree = ast.parse(source(MODELS[name]), feature_version=(3, 8))
    imports = [node for node in ast.walk(tree) if isinstance(node, ast.Import | ast.ImportFrom)]
    assert [ast.unparse(node) for node in imports] == ["import math", "import struct"]


def test_module_carries_no_date_and_no_licence() -> None:
    text = source(MODELS["pump_binary32"])
    assert not re.search(r"\b20[2-9][0-9]\b|licen[cs]e\b|copyright|warrant", text, re.IGNORECASE)
    assert text == source(MODELS["pump_binary32"])


@pytest.mark.parametrize("name", ["pump_binary32", "pump_binary64", "many_binary32"])
def test_module_compiles_with_warnings_as_errors(name: str, tmp_path: Path) -> None:
    path = written(MODELS[name], tmp_path)
    program = "import sys, pathlib; exec(compile(pathlib.Path(sys.argv[1]).read_text(), 'module', 'exec'))"
    command = [sys.executable, "-I", "-W", "error", "-c", program, str(path)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")


# --- text from the plan ----------------------------------------------------------------------------------------------


def tokens(text: str) -> list[tokenize.TokenInfo]:
    return list(tokenize.generate_tokens(io.StringIO(text).readline))


class Blanked(ast.NodeTransformer):
    """Every string constant, the docstrings among them, becomes the same one."""

    def visit_Constant(self, node: ast.Constant) -> ast.Constant:
        return ast.Constant("") if isinstance(node.value, str) else node


def shape(text: str) -> tuple[str, int]:
    """The module's syntax tree without what its strings say, and the number of comments."""
    comments = sum(token.type == tokenize.COMMENT for token in tokens(text))
    return ast.dump(Blanked().visit(ast.parse(text))), comments


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_text_from_the_plan_stays_text(text: str, arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    hostile = with_text(sealed, text)
    test = self_test_of(hostile, make_vectors(hostile))
    made, plain = (PYTHON.emit(model, test).decode("ascii") for model in (hostile, with_text(sealed, "plain")))
    assert made.isascii()
    assert not set(made) & {chr(code) for code in range(32) if code != 10}
    assert shape(made) == shape(plain)
    module = loaded(made)
    assert not {"PLANTED", "os"} & set(module)
    assert module["CLASSES"] == (text, text + "1")
    assert module["INPUTS"][0][1] == text
    assert text in module["__doc__"]
    for run in PYTHON.run(written(hostile, tmp_path, made), hostile, [], False):
        assert (run.trouble, run.self_test, run.model_id) == (None, 0, hostile.model_id)


def test_numbers_that_are_not_finite_have_no_literal() -> None:
    for value in (NAN, INFINITY):
        with pytest.raises(ValueError, match="no literal stands for"):
            lexical.number(value)


def test_a_sum_that_could_leave_binary32_is_refused() -> None:
    sealed = line_model("binary32")
    term = replace(sealed.terms[0], weights=((2.0**125,),))
    with pytest.raises(ReleaseError) as caught:
        source(replace(sealed, terms=(term,)))
    assert str(caught.value) == (
        "line.py: a step of the log-odds can be too large for binary32 within the ranges; "
        "narrow the ranges, or choose binary64"
    )
