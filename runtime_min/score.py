"""The reference scorers: they define the bits that every artefact must reproduce.

Each takes any object with the sealed model's fields and a sequence of one number an input, in the plan's order and
unit. The steps and their order are the contract; changing one changes the bits of every model. Runs under MicroPython.
"""

from runtime_min.arithmetic import NAN, ROUND, logistic

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
    rounded = ROUND[model.arithmetic]
    if len(inputs) != len(model.inputs):
        raise ValueError(f"{model.name} takes {len(model.inputs)} inputs, found {len(inputs)}")
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


def check_inputs(model: "SealedModel", inputs: "Sequence[float]") -> int:
    """0, or 1 + the position of the first input whose policy makes it a fault."""
    return prepared(model, inputs)[0]


def log_odds(model: "SealedModel", inputs: "Sequence[float]") -> float:
    """Log-odds of the event (two classes); NaN on a fault."""
    fault, values = prepared(model, inputs)
    return NAN if fault else scores(model, values)[0]


def probability(model: "SealedModel", inputs: "Sequence[float]") -> float:
    """Probability of the event (two classes); NaN on a fault."""
    fault, values = prepared(model, inputs)
    if fault:
        return NAN
    return logistic(scores(model, values)[0], model.exponential, ROUND[model.arithmetic])


def decide(model: "SealedModel", inputs: "Sequence[float]") -> int:
    """Class index, NO_CALL or FAULT."""
    fault, values = prepared(model, inputs)
    if fault:
        return FAULT
    z = scores(model, values)[0]
    if z >= model.decision.high:
        return 1
    if z < model.decision.low:
        return 0
    return NO_CALL
