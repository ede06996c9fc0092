"""The steps of integers: counts in, log-odds in units of 2^-S out, in operators that ONNX Runtime has for them.

What it has not, and what stands for it: BitShift takes no signed numbers, so a shift left is a product with a power of
two, and a shift right, of what is never negative here, a Div (which truncates). Where, Div and the rest take no 16
bits: all is int32, and where log-odds have 64 bits, int64.

An overflow would wrap in silence: `runtime_min.proof` shows that there is none for counts within their limits, and a
row with a fault goes on with the lowest counts, so that no other count is ever multiplied or becomes an index.
"""

from __future__ import annotations

from onnx import TensorProto

from export.targets.functions import table_of
from export.targets.onnx.graph import Graph, prefix
from runtime_min.arithmetic import ACCUMULATOR_BITS
from runtime_min.integer_score import FAULT_PROBABILITY, ONE, missing_count
from runtime_min.model import Input, SealedModel, Term


def add_integers(graph: Graph, sealed: SealedModel) -> tuple[str, str]:
    """Log-odds and probability; the names of the sum, and of where a row has no fault."""
    graph.number("zero", 0)
    counts = "inputs"
    if graph.kind != TensorProto.INT32:
        counts = graph.node("counts", "Cast", "inputs", to=graph.kind)
    missing = missing_count(sealed)
    values = [_input(graph, counts, position, entry, missing) for position, entry in enumerate(sealed.inputs)]
    valid = graph.node("valid", "Not", graph.any([fault for _, fault in values if fault], "any_fault"))
    z = graph.number("intercept", sealed.intercepts[0])
    for entry, term, (value, _) in zip(sealed.inputs, sealed.terms, values, strict=True):
        z = _add_term(graph, z, entry, term, value)
    least = -(1 << (ACCUMULATOR_BITS[sealed.arithmetic] - 1))
    graph.node("log_odds", "Where", valid, z, graph.number("fault.log_odds", least))
    _probability(graph, sealed, z, valid)
    return z, valid


def _input(graph: Graph, counts: str, position: int, entry: Input, missing: int) -> tuple[str, str]:
    """One column after its policies, and where it is a fault (empty where it never is): there it is the lowest."""
    name = prefix(entry)
    x = graph.node(f"{name}.given", "Gather", counts, graph.integer(f"{name}.position", position), axis=1)
    faults = []
    if entry.typical is not None:
        is_missing = graph.node(f"{name}.missing", "Equal", x, graph.number("missing", missing))
        x = graph.node(f"{name}.present", "Where", is_missing, graph.number(f"{name}.typical", entry.typical), x)
    elif entry.outside == "clamp":  # elsewhere what is missing lies below the range
        faults.append(graph.node(f"{name}.missing", "Equal", x, graph.number("missing", missing)))
    low, high = graph.number(f"{name}.low", entry.low), graph.number(f"{name}.high", entry.high)
    below = graph.node(f"{name}.below", "Less", x, low)
    above = graph.node(f"{name}.above", "Greater", x, high)
    if entry.outside == "clamp":
        x = graph.node(f"{name}.not_below", "Where", below, low, x)
        x = graph.node(f"{name}.clamped", "Where", above, high, x)
    else:
        faults += [below, above]
    if not faults:
        return x, ""
    fault = graph.any(faults, f"{name}.fault")
    return graph.node(f"{name}.masked", "Where", fault, low, x), fault


def _add_term(graph: Graph, z: str, entry: Input, term: Term, value: str) -> str:
    name = prefix(entry)
    if term.form == "level":
        product = graph.node(f"{name}.product", "Gather", graph.numbers(f"{name}.weights", term.weights[0]), value)
    else:
        value = graph.node(f"{name}.less_datum", "Sub", value, graph.number(f"{name}.datum", term.datum or 0))
        product = graph.node(f"{name}.product", "Mul", graph.number(f"{name}.weight", term.weights[0][0]), value)
        if term.shift:
            product = graph.node(f"{name}.shifted", "Mul", product, graph.number(f"{name}.power", 2**term.shift))
    return graph.node(f"{name}.sum", "Add", z, product)


def _probability(graph: Graph, sealed: SealedModel, z: str, valid: str) -> None:
    """The table's logistic: the same function stands in the reference scorer and every template on purpose."""
    table = table_of(sealed)
    last = len(table.nodes) - 1
    graph.number("one", ONE)
    a = graph.node("table.size", "Abs", z)
    if table.drop:
        a = graph.node("table.dropped", "Div", a, graph.number("table.drop", 2**table.drop))
    step = graph.number("table.step", 2**table.step)
    i = graph.node("table.node", "Div", a, step)
    beyond = graph.node("table.beyond", "GreaterOrEqual", i, graph.number("table.last", last))
    i = graph.node("table.node_within", "Where", beyond, "zero", i)
    nodes = graph.numbers("table.nodes", table.nodes)
    below = graph.node("table.below", "Gather", nodes, i)
    next_node = graph.node("table.next", "Add", i, graph.number("table.one", 1))
    rise = graph.node("table.rise", "Sub", graph.node("table.above", "Gather", nodes, next_node), below)
    rest = graph.node("table.rest", "Mod", a, step)
    product = graph.node("table.product", "Mul", rise, rest)
    half = graph.number("table.half", 2 ** (table.step - 1))
    part = graph.node("table.part", "Div", graph.node("table.rounded", "Add", product, half), step)
    within = graph.node("table.within", "Add", below, part)
    q = graph.node("logistic.of_size", "Where", beyond, graph.number("table.end", table.nodes[last]), within)
    upper = graph.node("logistic.not_negative", "GreaterOrEqual", z, "zero")
    p = graph.node("logistic", "Where", upper, q, graph.node("logistic.below", "Sub", "one", q))
    fault = graph.number("fault.probability", FAULT_PROBABILITY)
    if graph.kind == TensorProto.INT32:
        graph.node("probability", "Where", valid, p, fault)
    else:
        wide = graph.node("probability.wide", "Where", valid, p, fault)
        graph.node("probability", "Cast", wide, to=TensorProto.INT32)
