"""Every number that a device carries, in one order: that of the tables' CRC-32."""

from __future__ import annotations

from collections.abc import Iterator

from runtime_min.model import SealedModel


def device_numbers(sealed: SealedModel) -> Iterator[tuple[str, float]]:
    """(place in the file, number): lows, highs, typical values, intercepts, data, shifts, weights, thresholds.

    Then the exponential's constants, or in integers the table's drop, step and nodes.
    """
    for key in ("low", "high", "typical"):
        for position, entry in enumerate(sealed.inputs):
            value = getattr(entry, key)
            if value is not None:
                yield f"model.inputs[{position}].{key}", value
    for k, intercept in enumerate(sealed.intercepts):
        yield f"model.intercepts[{k}]", intercept
    for position, term in enumerate(sealed.terms):
        if term.datum is not None:
            yield f"model.terms[{position}].datum", term.datum
    for position, term in enumerate(sealed.terms):
        if term.shift is not None:
            yield f"model.terms[{position}].shift", term.shift
    for k in range(len(sealed.intercepts)):
        for position, term in enumerate(sealed.terms):
            for column, weight in enumerate(term.weights[k] if k < len(term.weights) else ()):
                yield f"model.terms[{position}].weights[{k}][{column}]", weight
    yield "model.decision.low", sealed.decision.low
    yield "model.decision.high", sealed.decision.high
    if sealed.table is not None:
        yield "model.table.drop", sealed.table.drop
        yield "model.table.step", sealed.table.step
        for position, node in enumerate(sealed.table.nodes):
            yield f"model.table.nodes[{position}]", node
    exponential = sealed.exponential
    if exponential is not None:
        for key in ("inv_ln2", "ln2_high", "ln2_low", "floor"):
            yield f"model.exponential.{key}", getattr(exponential, key)
        for position, value in enumerate(exponential.coefficients):
            yield f"model.exponential.coefficients[{position}]", value
