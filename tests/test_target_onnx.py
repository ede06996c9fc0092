"""The ONNX graph: bits in ONNX Runtime whatever its optimiser does, policies, metadata, and the runner that checks it.

Expected values: the reference scorer's bits (what an artefact must reproduce), hand calculation on models whose numbers
are short binary fractions, the ONNX standard, and mpmath for the logistic function.
"""

from __future__ import annotations

import importlib.util
import json
import math
import struct
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import mpmath
import numpy as np
import onnx
import onnxruntime
import pytest
from line_models import HOSTILE, level_model, line_model, named_model, with_text
from models import sample_extended_models, sample_sealed_models

from export.targets import SELF_TEST_TABLES, TARGETS, Output, SelfTest
from export.targets.onnx import runner
from export.vectors import expected, make_vectors
from runtime_min.arithmetic import raw_bits
from runtime_min.model import SealedModel
from runtime_min.names import delivered_unit

MODELS = {name: sealed for name, (_, sealed) in {**sample_sealed_models(), **sample_extended_models()}.items()}
ARITHMETICS = ("binary64", "binary32")
ONNX = TARGETS["onnx"]
NAN, INFINITY = math.nan, math.inf
LEVELS = (onnxruntime.GraphOptimizationLevel.ORT_DISABLE_ALL, onnxruntime.GraphOptimizationLevel.ORT_ENABLE_ALL)
NO_SELF_TEST = SelfTest((), 0)

# Names that the graph itself uses.
TRICKY_NAMES = ["inputs", "log_odds", "probability", "decision", "valid", "nan", "zero", "one", "exp", "sum"]
TRICKY_NAMES += ["logistic", "fault", "intercept", "first", "input", "any_fault", "exp_t", "model_id", "threshold"]

Change = Callable[[onnx.ModelProto], None]


def emitted(sealed: SealedModel) -> bytes:
    return ONNX.emit(sealed, NO_SELF_TEST)


def scored(data: bytes, rows: Sequence[Sequence[float]], level: Any = LEVELS[0]) -> list[Any]:
    """log_odds, probability, decision of rows, straight from ONNX Runtime."""
    options = onnxruntime.SessionOptions()
    options.graph_optimization_level = level
    options.log_severity_level = 4
    session = onnxruntime.InferenceSession(data, options, providers=["CPUExecutionProvider"])
    (given,) = session.get_inputs()
    kind = {"tensor(float)": np.float32, "tensor(double)": np.float64}[given.type]
    table = np.array(rows, dtype=kind).reshape(len(rows), given.shape[1])
    results: list[Any] = session.run(["log_odds", "probability", "decision"], {"inputs": table})
    return results


def written(sealed: SealedModel, folder: Path, change: Change | None = None) -> Path:
    """The artefact as a file, changed where that is asked for."""
    path = folder / ONNX.file(sealed)
    data = emitted(sealed)
    if change is not None:
        model = onnx.load_model_from_string(data)
        change(model)
        data = model.SerializeToString(deterministic=True)
    path.write_bytes(data)
    return path


def said(output: Output) -> Output:
    """An output without the fault's position, of which the graph says nothing."""
    return replace(output, fault=-1)


# --- the same bits ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_graph_gives_the_bits_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    vectors = make_vectors(sealed)
    runs = list(ONNX.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], True))
    assert [run.what.split(", ", 1)[1].rsplit(", ", 1)[0] for run in runs] == [
        "optimisation off",
        "optimisation on",
        "optimisation basic",
        "optimisation extended",
        "optimisation on, 2 threads",
        "optimisation off, one row at a time",
        "optimisation on, one row at a time",
    ]
    for run in runs:
        assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, None)
        assert list(run.outputs) == [said(vector.expected) for vector in vectors], run.what


def test_quick_run_has_the_optimiser_off_and_on(tmp_path: Path) -> None:
    sealed = line_model("binary32")
    runs = list(ONNX.run(written(sealed, tmp_path), sealed, [(4.0,)], False))
    assert [run.what.split(", ")[1] for run in runs] == ["optimisation off", "optimisation on"]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize("level", LEVELS, ids=["off", "on"])
@pytest.mark.parametrize("count", [0, 1, 2, 1000])
def test_batches_of_none_one_and_many(arithmetic: str, level: Any, count: int) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    vectors = make_vectors(sealed)
    rows = [vectors[row % len(vectors)].inputs for row in range(count)]
    log_odds, probability, decision = scored(emitted(sealed), rows, level)
    real = np.float32 if arithmetic == "binary32" else np.float64
    assert (log_odds.dtype, probability.dtype, decision.dtype) == (real, real, np.int64)
    assert log_odds.shape == probability.shape == decision.shape == (count,)
    assert decision.tolist() == [vectors[row % len(vectors)].expected.decision for row in range(count)]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_names_of_inputs_never_meet_the_graph_s_own(arithmetic: str, tmp_path: Path) -> None:
    sealed = named_model(arithmetic, TRICKY_NAMES)
    vectors = make_vectors(sealed)
    for run in ONNX.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], False):
        assert run.trouble is None
        assert list(run.outputs) == [said(vector.expected) for vector in vectors]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize("level", LEVELS, ids=["off", "on"])
