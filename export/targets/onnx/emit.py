"""Sealed model -> an ONNX graph that does the reference scorer's steps, one operator a rounding.

Why each product and sum is a node of its own: MatMul and Gemm sum in another order, Sigmoid and Exp are another
function on every machine. Why the sum starts from a Where and not from the intercept itself: an optimiser may drop the
addition of a constant 0, and 0 + -0 is +0.

A row with a fault has NaN as its start, so its log-odds are NaN; wherever a value becomes an index, such rows were
replaced by 0 first, since an index out of a table is an error at run time.
"""

from __future__ import annotations

import json
import math

from onnx import ModelProto, TensorProto, helper

from export.targets import SelfTest
from export.targets.onnx.graph import Graph
from runtime_min.arithmetic import ROUND
from runtime_min.model import FAULT, NO_CALL, Input, SealedModel, Term

IR_VERSION = 8
OPSET = 18
REAL = {"binary32": TensorProto.FLOAT, "binary64": TensorProto.DOUBLE}

CAUTION = (
    "A statistical classifier is not a safety function. Where a decision could hurt someone, the applicable "
    "functional-safety and local rules and licensed practice decide, not this graph."
)


def emit(sealed: SealedModel, self_test: SelfTest) -> bytes:
    """The serialised model. A graph cannot test itself: `self_test` is not used."""
    return bytes(model(sealed).SerializeToString(deterministic=True))


def model(sealed: SealedModel) -> ModelProto:
    """The graph with its inputs, outputs and metadata."""
    real = REAL[sealed.arithmetic]
    graph = Graph(real)
    _shared_constants(graph, sealed)
    values = [_input(graph, position, entry) for position, entry in enumerate(sealed.inputs)]
    valid = graph.node("valid", "Not", _any(graph, [fault for _, fault in values if fault]))
    z = graph.node("sum.start", "Where", valid, graph.number("intercept", sealed.intercepts[0]), "nan")
    for entry, term, (value, fault) in zip(sealed.inputs, sealed.terms, values, strict=True):
        z = _add_term(graph, z, entry, term, value, fault)
    graph.node("log_odds", "Where", valid, z, "nan")
    _decision(graph, sealed, z, valid)
    _probability(graph, sealed, z, valid)
    finished = helper.make_model(
        graph.proto(
            sealed.name,
            [helper.make_tensor_value_info("inputs", real, ["N", len(sealed.inputs)])],
            [
                helper.make_tensor_value_info("log_odds", real, ["N"]),
                helper.make_tensor_value_info("probability", real, ["N"]),
                helper.make_tensor_value_info("decision", TensorProto.INT64, ["N"]),
            ],
            "One row of `inputs` a case; NaN is a missing value. log_odds and probability are those of class 1 against "
            f"class 0, NaN on a fault; decision is 0, 1, {NO_CALL} between the thresholds, {FAULT} on a fault.",
        ),
        producer_name=_plain(sealed.about.tool),
        opset_imports=[helper.make_opsetid("", OPSET)],
        doc_string=f"Model {sealed.name}, id {sealed.model_id}, {sealed.arithmetic}. {CAUTION}",
    )
    finished.ir_version = IR_VERSION
    helper.set_model_props(finished, _metadata(sealed))
    return finished


def _shared_constants(graph: Graph, sealed: SealedModel) -> None:
    graph.number("nan", math.nan)
    graph.number("zero", 0.0)
    graph.number("one", 1.0)
    for name, value in (("class 0", 0), ("class 1", 1), ("no call", NO_CALL), ("fault", FAULT)):
        graph.integer(name, value)


def _input(graph: Graph, position: int, entry: Input) -> tuple[str, str]:
    """One column after its policies, and where it is a fault (empty where it never is)."""
    name = _prefix(entry)
    x = graph.node(f"{name}.given", "Gather", "inputs", graph.integer(f"{name}.position", position), axis=1)
    faults = []
    missing = graph.node(f"{name}.missing", "IsNaN", x)
    if entry.typical is not None:
        x = graph.node(f"{name}.present", "Where", missing, graph.number(f"{name}.typical", entry.typical), x)
    else:
        faults.append(missing)
    low, high = graph.number(f"{name}.low", entry.low), graph.number(f"{name}.high", entry.high)
    below = graph.node(f"{name}.below", "Less", x, low)
    above = graph.node(f"{name}.above", "Greater", x, high)
    if entry.outside == "clamp":
        x = graph.node(f"{name}.not_below", "Where", below, low, x)
        x = graph.node(f"{name}.clamped", "Where", above, high, x)
    else:
        faults += [below, above]
    if entry.levels:
        whole = graph.node(f"{name}.whole", "Equal", x, graph.node(f"{name}.floor", "Floor", x))
        faults.append(graph.node(f"{name}.between", "Not", whole))
    return x, _any(graph, faults, f"{name}.fault") if faults else ""


def _prefix(entry: Input) -> str:
    """What the names of an input's own nodes start with; no other node's name starts so, whatever the plan's names."""
    return f"input.{entry.name}"


