"""The reference scorers: they define the bits that every artefact must reproduce.

Each takes any object with the sealed model's fields and a sequence of one number an input, in the plan's order, as the
device delivers it. The steps and their order are the contract; changing one changes the bits of every model. Runs under
MicroPython.
"""

from runtime_min.arithmetic import ACCUMULATOR_BITS, NAN, ROUND, logistic
from runtime_min.integer_score import FAULT_PROBABILITY, table_probability
from runtime_min.integer_score import prepared as prepared_counts
from runtime_min.integer_score import scores as integer_scores

TYPE_CHECKING = False  # a type checker reads it as True; MicroPython has no typing to import it from
if TYPE_CHECKING:
    from collections.abc import Sequence

    from runtime_min.model import SealedModel

FAULT = -2
NO_CALL = -1


def prepared(model: "SealedModel", inputs: "Sequence[float]") -> "tuple[int, list[float]]":
    """(0, values) after rounding, missing and range policies, or (1 + position of the first faulty input, []).

    Missing is tested before the range: NaN never clamps, an infinity does.
    """
    if len(inputs) != len(model.inputs):
        raise ValueError(f"{model.name} takes {len(model.inputs)} inputs, found {len(inputs)}")
    if model.arithmetic in ACCUMULATOR_BITS:
        return prepared_counts(model, inputs)  # type: ignore[return-value]  # a list of int is one of numbers
    rounded = ROUND[model.arithmetic]
    values = []
    for position in range(len(model.inputs)):
        entry = model.inputs[position]
        value = rounded(float(inputs[position]))
        if value != value:
            if entry.missing != "typical":
                return 1 + position, []
            value = entry.typical  # type: ignore[assignment]  # validity: it is there under "typical"
        if value < entry.low or value > entry.high:
            if entry.outside != "clamp":
                return 1 + position, []
            value = entry.low if value < entry.low else entry.high
        if entry.levels and value != int(value):
            return 1 + position, []
        values.append(value)
    return 0, values


def scores(model: "SealedModel", values: "Sequence[float]") -> "list[float]":
    """Log-odds of each class after the first, from prepared values: z = b, then z + w * (x - datum) term by term."""
    if model.arithmetic in ACCUMULATOR_BITS:
        return integer_scores(model, values)  # type: ignore[return-value]
    rounded = ROUND[model.arithmetic]
    result = []
    for k in range(len(model.intercepts)):
        z = model.intercepts[k]
        for term in model.terms:
            value = values[term.of[0]]
            if term.form == "level":
                z = rounded(z + term.weights[k][int(value)])
            else:
                if term.datum is not None:
                    value = rounded(value - term.datum)
                z = rounded(z + rounded(term.weights[k][0] * value))
        result.append(z)
    return result


def outputs(model: "SealedModel", inputs: "Sequence[float]") -> "tuple[int, list[float], list[float], int]":
    """(fault, log-odds and probability of each class after the first, decision) of one row, in any arithmetic.

    fault: 0, or 1 + the position of the first input whose policy makes it one; then log-odds and probability are NaN
    (in integers the accumulator's least number and 0xFFFF), and the decision is FAULT.
    In integers log-odds are in units of 2^-accumulator_shift, probabilities in units of 2^-15, both ints.
    """
    fault, values = prepared(model, inputs)
    count = len(model.intercepts)
    if model.arithmetic in ACCUMULATOR_BITS:
        if fault:
            least = -(1 << (ACCUMULATOR_BITS[model.arithmetic] - 1))
            return fault, [least] * count, [FAULT_PROBABILITY] * count, FAULT
        result = scores(model, values)
        table = model.table
        chances = [table_probability(z, table) for z in result]  # type: ignore[arg-type]
        return 0, result, chances, _decision(model, result)  # type: ignore[return-value]
    if fault:
        return fault, [NAN] * count, [NAN] * count, FAULT
    result = scores(model, values)
    constants = model.exponential
    rounded = ROUND[model.arithmetic]
    return 0, result, [logistic(z, constants, rounded) for z in result], _decision(model, result)  # type: ignore[arg-type]


def _decision(model: "SealedModel", log_odds: "Sequence[float]") -> int:
    if log_odds[0] >= model.decision.high:
        return 1
    if log_odds[0] < model.decision.low:
        return 0
    return NO_CALL


def check_inputs(model: "SealedModel", inputs: "Sequence[float]") -> int:
    """0, or 1 + the position of the first input whose policy makes it a fault."""
    return prepared(model, inputs)[0]


def log_odds(model: "SealedModel", inputs: "Sequence[float]") -> float:
    """Log-odds of the event (two classes); see `outputs`."""
    return outputs(model, inputs)[1][0]


def probability(model: "SealedModel", inputs: "Sequence[float]") -> float:
    """Probability of the event (two classes); see `outputs`."""
    return outputs(model, inputs)[2][0]


def decide(model: "SealedModel", inputs: "Sequence[float]") -> int:
    """Class index, NO_CALL or FAULT."""
    return outputs(model, inputs)[3]
