"""The ONNX graph in int16 and int32: integers in ONNX Runtime whatever its optimiser does, policies, planted mistakes.

Expected values: the reference scorer's integers (what an artefact must reproduce), hand calculation on models whose
numbers are short binary fractions, the proof's figures, the ONNX standard, and mpmath for the logistic function.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import mpmath
import numpy as np
import onnx
import onnxruntime
import pytest
from line_models import HOSTILE, level_model, line_model, named_model, with_text
from models import sample_integer_models

from export.targets import SELF_TEST_TABLES, TARGETS, Output, SelfTest
from export.vectors import expected, make_vectors
from runtime_min.integer_score import missing_count
from runtime_min.model import SealedModel
from runtime_min.names import delivered_unit
from runtime_min.proof import proof

MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}
ARITHMETICS = ("int16", "int32")
ONNX = TARGETS["onnx"]
LEVELS = (onnxruntime.GraphOptimizationLevel.ORT_DISABLE_ALL, onnxruntime.GraphOptimizationLevel.ORT_ENABLE_ALL)
NO_SELF_TEST = SelfTest((), 0)
LEAST = {"int16": -(2**31), "int32": -(2**63)}
LOG_ODDS = {"int16": np.int32, "int32": np.int64}

# Names that the graph itself uses.
TRICKY_NAMES = ["inputs", "log_odds", "probability", "decision", "valid", "missing", "zero", "one", "counts", "table"]
TRICKY_NAMES += ["logistic", "fault", "intercept", "first", "input", "any_fault", "table_step", "model_id", "threshold"]

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
    assert given.type == "tensor(int32)"
    table = np.array(rows, dtype=np.int32).reshape(len(rows), given.shape[1])
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


# --- the same integers -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_graph_gives_the_integers_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    vectors = make_vectors(sealed)
    runs = list(ONNX.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], True))
    assert len(runs) == 7
    for run in runs:
        assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, None)
        assert list(run.outputs or ()) == [said(vector.expected) for vector in vectors], run.what


@pytest.mark.parametrize("name", MODELS)
@pytest.mark.parametrize("level", LEVELS, ids=["off", "on"])
def test_every_int32_is_taken_as_the_reference_scorer_takes_it(name: str, level: Any) -> None:
    """An input of the graph is wider than the device's: its ends, and what means missing in another width."""
    sealed = MODELS[name]
    start = tuple(int(entry.low) for entry in sealed.inputs)
    ends = (-(2**31), -(2**31) + 1, 2**31 - 1, -(2**15) - 1, -(2**15), 2**15)
    rows = [(*start[:at], end, *start[at + 1 :]) for at in range(len(start)) for end in ends]
    rows += [(end,) * len(start) for end in ends]
    log_odds, probability, decision = scored(emitted(sealed), rows, level)
    mask = (1 << (8 * log_odds.dtype.itemsize)) - 1
    found = [
        Output(-1, (z & mask,), (p,), d)
        for z, p, d in zip(log_odds.tolist(), probability.tolist(), decision.tolist(), strict=True)
    ]
    assert found == [said(expected(sealed, row)) for row in rows]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize("level", LEVELS, ids=["off", "on"])
@pytest.mark.parametrize("count", [0, 1, 2, 1000])
def test_batches_of_none_one_and_many(arithmetic: str, level: Any, count: int) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    vectors = make_vectors(sealed)
    rows = [vectors[row % len(vectors)].inputs for row in range(count)]
    log_odds, probability, decision = scored(emitted(sealed), rows, level)
    assert (log_odds.dtype, probability.dtype, decision.dtype) == (LOG_ODDS[arithmetic], np.int32, np.int64)
    assert log_odds.shape == probability.shape == decision.shape == (count,)
    assert decision.tolist() == [vectors[row % len(vectors)].expected.decision for row in range(count)]