def _any(graph: Graph, faults: list[str], name: str = "any_fault") -> str:
    """Or of them all; of none: false in every row."""
    if not faults:
        first = graph.node("first_column", "Gather", "inputs", graph.integer("first", 0), axis=1)
        return graph.node(name, "Less", first, first)
    result = faults[0]
    for count, fault in enumerate(faults[1:], start=1):
        result = graph.node(name if count == len(faults) - 1 else f"{name}.{count}", "Or", result, fault)
    return result


def _add_term(graph: Graph, z: str, entry: Input, term: Term, value: str, fault: str) -> str:
    name = _prefix(entry)
    if term.form == "level":
        if fault:
            value = graph.node(f"{name}.masked", "Where", fault, "zero", value)
        index = graph.node(f"{name}.level", "Cast", value, to=TensorProto.INT64)
        product = graph.node(f"{name}.product", "Gather", graph.numbers(f"{name}.weights", term.weights[0]), index)
    else:
        if term.datum is not None:
            value = graph.node(f"{name}.less_datum", "Sub", value, graph.number(f"{name}.datum", term.datum))
        product = graph.node(f"{name}.product", "Mul", graph.number(f"{name}.weight", term.weights[0][0]), value)
    return graph.node(f"{name}.sum", "Add", z, product)


def _decision(graph: Graph, sealed: SealedModel, z: str, valid: str) -> None:
    low = graph.number("threshold.low", sealed.decision.low)
    high = graph.number("threshold.high", sealed.decision.high)
    is_class_0 = graph.node("decision.below", "Less", z, low)
    is_class_1 = graph.node("decision.at_or_above", "GreaterOrEqual", z, high)
    called = graph.node("decision.not_class_1", "Where", is_class_0, "class 0", "no call")
    called = graph.node("decision.called", "Where", is_class_1, "class 1", called)
    graph.node("decision", "Where", valid, called, "fault")


def _probability(graph: Graph, sealed: SealedModel, z: str, valid: str) -> None:
    """The logistic: the same function stands in the reference scorer and every template on purpose."""
    constants = sealed.exponential
    rounded = ROUND[sealed.arithmetic]
    t = graph.node("exp.t", "Neg", graph.node("exp.size", "Abs", z))
    floor = graph.number("exp.floor", constants.floor)
    # NaN (a fault) is not at or above the floor, so it leaves here too.
    within = graph.node("exp.within", "GreaterOrEqual", t, floor)
    t = graph.node("exp.t_masked", "Where", within, t, "zero")
    scaled = graph.node("exp.scaled", "Mul", t, graph.number("exp.inv_ln2", constants.inv_ln2))
    k = graph.node("exp.k", "Round", scaled)
    first = graph.node("exp.k_first", "Mul", k, graph.number("exp.ln2_high", constants.ln2_high))
    rest = graph.node("exp.k_rest", "Mul", k, graph.number("exp.ln2_low", constants.ln2_low))
    r = graph.node("exp.r", "Sub", graph.node("exp.r_first", "Sub", t, first), rest)
    degree = len(constants.coefficients) - 1
    p = graph.number(f"exp.c{degree}", constants.coefficients[degree])
    for power in range(degree - 1, -1, -1):
        product = graph.node(f"exp.product{power}", "Mul", p, r)
        coefficient = graph.number(f"exp.c{power}", constants.coefficients[power])
        p = graph.node(f"exp.p{power}", "Add", product, coefficient)
    least = round(rounded(rounded(constants.floor) * constants.inv_ln2))
    powers = graph.numbers("exp.powers", [math.ldexp(1.0, -size) for size in range(1 - least)])
    size = graph.node("exp.power", "Cast", graph.node("exp.minus_k", "Neg", k), to=TensorProto.INT64)
    e = graph.node("exp.scale", "Mul", p, graph.node("exp.two_to_k", "Gather", powers, size))
    e = graph.node("exp", "Where", within, e, "zero")
    upper = graph.node("logistic.not_negative", "GreaterOrEqual", z, "zero")
    numerator = graph.node("logistic.numerator", "Where", upper, "one", e)
    denominator = graph.node("logistic.denominator", "Add", "one", e)
    quotient = graph.node("logistic.quotient", "Div", numerator, denominator)
    graph.node("probability", "Where", valid, quotient, "nan")


def _metadata(sealed: SealedModel) -> dict[str, str]:
    """Texts of the plan stand as JSON in ASCII, so that no character of theirs acts on a viewer."""
    inputs = [
        {
            "name": entry.name,
            "unit": entry.unit,
            "levels": list(entry.levels),
            "low": entry.low,
            "high": entry.high,
            "outside": entry.outside,
            "missing": entry.missing,
            "typical": entry.typical,
        }
        for entry in sealed.inputs
    ]
    return {
        "model": sealed.name,
        "model_id": sealed.model_id,
        "arithmetic": sealed.arithmetic,
        "classes": json.dumps(sealed.classes),
        "thresholds": json.dumps([sealed.decision.low, sealed.decision.high]),
        "inputs": json.dumps(inputs),
        "purpose": json.dumps(sealed.about.purpose),
        "caution": CAUTION,
    }


def _plain(text: str) -> str:
    return json.dumps(text)[1:-1]
