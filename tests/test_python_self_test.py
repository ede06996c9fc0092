"""What the generated Python module finds by itself, and what the runner says of a broken one.

Expected values: the codes of `export.targets`, and sentences.
"""

from __future__ import annotations

import ast
import math
import re
import struct
import types
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from line_models import line_model
from python_modules import ARITHMETICS, INFINITY, INTEGER_MODELS, INTEGERS, MODELS, PYTHON, loaded, source, written

from export.targets import (
    SELF_TEST_ROUNDING,
    SELF_TEST_SUBNORMALS,
    SELF_TEST_TABLES,
    SELF_TEST_VECTOR,
)
from export.targets.python import runner
from export.vectors import make_vectors, next_to, self_test_of
from runtime_min.device_numbers import device_numbers
from runtime_min.model import SealedModel

# --- the self-test ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["pump_binary32", "pump_binary64", "levels_only_binary32", "one_input_binary64"])
def test_self_test_finds_every_number_off_by_one_bit(name: str) -> None:
    """Every literal that stands once as an assignment or in a table of weights, moved to its neighbour."""
    sealed = MODELS[name]
    text = source(sealed)
    tried = 0
    for found in re.finditer(r"(?m)^(?:[A-Z_0-9]+ = |    )(-?[0-9][0-9.e+-]*)(?=$|,?  #)", text):
        number = float(found[1])
        other = next_to(number, INFINITY, sealed.arithmetic)
        planted = text[: found.start(1)] + repr(other) + text[found.end(1) :]
        if found[0].startswith(("NO_CALL", "FAULT")):
            continue
        tried += 1
        assert loaded(planted)["self_test"]() == SELF_TEST_TABLES, found[0]
    numbers = len(list(device_numbers(sealed))) - len(sealed.exponential.coefficients) - 2
    assert tried == numbers


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(
    ("right", "wrong"),
    [
        ("if z >= THRESHOLD_HIGH", "if z > THRESHOLD_HIGH"),
        ("t = -abs(z)", "t = -abs(z) - 1e-3"),
        ("z + WEIGHTS_IMPELLER[int(x_impeller)]", "z - WEIGHTS_IMPELLER[int(x_impeller)]"),
        ("x_suction <= HIGH_SUCTION:\n        return 1", "x_suction <= HIGH_FLOW:\n        return 1"),
    ],
)
def test_self_test_finds_a_changed_step(arithmetic: str, right: str, wrong: str) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    text = PYTHON.emit(sealed, replace(self_test_of(sealed, vectors := make_vectors(sealed)), vectors=vectors)).decode()
    assert right in text
    assert loaded(text)["self_test"]() == 0
    assert loaded(text.replace(right, wrong))["self_test"]() >= SELF_TEST_VECTOR


def test_self_test_names_the_vector() -> None:
    sealed = MODELS["pump_binary32"]
    test = self_test_of(sealed, make_vectors(sealed))
    for position, vector in enumerate(test.vectors):
        other = replace(vector, expected=replace(vector.expected, decision=vector.expected.decision + 1))
        planted = (*test.vectors[:position], other, *test.vectors[position + 1 :])
        module = loaded(PYTHON.emit(sealed, replace(test, vectors=planted)).decode())
        assert module["self_test"]() == SELF_TEST_VECTOR + position


class Short(float):
    """A float of 22 significant bits, cut: what a build with 30-bit boxed floats keeps of binary32."""

    def __radd__(self, other: float) -> float:
        return Short(cut(float(other) + float(self), 22))

    def __truediv__(self, other: float) -> float:
        return Short(float(self) / float(other))


def cut(x: float, bits: int) -> float:
    fraction, exponent = math.frexp(x)
    return math.ldexp(math.floor(math.ldexp(fraction, bits)), exponent - bits)


def standing_in(**names: Any) -> Any:
    """A module with these names."""
    made = types.ModuleType("stand_in")
    made.__dict__.update(names)
    return made


def with_modules(text: str, **modules: Any) -> dict[str, Any]:
    """The generated module with other modules than Python's `math` and `struct`."""
    names: dict[str, Any] = dict(modules)
    exec(compile(text.replace("import math\nimport struct\n", ""), "generated.py", "exec"), names)
    return names


def test_self_test_finds_shorter_floats() -> None:
    text = source(line_model("binary64"))
    short = standing_in(ldexp=lambda x, k: Short(math.ldexp(x, k)))
    assert with_modules(text, math=math, struct=struct)["self_test"]() == 0
    assert with_modules(text, math=short, struct=struct)["self_test"]() == SELF_TEST_ROUNDING


