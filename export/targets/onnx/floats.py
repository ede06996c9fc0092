"""The steps of floating point: one operator a rounding, in the reference scorer's order.

Why each product and sum is a node of its own: MatMul and Gemm sum in another order, Sigmoid and Exp are another
function on every machine. Why the sum starts from a Where and not from the intercept itself: an optimiser may drop the
addition of a constant 0, and 0 + -0 is +0.

A row with a fault has NaN as its start, so its log-odds are NaN; wherever a value becomes an index, such rows were
replaced by 0 first, since an index out of a table is an error at run time.
"""

from __future__ import annotations

import math

from onnx import TensorProto

from export.targets.functions import exponential_of
from export.targets.onnx.graph import Graph, prefix
from runtime_min.arithmetic import ROUND
from runtime_min.model import Input, SealedModel, Term


def add_floats(graph: Graph, sealed: SealedModel) -> tuple[str, str]:
    """Log-odds and probability; the names of the sum, and of where a row has no fault."""
    graph.number("nan", math.nan)
    graph.number("zero", 0.0)
    graph.number("one", 1.0)
    values = [_input(graph, position, entry) for position, entry in enumerate(sealed.inputs)]
    valid = graph.node("valid", "Not", graph.any([fault for _, fault in values if fault], "any_fault"))
    z = graph.node("sum.start", "Where", valid, graph.number("intercept", sealed.intercepts[0]), "nan")
    for entry, term, (value, fault) in zip(sealed.inputs, sealed.terms, values, strict=True):
        z = _add_term(graph, z, entry, term, value, fault)
    graph.node("log_odds", "Where", valid, z, "nan")
    _probability(graph, sealed, z, valid)
    return z, valid


def _input(graph: Graph, position: int, entry: Input) -> tuple[str, str]:
    """One column after its policies, and where it is a fault (empty where it never is)."""
    name = prefix(entry)
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
    return x, graph.any(faults, f"{name}.fault") if faults else ""


def _add_term(graph: Graph, z: str, entry: Input, term: Term, value: str, fault: str) -> str:
    name = prefix(entry)
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


def _probability(graph: Graph, sealed: SealedModel, z: str, valid: str) -> None:
    """The logistic: the same function stands in the reference scorer and every template on purpose."""
    constants = exponential_of(sealed)
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