def test_optimiser_cannot_drop_an_intercept_of_zero(arithmetic: str, level: Any) -> None:
    """IEEE 754-2019, 6.3: +0 + -0 is +0; without the addition log-odds would be -0."""
    sealed = replace(line_model(arithmetic), intercepts=(0.0,))
    log_odds, probability, _ = scored(emitted(sealed), [[-0.0], [0.0]], level)
    assert [raw_bits(float(z), arithmetic) for z in log_odds] == [0, 0]
    assert probability.tolist() == [0.5, 0.5]


# --- by hand ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(
    ("outside", "missing", "given", "want"),
    [
        # z = -1 + x / 2; a fault is NaN
        ("fault", "fault", (0.0, -0.0, 8.0, 5.0), (-1.0, -1.0, 3.0, 1.5)),
        ("fault", "fault", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (NAN, NAN, NAN, NAN, NAN)),
        ("clamp", "fault", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (-1.0, 3.0, 3.0, -1.0, NAN)),
        ("fault", "typical", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (NAN, NAN, NAN, NAN, 0.5)),
        ("clamp", "typical", (-1.0, 9.0, INFINITY, -INFINITY, NAN), (-1.0, 3.0, 3.0, -1.0, 0.5)),
    ],
)
def test_policies_by_hand(
    arithmetic: str, outside: str, missing: str, given: tuple[float, ...], want: tuple[float, ...]
) -> None:
    data = emitted(line_model(arithmetic, outside=outside, missing=missing))
    for level in LEVELS:
        log_odds, probability, decision = scored(data, [[x] for x in given], level)
        np.testing.assert_array_equal(log_odds, np.array(want))
        np.testing.assert_array_equal(np.isnan(probability), np.isnan(want))
        assert decision.tolist() == [-2 if math.isnan(z) else int(z >= 1.0) for z in want]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(("missing", "when_missing"), [("fault", NAN), ("typical", -3.0)])
def test_levels_by_hand(arithmetic: str, missing: str, when_missing: float) -> None:
    right = [(0.0, -1.0), (-0.0, -1.0), (1.0, -0.75), (2.0, -3.0), (NAN, when_missing)]
    pairs = [*right, *((wrong, NAN) for wrong in (0.5, 1.5, 3.0, -1.0, 1e30, INFINITY, -INFINITY))]
    data = emitted(level_model(arithmetic, missing=missing))
    for level in LEVELS:
        log_odds, _, decision = scored(data, [[x] for x, _ in pairs], level)
        np.testing.assert_array_equal(log_odds, np.array([z for _, z in pairs]))
        assert decision.tolist() == [-2 if math.isnan(z) else int(z >= -1.0) for _, z in pairs]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_between_two_thresholds_is_no_call(arithmetic: str) -> None:
    sealed = line_model(arithmetic)
    data = emitted(replace(sealed, decision=replace(sealed.decision, low=0.0, high=2.0)))
    assert scored(data, [[1.5], [2.0], [5.5], [6.0], [NAN]])[2].tolist() == [0, -1, -1, 1, -2]


@pytest.mark.parametrize(("arithmetic", "bits"), [("binary32", 0x7FC00000), ("binary64", 0x7FF8000000000000)])
def test_a_fault_gives_the_quiet_nan_itself(arithmetic: str, bits: int) -> None:
    log_odds, probability, _ = scored(emitted(line_model(arithmetic)), [[NAN], [INFINITY], [-NAN]])
    layout = "<I" if arithmetic == "binary32" else "<Q"
    size = struct.calcsize(layout)
    for result in (log_odds, probability):
        assert [struct.unpack_from(layout, result.tobytes(), size * row)[0] for row in range(3)] == [bits] * 3


@pytest.mark.parametrize(("arithmetic", "digits", "ulps"), [("binary64", 53, 3.0), ("binary32", 24, 2.41)])
def test_probability_is_the_logistic_function_to_a_few_ulps(arithmetic: str, digits: int, ulps: float) -> None:
    """Against mpmath at 60 digits. Bounds in ulps: derived (binary64), found by trying every argument (binary32)."""
    mpmath.mp.dps = 60
    sealed = line_model(arithmetic, outside="clamp")
    wide = replace(sealed, inputs=(replace(sealed.inputs[0], low=-150.0, high=150.0),))
    log_odds, probability, _ = scored(emitted(wide), [[step / 4] for step in range(-600, 601)], LEVELS[1])
    for z, p in zip(log_odds.tolist(), probability.tolist(), strict=True):
        exact = 1 / (1 + mpmath.exp(-mpmath.mpf(z)))
        ulp = mpmath.mpf(2) ** (mpmath.floor(mpmath.log(exact, 2)) + 1 - digits)
        assert abs(mpmath.mpf(p) - exact) <= ulps * ulp, z