@pytest.mark.parametrize(
    ("change", "code"),
    [
        (lambda x: x, 0),
        (lambda x: cut(x, 22), SELF_TEST_ROUNDING),  # 30-bit boxed floats
        (lambda x: cut(x, 24), SELF_TEST_ROUNDING),  # towards zero
        (lambda x: -cut(-x, 24), SELF_TEST_ROUNDING),  # upwards
        (lambda x: 0.0 if abs(x) < 2.0**-126 else x, SELF_TEST_SUBNORMALS),
    ],
)
def test_self_test_finds_wrong_rounding_of_binary32(change: Any, code: int) -> None:
    text = source(line_model("binary32"))
    other = standing_in(pack=lambda layout, *xs: struct.pack(layout, *map(change, xs)), unpack=struct.unpack)
    assert with_modules(text, math=math, struct=other)["self_test"]() == code


# --- in integers -----------------------------------------------------------------------------------------------------


DEVICE_NUMBERS = re.compile("(LOW|HIGH|TYPICAL|DATUM|SHIFT|WEIGHTS?)_.*|INTERCEPT|THRESHOLDS|DROP|STEP|NODES")


@pytest.mark.parametrize("name", ["pump_int16", "pump_int32", "counts_int16", "levels_only_int32", "wide_int16"])
def test_self_test_finds_every_integer_off_by_one(name: str) -> None:
    """Every literal of a device number's assignment, one more and one less in size."""
    sealed = INTEGER_MODELS[name]
    lines = source(sealed).splitlines(keepends=True)
    tried = 0
    for part in ast.parse("".join(lines)).body:
        if not isinstance(part, ast.Assign) or not DEVICE_NUMBERS.fullmatch(ast.unparse(part.targets[0])):
            continue
        for node in ast.walk(part.value):
            if not isinstance(node, ast.Constant):
                continue
            line, size = lines[node.lineno - 1], int(node.value)
            for other in (size - 1, size + 1):
                planted = line[: node.col_offset] + str(other) + line[node.end_col_offset :]
                text = "".join([*lines[: node.lineno - 1], planted, *lines[node.lineno :]])
                assert loaded(text)["self_test"]() == SELF_TEST_TABLES, planted
            tried += 1
    assert tried == len(list(device_numbers(sealed)))


def all_vectors(sealed: SealedModel) -> str:
    """The module with every vector in its self-test."""
    vectors = make_vectors(sealed)
    return PYTHON.emit(sealed, replace(self_test_of(sealed, vectors), vectors=vectors)).decode("ascii")


@pytest.mark.parametrize("arithmetic", INTEGERS)
@pytest.mark.parametrize(
    ("right", "wrong"),
    [
        ("<< SHIFT_FLOW", "<< SHIFT_FLOW + 1"),
        ("(n_flow - DATUM_FLOW)", "(n_flow + DATUM_FLOW)"),
        ("* (a & REST) + HALF >> STEP", "* (a & REST) >> STEP"),  # downwards instead of to the nearest
        ("* (a & REST) + HALF >> STEP", "* (a & REST) + REST >> STEP"),  # upwards
        ("a = abs(z) >> DROP", "a = abs(z >> DROP)"),  # a shift right of a negative number rounds away from zero
        ("NODES[i + 1] - NODES[i]", "NODES[i] - NODES[i - 1]"),
        ("WEIGHTS_IMPELLER[n_impeller]", "WEIGHTS_IMPELLER[-n_impeller]"),
        ("else 32768 - q", "else 32767 - q"),
        ("x_vibration == MISSING:", "x_vibration == 0:"),
    ],
)
def test_self_test_finds_a_changed_step_in_integers(arithmetic: str, right: str, wrong: str) -> None:
    text = all_vectors(INTEGER_MODELS[f"pump_{arithmetic}"])
    assert right in text
    assert loaded(text)["self_test"]() == 0
    assert loaded(text.replace(right, wrong))["self_test"]() >= SELF_TEST_VECTOR


@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_self_test_finds_a_threshold_that_no_longer_counts_as_class_1(arithmetic: str) -> None:
    """A row whose log-odds are the threshold itself: x = 4."""
    text = all_vectors(line_model(arithmetic))
    assert loaded(text)["self_test"]() == 0
    assert loaded(text.replace("if z >= THRESHOLD_HIGH", "if z > THRESHOLD_HIGH"))["self_test"]() >= SELF_TEST_VECTOR