@pytest.mark.parametrize("name", MODELS)
@pytest.mark.parametrize("level", LEVELS, ids=["off", "on"])
def test_log_odds_reach_the_proof_s_extremes_and_do_not_wrap(name: str, level: Any) -> None:
    """The corner of the ranges that makes the sum smallest, and the one that makes it largest."""
    sealed = MODELS[name]
    rows = []
    for pick in (min, max):
        row = []
        for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
            weights = term.weights[0]
            if term.form == "level":
                row.append(weights.index(pick(weights)))
            else:
                row.append(entry.high if (weights[0] > 0) == (pick is max) else entry.low)
        rows.append(row)
    last = [step for step in proof(sealed) if step.what == "sum"][-1]
    assert scored(emitted(sealed), rows, level)[0].tolist() == [last.lowest, last.highest]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_names_of_inputs_never_meet_the_graph_s_own(arithmetic: str, tmp_path: Path) -> None:
    sealed = named_model(arithmetic, TRICKY_NAMES)
    vectors = make_vectors(sealed)
    for run in ONNX.run(written(sealed, tmp_path), sealed, [vector.inputs for vector in vectors], False):
        assert run.trouble is None
        assert list(run.outputs or ()) == [said(vector.expected) for vector in vectors]


# --- by hand ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(
    ("outside", "missing", "want"),
    [
        # z = -1 + x / 2 of these readings; a fault is None
        ("fault", "fault", (-1.0, 3.0, 1.5, None, None, None)),
        ("clamp", "fault", (-1.0, 3.0, 1.5, -1.0, 3.0, None)),
        ("fault", "typical", (-1.0, 3.0, 1.5, None, None, 0.5)),
        ("clamp", "typical", (-1.0, 3.0, 1.5, -1.0, 3.0, 0.5)),
    ],
)
def test_policies_by_hand(arithmetic: str, outside: str, missing: str, want: tuple[float | None, ...]) -> None:
    sealed = line_model(arithmetic, outside=outside, missing=missing)
    one = int(sealed.inputs[0].high) // 8  # the count of 1 m: the range reaches to 8 m
    rows = [[0], [8 * one], [5 * one], [-1], [8 * one + 1], [missing_count(sealed)]]
    for level in LEVELS:
        log_odds, probability, decision = scored(emitted(sealed), rows, level)
        units = [LEAST[arithmetic] if z is None else z * 2 ** (sealed.accumulator_shift or 0) for z in want]
        assert log_odds.tolist() == units
        assert [p == 0xFFFF for p in probability.tolist()] == [z is None for z in want]
        assert decision.tolist() == [-2 if z is None else int(z >= 1.0) for z in want]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(("missing", "when_missing"), [("fault", None), ("typical", -3.0)])