@pytest.mark.parametrize(("arithmetic", "least"), [("binary64", -708.0), ("binary32", -87.0)])
def test_exponential_reaches_its_floor_and_is_zero_below(arithmetic: str, least: float) -> None:
    """The last power of two of the table is used on the floor; one step below, probability is exactly 0 or 1."""
    sealed = line_model(arithmetic, outside="clamp")
    wide = replace(sealed, inputs=(replace(sealed.inputs[0], low=-2048.0, high=2048.0),))
    rows = [[2 * (z + 1)] for z in (least, least - 0.5, -least, -least + 0.5)]
    for level in LEVELS:
        log_odds, probability, _ = scored(emitted(wide), rows, level)
        assert log_odds.tolist() == [least, least - 0.5, -least, -least + 0.5]
        want = [expected(wide, row).probability[0] for row in rows]
        assert [raw_bits(float(p), arithmetic) for p in probability] == want
        assert (probability[0] > 0.0, *probability[1:].tolist()) == (True, 0.0, 1.0, 1.0)


# --- what stands in the file -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_graph_is_valid_standard_onnx(name: str) -> None:
    """IR version 8 and opset 18; no operator whose sums or functions a runtime may compute as it likes."""
    model = onnx.load_model_from_string(emitted(MODELS[name]))
    onnx.checker.check_model(model, full_check=True)
    assert model.ir_version == 8
    assert [(entry.domain, entry.version) for entry in model.opset_import] == [("", 18)]
    assert {node.domain for node in model.graph.node} == {""}
    used = {node.op_type for node in model.graph.node}
    assert not used & {"MatMul", "Gemm", "Exp", "Sigmoid", "Softmax", "Pow", "ReduceSum", "Sum", "Clip"}
    names = [output for node in model.graph.node for output in node.output]
    assert len(set(names)) == len(names)
    assert {tensor.name for tensor in model.graph.initializer} <= {x for node in model.graph.node for x in node.input}
    assert not model.functions


@pytest.mark.parametrize("name", MODELS)
def test_metadata_names_the_model(name: str) -> None:
    sealed = MODELS[name]
    model = onnx.load_model_from_string(emitted(sealed))
    metadata = {entry.key: entry.value for entry in model.metadata_props}
    assert metadata["model_id"] == sealed.model_id
    assert metadata["arithmetic"] == sealed.arithmetic
    assert json.loads(metadata["classes"]) == list(sealed.classes)
    assert json.loads(metadata["thresholds"]) == [sealed.decision.low, sealed.decision.high]
    inputs = json.loads(metadata["inputs"])
    assert [entry["name"] for entry in inputs] == [entry.name for entry in sealed.inputs]
    assert [entry["unit"] for entry in inputs] == [delivered_unit(entry) for entry in sealed.inputs]
    assert "not a safety function" in metadata["caution"]
    assert sealed.model_id in model.doc_string


def test_the_same_model_gives_the_same_bytes() -> None:
    assert emitted(MODELS["many_binary32"]) == emitted(MODELS["many_binary32"])


@pytest.mark.parametrize("text", [*HOSTILE, "\ud800 half a pair"], ids=range(len(HOSTILE) + 1))
def test_text_from_the_plan_stays_text(text: str) -> None:
    sealed = MODELS["pump_binary32"]
    if text.isprintable() or "\ud800" not in text:
        hostile = with_text(sealed, text)
    else:  # no model id stands for such a text, but no file may break on it either
        hostile = replace(sealed, about=replace(sealed.about, purpose=text, tool=text))
    data = emitted(hostile)
    model = onnx.load_model_from_string(data)
    onnx.checker.check_model(model, full_check=True)
    metadata = {entry.key: entry.value for entry in model.metadata_props}
    assert all(value.isascii() and value.isprintable() for value in metadata.values())
    assert json.loads(metadata["purpose"]) == text
    plain = onnx.load_model_from_string(emitted(sealed))
    assert [node.SerializeToString() for node in model.graph.node] == [
        node.SerializeToString() for node in plain.graph.node
    ]


def test_another_number_of_columns_is_refused() -> None:
    session = onnxruntime.InferenceSession(emitted(MODELS["pump_binary32"]), providers=["CPUExecutionProvider"])
    for count in (5, 7):
        with pytest.raises(Exception, match=f"Got: {count} Expected: 6"):
            session.run(None, {"inputs": np.zeros((2, count), np.float32)})


