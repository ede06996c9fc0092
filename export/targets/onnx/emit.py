"""Sealed model -> an ONNX graph that does the reference scorer's steps: `floats` and `integers` have them.

A graph holds standard operators alone, and nothing that a runtime may compute as it likes.
"""

from __future__ import annotations

import json
from typing import Any

from onnx import ModelProto, TensorProto, helper

from export.targets import SelfTest
from export.targets.onnx.floats import add_floats
from export.targets.onnx.graph import Graph
from export.targets.onnx.integers import add_integers
from runtime_min.arithmetic import ACCUMULATOR_BITS
from runtime_min.integer_score import FAULT_PROBABILITY, missing_count
from runtime_min.model import FAULT, INTEGERS, NO_CALL, Input, SealedModel
from runtime_min.names import delivered_unit

IR_VERSION = 8
OPSET = 18

# The element types of inputs, log_odds and probability.
ELEMENTS = {
    "binary32": (TensorProto.FLOAT, TensorProto.FLOAT, TensorProto.FLOAT),
    "binary64": (TensorProto.DOUBLE, TensorProto.DOUBLE, TensorProto.DOUBLE),
    "int16": (TensorProto.INT32, TensorProto.INT32, TensorProto.INT32),
    "int32": (TensorProto.INT32, TensorProto.INT64, TensorProto.INT32),
}

CAUTION = (
    "A statistical classifier is not a safety function. Where a decision could hurt someone, the applicable "
    "functional-safety and local rules and licensed practice decide, not this graph."
)


def emit(sealed: SealedModel, self_test: SelfTest) -> bytes:
    """The serialised model. A graph cannot test itself: `self_test` is not used."""
    return bytes(model(sealed).SerializeToString(deterministic=True))


def model(sealed: SealedModel) -> ModelProto:
    """The graph with its inputs, outputs and metadata."""
    inputs, log_odds, probability = ELEMENTS[sealed.arithmetic]
    graph = Graph(log_odds)
    z, valid = (add_integers if sealed.arithmetic in INTEGERS else add_floats)(graph, sealed)
    _decision(graph, sealed, z, valid)
    finished = helper.make_model(
        graph.proto(
            sealed.name,
            [helper.make_tensor_value_info("inputs", inputs, ["N", len(sealed.inputs)])],
            [
                helper.make_tensor_value_info("log_odds", log_odds, ["N"]),
                helper.make_tensor_value_info("probability", probability, ["N"]),
                helper.make_tensor_value_info("decision", TensorProto.INT64, ["N"]),
            ],
            _words(sealed),
        ),
        producer_name=_plain(sealed.about.tool),
        opset_imports=[helper.make_opsetid("", OPSET)],
        doc_string=f"Model {sealed.name}, id {sealed.model_id}, {sealed.arithmetic}. {CAUTION}",
    )
    finished.ir_version = IR_VERSION
    helper.set_model_props(finished, _metadata(sealed))
    return finished


def _words(sealed: SealedModel) -> str:
    decision = f"decision is 0, 1, {NO_CALL} between the thresholds, {FAULT} on a fault."
    if sealed.arithmetic not in INTEGERS:
        return (
            "One row of `inputs` a case; NaN is a missing value. log_odds and probability are those of class 1 against "
            f"class 0, NaN on a fault; {decision}"
        )
    return (
        f"One row of counts a case; {missing_count(sealed)} is a missing one. log_odds, in units of "
        f"2^-{sealed.accumulator_shift}, and probability, in units of 2^-15, are those of class 1 against class 0; on "
        f"a fault they are {-(1 << (ACCUMULATOR_BITS[sealed.arithmetic] - 1))} and {FAULT_PROBABILITY}. {decision}"
    )


def _decision(graph: Graph, sealed: SealedModel, z: str, valid: str) -> None:
    for name, value in (("class 0", 0), ("class 1", 1), ("no call", NO_CALL), ("fault", FAULT)):
        graph.integer(name, value)
    low = graph.number("threshold.low", sealed.decision.low)
    high = graph.number("threshold.high", sealed.decision.high)
    is_class_0 = graph.node("decision.below", "Less", z, low)
    is_class_1 = graph.node("decision.at_or_above", "GreaterOrEqual", z, high)
    called = graph.node("decision.not_class_1", "Where", is_class_0, "class 0", "no call")
    called = graph.node("decision.called", "Where", is_class_1, "class 1", called)
    graph.node("decision", "Where", valid, called, "fault")


def _metadata(sealed: SealedModel) -> dict[str, str]:
    """Texts of the plan stand as JSON in ASCII, so that no character of theirs acts on a viewer."""
    entries = {
        "model": sealed.name,
        "model_id": sealed.model_id,
        "arithmetic": sealed.arithmetic,
        "classes": json.dumps(sealed.classes),
        "thresholds": json.dumps([sealed.decision.low, sealed.decision.high]),
        "inputs": json.dumps([_input_words(entry) for entry in sealed.inputs]),
        "purpose": json.dumps(sealed.about.purpose),
        "caution": CAUTION,
    }
    if sealed.arithmetic in INTEGERS:
        entries["log_odds_shift"] = str(sealed.accumulator_shift)
        entries["missing"] = str(missing_count(sealed))
    return entries


def _input_words(entry: Input) -> dict[str, Any]:
    words = {
        "name": entry.name,
        "unit": delivered_unit(entry),
        "levels": list(entry.levels),
        "low": entry.low,
        "high": entry.high,
        "outside": entry.outside,
        "missing": entry.missing,
        "typical": entry.typical,
    }
    if entry.origin is not None:
        words["origin"] = entry.origin
    if entry.counts is not None:
        words["counts"] = {"gain": entry.counts.gain, "offset": entry.counts.offset, "chosen": entry.counts.chosen}
    return words


def _plain(text: str) -> str:
    return json.dumps(text)[1:-1]
