"""The reference scorer in integers: plain Python integers, whose sizes `proof` keeps within the device's.

z = b; then z = z + (w * (n - datum) << shift) term by term; a level adds its weight. Nothing is rounded, so the order
of the terms cannot change z, but the proof holds for this order. Runs under MicroPython.
"""

TYPE_CHECKING = False  # a type checker reads it as True; MicroPython has no typing to import it from
if TYPE_CHECKING:
    from collections.abc import Sequence

    from runtime_min.model import SealedModel, Table

FAULT_PROBABILITY = 0xFFFF
ONE = 32768


def count_bits(model: "SealedModel") -> int:
    """The width of the inputs: 16 bits in int16 where every limit is within ±32767, else 32, of all inputs."""
    if model.arithmetic == "int16" and all(entry.low > -32768 and entry.high < 32768 for entry in model.inputs):
        return 16
    return 32


def missing_count(model: "SealedModel") -> int:
    """The count that means missing: the least of its type."""
    return int(-(1 << (count_bits(model) - 1)))


def prepared(model: "SealedModel", inputs: "Sequence[float]") -> "tuple[int, list[int]]":
    """(0, counts) after missing and range policies, or (1 + position of the first faulty input, []).

    NaN is taken for missing too, and an infinity for a count out of range; a number between two counts is a fault.
    """
    missing = missing_count(model)
    values = []
    for position in range(len(model.inputs)):
        entry = model.inputs[position]
        value = inputs[position]
        if value != value or value == missing:
            if entry.missing != "typical":
                return 1 + position, []
            value = entry.typical  # type: ignore[assignment]  # validity: it is there under "typical"
        if value < entry.low or value > entry.high:
            if entry.outside != "clamp":
                return 1 + position, []
            value = entry.low if value < entry.low else entry.high
        if value != int(value):
            return 1 + position, []
        values.append(int(value))
    return 0, values


def scores(model: "SealedModel", values: "Sequence[float]") -> "list[int]":
    """Log-odds of each class after the first, in units of 2^-accumulator_shift, from prepared counts."""
    result = []
    for k in range(len(model.intercepts)):
        z = model.intercepts[k]
        for term in model.terms:
            value = values[term.of[0]]
            if term.form == "level":
                z += term.weights[k][int(value)]
            else:
                z += term.weights[k][0] * (value - term.datum) * (1 << term.shift)  # type: ignore[operator]
        result.append(int(z))
    return result


def table_probability(z: int, table: "Table") -> int:
    """The logistic function at z, in units of 2^-15, from the table's nodes T.

    a = |z| >> drop; i = a >> step; f = the last `step` bits of a;
    q = T[i] + (((T[i + 1] - T[i]) * f + 2^(step - 1)) >> step), beyond the last node the last; z < 0: 32768 - q.
    """
    a = (z if z >= 0 else -z) >> table.drop
    i = a >> table.step
    if i >= len(table.nodes) - 1:
        q = table.nodes[-1]
    else:
        f = a & ((1 << table.step) - 1)
        q = table.nodes[i] + (((table.nodes[i + 1] - table.nodes[i]) * f + (1 << (table.step - 1))) >> table.step)
    return q if z >= 0 else ONE - q
