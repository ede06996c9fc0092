"""The reference scorers: they define the bits that every artefact must reproduce.

Each takes any object with the sealed model's fields and a sequence of one number an input, in the plan's order and
unit. The steps and their order are the contract; changing one changes the bits of every model. Runs under MicroPython.
"""

from runtime_min.arithmetic import NAN, ROUND, logistic

FAULT = -2
NO_CALL = -1


def prepared(model, inputs):  # type: ignore[no-untyped-def]
    """(0, values) after rounding, missing and range policies, or (1 + position of the first faulty input, None).

    Missing is tested before the range: NaN never clamps, an infinity does.
    """
    rounded = ROUND[model.arithmetic]
    if len(inputs) != len(model.inputs):
        raise ValueError("%s takes %d inputs, found %d" % (model.name, len(model.inputs), len(inputs)))
    values = []
    for position in range(len(model.inputs)):
        entry = model.inputs[position]
        value = rounded(float(inputs[position]))
        if value != value:
            if entry.missing != "typical":
                return 1 + position, None
            value = entry.typical
        if value < entry.low or value > entry.high:
            if entry.outside != "clamp":
                return 1 + position, None
            value = entry.low if value < entry.low else entry.high
        if entry.levels and value != int(value):
            return 1 + position, None
        values.append(value)
    return 0, values


def scores(model, values):  # type: ignore[no-untyped-def]
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


def check_inputs(model, inputs):  # type: ignore[no-untyped-def]
    """0, or 1 + the position of the first input whose policy makes it a fault."""
    return prepared(model, inputs)[0]


def log_odds(model, inputs):  # type: ignore[no-untyped-def]
    """Log-odds of the event (two classes); NaN on a fault."""
    fault, values = prepared(model, inputs)
    return NAN if fault else scores(model, values)[0]


def probability(model, inputs):  # type: ignore[no-untyped-def]
    """Probability of the event (two classes); NaN on a fault."""
    fault, values = prepared(model, inputs)
    if fault:
        return NAN
    return logistic(scores(model, values)[0], model.exponential, ROUND[model.arithmetic])


def decide(model, inputs):  # type: ignore[no-untyped-def]
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