@pytest.mark.parametrize("arithmetic", INTEGERS)
@pytest.mark.parametrize(
    "change",
    [
        ("node 0", r"NODES = \(\s+16384", "NODES = (16383"),
        ("node 8", "28873", "28874"),
        (
            "the last bit of a weight",
            r"WEIGHT_SUCTION = (-?\d+)",
            lambda found: f"WEIGHT_SUCTION = {int(found[1]) ^ 1}",
        ),
        ("a shift", r"SHIFT_FLOW = (\d+)", lambda found: f"SHIFT_FLOW = {int(found[1]) - 1}"),
        ("a level's sign", r"    (-?\d+),  # open", lambda found: f"    {-int(found[1])},  # open"),
        ("rounding", r"\+ HALF >> STEP", ">> STEP"),
        ("16 bits", "z \\+= WEIGHT_SUCTION", "z = ((z + 32768) & 0xFFFF) - 32768\n    z += WEIGHT_SUCTION"),
    ],
    ids=lambda change: change[0],
)
def test_running_alone_finds_a_planted_mistake_in_integers(arithmetic: str, change: Any, tmp_path: Path) -> None:
    """With a self-test that finds nothing."""
    sealed = INTEGER_MODELS[f"pump_{arithmetic}"]
    vectors = make_vectors(sealed)
    _, right, wrong = change
    planted, count = re.subn(right, wrong, source(sealed))
    assert count == 1
    planted += "\n\ndef self_test():\n    return 0\n"
    (run,) = PYTHON.run(written(sealed, tmp_path, planted), sealed, [vector.inputs for vector in vectors], False)
    assert (run.trouble, run.self_test) == (None, 0)
    assert list(run.outputs or ()) != [vector.expected for vector in vectors]


@pytest.mark.parametrize(
    ("planted", "trouble"),
    [
        ("def log_odds(inputs): return 2**31", "printed what is no output: row 1: 2147483648 is beyond 32 bits"),
        ("def probability(inputs): return 1.0", "printed what is no output: row 1: 1.0 is no int"),
        ("def probability(inputs): return True", "printed what is no output: row 1: True is no int"),
    ],
)
def test_runner_finds_an_output_that_is_no_number_of_int16(planted: str, trouble: str, tmp_path: Path) -> None:
    sealed = line_model("int16")
    text = source(sealed) + f"\n\n{planted}\n\n\ndef self_test(): return 0\n"
    (run,) = PYTHON.run(written(sealed, tmp_path, text), sealed, [(4,)], False)
    assert (run.ran, run.trouble, run.outputs) == (True, trouble, ())


# --- the runner ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("planted", "trouble"),
    [
        ("import nothing_of_that_name\n", "ModuleNotFoundError: No module named 'nothing_of_that_name'"),
        ("print('hello')\n", "printed what is no output: "),
        ("raise SystemExit(3)\n", "ended with status 3"),
        ("raise SystemExit(0)\n", "printed what is no output: "),
        ("raise ValueError('\\x1b[2J\\u202e')\n", "ValueError: ?[2J?"),
        ("while True: pass\n", "did not finish (stopped after 2 s)"),
        ("def log_odds(inputs): return 0.1\n", "printed what is no output: row 1: 0.1 is not a binary32 number"),
        ("def decide(inputs): return None\n", "TypeError: int() argument must be"),
    ],
)
def test_runner_says_what_broke(planted: str, trouble: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(runner, "TIME_LIMIT", 2.0)
    sealed = line_model("binary32")
    (run,) = PYTHON.run(written(sealed, tmp_path, source(sealed) + planted), sealed, [(4.0,)], False)
    assert run.ran
    assert run.trouble is not None
    assert run.trouble.startswith(trouble)
    assert run.outputs == ()


def test_runner_finds_a_truncated_file(tmp_path: Path) -> None:
    sealed = line_model("binary32")
    text = source(sealed)
    (run,) = PYTHON.run(written(sealed, tmp_path, text[: len(text) * 2 // 3]), sealed, [(4.0,)], False)
    assert run.ran
    assert run.trouble
    assert run.trouble.startswith(("SyntaxError", "AttributeError", "IndentationError"))


def test_runner_reads_id_and_self_test_from_the_module(tmp_path: Path) -> None:
    sealed = line_model("binary32")
    text = source(sealed).replace(f'MODEL_ID = "{sealed.model_id}"', 'MODEL_ID = "another"')
    text += "def self_test(): return 7\n"
    (run,) = PYTHON.run(written(sealed, tmp_path, text), sealed, [], False)
    assert (run.model_id, run.self_test, run.trouble) == ("another", 7, None)


def test_runner_leaves_nothing_beside_the_artefact(tmp_path: Path) -> None:
    sealed = line_model("binary64")
    path = written(sealed, tmp_path)
    list(PYTHON.run(path, sealed, [(1.0,)], True))
    assert list(tmp_path.iterdir()) == [path]