def test_levels_by_hand(arithmetic: str, missing: str, when_missing: float | None) -> None:
    sealed = level_model(arithmetic, missing=missing)
    pairs = [(0, -1.0), (1, -0.75), (2, -3.0), (missing_count(sealed), when_missing)]
    pairs += [(wrong, None) for wrong in (3, -1, 2**31 - 1)]
    for level in LEVELS:
        log_odds, _, decision = scored(emitted(sealed), [[x] for x, _ in pairs], level)
        units = [LEAST[arithmetic] if z is None else z * 2 ** (sealed.accumulator_shift or 0) for _, z in pairs]
        assert log_odds.tolist() == units
        assert decision.tolist() == [-2 if z is None else int(z >= -1.0) for _, z in pairs]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_between_two_thresholds_is_no_call(arithmetic: str) -> None:
    sealed = line_model(arithmetic)
    one = 2 ** (sealed.accumulator_shift or 0)
    data = emitted(replace(sealed, decision=replace(sealed.decision, low=0, high=2 * one)))
    count = int(sealed.inputs[0].high) // 16  # of half a metre
    rows = [[3 * count], [4 * count], [11 * count], [12 * count], [missing_count(sealed)]]
    assert scored(data, rows)[2].tolist() == [0, -1, -1, 1, -2]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_a_model_with_a_no_call_decides_all_three(arithmetic: str) -> None:
    sealed = MODELS[f"rare_{arithmetic}"]
    log_odds, _, decision = scored(emitted(sealed), [vector.inputs for vector in make_vectors(sealed)])
    right = [
        -2 if z == LEAST[arithmetic] else 1 if z >= sealed.decision.high else 0 if z < sealed.decision.low else -1
        for z in log_odds.tolist()
    ]
    assert decision.tolist() == right
    assert set(right) == {-2, -1, 0, 1}


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_probability_is_the_logistic_function_within_the_table_s_error(arithmetic: str) -> None:
    """mpmath at 30 digits; 1/2048 is the error that the table is made for."""
    mpmath.mp.dps = 30
    sealed = MODELS[f"steep_{arithmetic}"]
    (low, high), flow = (int(sealed.inputs[0].low), int(sealed.inputs[0].high)), int(sealed.inputs[1].high) // 3
    rows = [(low + (high - low) * part // 5000, flow) for part in range(5001)]
    log_odds, probability, _ = scored(emitted(sealed), rows, LEVELS[1])
    tried = 0
    for units, q in zip(log_odds.tolist(), probability.tolist(), strict=True):
        z = Fraction(units, 2 ** (sealed.accumulator_shift or 0))
        exact = 1 / (1 + mpmath.exp(-mpmath.mpf(z.numerator) / z.denominator))
        assert abs(mpmath.mpf(q) / 32768 - exact) <= mpmath.mpf(1) / 2048, z
        tried += abs(z) < 8
    assert tried


# --- what stands in the file -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_graph_is_valid_standard_onnx_in_integers_alone(name: str) -> None:
    """IR version 8 and opset 18; no element of floating point, given or found by shape inference."""
    model = onnx.load_model_from_string(emitted(MODELS[name]))
    onnx.checker.check_model(model, full_check=True)
    assert model.ir_version == 8
    assert [(entry.domain, entry.version) for entry in model.opset_import] == [("", 18)]
    assert {node.domain for node in model.graph.node} == {""}
    assert not {node.op_type for node in model.graph.node} & {"MatMul", "MatMulInteger", "BitShift", "Clip", "Sigmoid"}
    whole = {onnx.TensorProto.INT32, onnx.TensorProto.INT64, onnx.TensorProto.BOOL}
    graph = onnx.shape_inference.infer_shapes(model).graph
    kinds = {value.name: value.type.tensor_type.elem_type for value in (*graph.input, *graph.output, *graph.value_info)}
    assert set(kinds) >= {output for node in graph.node for output in node.output}
    assert set(kinds.values()) <= whole
    assert {tensor.data_type for tensor in graph.initializer} <= whole
    # ONNX Runtime warns of a constant that nothing uses.
    assert {tensor.name for tensor in graph.initializer} <= {name for node in graph.node for name in node.input}


@pytest.mark.parametrize("name", MODELS)
def test_metadata_names_the_model(name: str) -> None:
    sealed = MODELS[name]
    model = onnx.load_model_from_string(emitted(sealed))
    metadata = {entry.key: entry.value for entry in model.metadata_props}
    assert (metadata["model_id"], metadata["arithmetic"]) == (sealed.model_id, sealed.arithmetic)
    assert metadata["log_odds_shift"] == str(sealed.accumulator_shift)
    assert metadata["missing"] == str(missing_count(sealed))
    assert json.loads(metadata["thresholds"]) == [sealed.decision.low, sealed.decision.high]
    inputs = json.loads(metadata["inputs"])
    assert [entry["unit"] for entry in inputs] == [delivered_unit(entry) for entry in sealed.inputs]
    for entry, sealed_entry in zip(inputs, sealed.inputs, strict=True):
        assert ("counts" in entry) == (sealed_entry.counts is not None)
        if sealed_entry.counts is not None:
            scaling = sealed_entry.counts.gain, sealed_entry.counts.offset, sealed_entry.counts.chosen
            assert tuple(entry["counts"].values()) == scaling


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_text_from_the_plan_stays_text(text: str) -> None:
    sealed = MODELS["counts_int16"]
    model = onnx.load_model_from_string(emitted(with_text(sealed, text)))
    onnx.checker.check_model(model, full_check=True)
    metadata = {entry.key: entry.value for entry in model.metadata_props}
    assert all(value.isascii() and value.isprintable() for value in metadata.values())
    assert json.loads(metadata["purpose"]) == text
    plain = onnx.load_model_from_string(emitted(sealed))
    assert list(map(str, model.graph.node)) == list(map(str, plain.graph.node))


# --- the runner ------------------------------------------------------------------------------------------------------


def moved(name: str, place: int = 0, by: int = 1) -> Change:
    """One number of a constant, moved."""

    def change(model: onnx.ModelProto) -> None:
        (tensor,) = [tensor for tensor in model.graph.initializer if tensor.name == name]
        values = onnx.numpy_helper.to_array(tensor).copy()
        values.reshape(-1)[place] += by
        tensor.raw_data = values.tobytes()

    return change


def times(name: str, factor: Fraction) -> Change:
    """A scalar, multiplied."""

    def change(model: onnx.ModelProto) -> None:
        (tensor,) = [tensor for tensor in model.graph.initializer if tensor.name == name]
        values = onnx.numpy_helper.to_array(tensor)
        tensor.raw_data = (values * factor.numerator // factor.denominator).astype(values.dtype).tobytes()

    return change


def operator(name: str, other: str) -> Change:
    """Another operator in the place of a node's."""

    def change(model: onnx.ModelProto) -> None:
        (node,) = [node for node in model.graph.node if node.name == name]
        node.op_type = other

    return change


def narrowed(name: str, kind: int) -> Change:
    """What a node gives goes through a narrower type, where it wraps."""

    def change(model: onnx.ModelProto) -> None:
        (at,) = [at for at, node in enumerate(model.graph.node) if node.name == name]
        wide = model.graph.initializer[0].data_type
        model.graph.node[at].output[0] = "whole"
        model.graph.node.insert(at + 1, onnx.helper.make_node("Cast", ["whole"], ["narrow"], to=kind))
        model.graph.node.insert(at + 2, onnx.helper.make_node("Cast", ["narrow"], [name], to=wide))

    return change


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(
    "change",
    [
        moved("table.nodes", 9),
        moved("table.nodes", 0, -1),
        moved("input.suction.weight"),
        moved("input.impeller.weights", 2),
        moved("intercept"),
        moved("input.suction.datum"),
        moved("input.flow.high", by=-1),
        times("input.flow.power", Fraction(2)),
        times("input.flow.power", Fraction(1, 2)),
        times("table.half", Fraction(0)),
        times("table.half", Fraction(2)),
        times("table.drop", Fraction(2)),
        operator("input.flow.sum", "Sub"),
        operator("table.part", "Mod"),
        narrowed("input.flow.shifted", onnx.TensorProto.INT16),
        narrowed("table.product", onnx.TensorProto.INT16),
    ],
    ids=range(16),
)
def test_running_finds_a_planted_mistake(change: Change, arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    vectors = make_vectors(sealed)
    for run in ONNX.run(written(sealed, tmp_path, change), sealed, [vector.inputs for vector in vectors], False):
        assert run.trouble is None
        assert list(run.outputs or ()) != [said(vector.expected) for vector in vectors]


def test_running_finds_an_accumulator_of_32_bits_in_int32(tmp_path: Path) -> None:
    sealed = MODELS["pump_int32"]
    vectors = make_vectors(sealed)
    path = written(sealed, tmp_path, narrowed("input.water.sum", onnx.TensorProto.INT32))
    for run in ONNX.run(path, sealed, [vector.inputs for vector in vectors], False):
        assert run.trouble is None
        assert list(run.outputs or ()) != [said(vector.expected) for vector in vectors]


@pytest.mark.parametrize("name", ["table.nodes", "input.water.typical", "zero", "missing", "fault.log_odds"])
def test_a_number_that_no_row_may_show_is_found_in_the_file(name: str, tmp_path: Path) -> None:
    sealed = MODELS["pump_int16"]
    for run in ONNX.run(written(sealed, tmp_path, moved(name)), sealed, [], False):
        assert (run.trouble, run.self_test) == (None, SELF_TEST_TABLES)


def test_runner_says_that_log_odds_have_another_type(tmp_path: Path) -> None:
    """A graph of int32 under the name of one of int16: its log-odds have 64 bits."""
    sealed = line_model("int16")
    path = tmp_path / ONNX.file(sealed)
    path.write_bytes(emitted(line_model("int32")))
    for run in ONNX.run(path, sealed, [(4,)], False):
        assert run.trouble == "log_odds of 0 rows is int64[0]"