# --- the runner ------------------------------------------------------------------------------------------------------


def constant(model: onnx.ModelProto, name: str) -> onnx.TensorProto:
    (found,) = [tensor for tensor in model.graph.initializer if tensor.name == name]
    return found


def moved(name: str, place: int = 0) -> Change:
    """One number of a constant, moved to its neighbour."""

    def change(model: onnx.ModelProto) -> None:
        tensor = constant(model, name)
        values = np.frombuffer(tensor.raw_data, np.float32).copy()
        values[place] = np.nextafter(values[place], np.float32(INFINITY))
        tensor.raw_data = values.tobytes()

    return change


def operator(name: str, other: str) -> Change:
    """Another operator in the place of a node's."""

    def change(model: onnx.ModelProto) -> None:
        (node,) = [node for node in model.graph.node if node.name == name]
        node.op_type = other

    return change


def another_id(model: onnx.ModelProto) -> None:
    for entry in model.metadata_props:
        if entry.key == "model_id":
            entry.value = "0" * 16


@pytest.mark.parametrize(
    "change",
    [
        moved("input.suction.weight"),
        moved("input.impeller.weights", 2),
        moved("intercept"),
        moved("input.flow.high"),
        moved("threshold.high"),
        moved("exp.c2"),
        operator("decision.at_or_above", "Greater"),
        operator("input.flow.sum", "Sub"),
        operator("exp.k", "Floor"),
    ],
)
def test_running_finds_a_planted_mistake(change: Change, tmp_path: Path) -> None:
    sealed = MODELS["pump_binary32"]
    vectors = make_vectors(sealed)
    for run in ONNX.run(written(sealed, tmp_path, change), sealed, [vector.inputs for vector in vectors], False):
        assert run.trouble is None
        assert list(run.outputs) != [said(vector.expected) for vector in vectors]


@pytest.mark.parametrize("name", ["exp.c6", "input.water.typical", "zero", "exp.powers"])
def test_a_number_that_no_row_may_show_is_found_in_the_file(name: str, tmp_path: Path) -> None:
    sealed = MODELS["pump_binary32"]
    for run in ONNX.run(written(sealed, tmp_path, moved(name)), sealed, [], False):
        assert (run.trouble, run.self_test) == (None, SELF_TEST_TABLES)


def test_runner_reads_the_model_id_from_the_file(tmp_path: Path) -> None:
    sealed = line_model("binary32")
    for run in ONNX.run(written(sealed, tmp_path, another_id), sealed, [(1.0,)], False):
        assert (run.model_id, run.trouble) == ("0" * 16, None)


@pytest.mark.parametrize("share", [0.0, 0.3, 0.99])
def test_runner_says_that_a_file_is_truncated(share: float, tmp_path: Path) -> None:
    sealed = line_model("binary32")
    path = written(sealed, tmp_path)
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * share)])
    (run,) = ONNX.run(path, sealed, [(1.0,)], False)
    assert (run.what, run.ran, run.outputs) == ("onnx.checker", True, ())
    assert run.trouble


def test_runner_says_that_outputs_have_another_shape(tmp_path: Path) -> None:
    def change(model: onnx.ModelProto) -> None:
        (node,) = [node for node in model.graph.node if node.name == "log_odds"]
        node.output[0] = "log_odds_row"
        axes = onnx.helper.make_tensor("axis", onnx.TensorProto.INT64, [1], [0])
        model.graph.initializer.append(axes)
        model.graph.node.append(onnx.helper.make_node("Unsqueeze", ["log_odds_row", "axis"], ["log_odds"]))
        del model.graph.output[0].type.tensor_type.shape.dim[:]
        model.graph.output[0].type.tensor_type.shape.dim.add().dim_value = 1
        model.graph.output[0].type.tensor_type.shape.dim.add().dim_param = "N"

    sealed = line_model("binary32")
    for run in ONNX.run(written(sealed, tmp_path, change), sealed, [(1.0,)], False):
        assert run.trouble == "log_odds of 0 rows is float32[1, 0]"


def test_runner_says_what_to_install(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    found = importlib.util.find_spec
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: None if name == "onnxruntime" else found(name))
    sealed = line_model("binary32")
    (run,) = ONNX.run(written(sealed, tmp_path), sealed, [(1.0,)], False)
    assert (run.ran, run.trouble) == (False, "ONNX Runtime is not installed: pip install onnxruntime")


def test_runner_ends_a_graph_that_takes_too_long(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(runner, "TIME_LIMIT", 0.01)
    sealed = line_model("binary32")
    (run,) = ONNX.run(written(sealed, tmp_path), sealed, [(1.0,)], False)
    assert (run.ran, run.trouble) == (True, "did not finish (stopped after 0.01 s)")
