"""The worked example of HANDOFF.md: one row of inputs, step by step as the reference scorer computes it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import cast

from export.coefficients import weight_form
from export.targets import Vector
from export.vector_files import Form, forms_of
from runtime_min import arithmetic, score
from runtime_min.model import INTEGERS, SealedModel, Table


@dataclass(frozen=True)
class Step:
    """One line: what is computed, the value after it, and its bits."""

    what: str
    value: str
    bits: str


def worked_example(sealed: SealedModel, vectors: Sequence[Vector]) -> tuple[Vector, tuple[Step, ...]]:
    """The first random vector that is no fault, and its steps."""
    vector = next(v for v in vectors if v.kind == "random" and v.expected.fault == 0)
    values = score.prepared(sealed, vector.inputs)[1]
    steps = (_integer_steps if sealed.arithmetic in INTEGERS else _float_steps)(sealed, values)
    return vector, tuple(Step(what, form.decimal(value), form.bits(value)) for what, value, form in steps)


def _float_steps(sealed: SealedModel, values: Sequence[float]) -> Iterator[tuple[str, float, Form]]:
    rounded, form = arithmetic.ROUND[sealed.arithmetic], forms_of(sealed).log_odds
    z = sealed.intercepts[0]
    yield "z = intercept", z, form
    for term in sealed.terms:
        name, value = sealed.inputs[term.of[0]].name, values[term.of[0]]
        if term.form == "level":
            z = rounded(z + term.weights[0][int(value)])
            yield f"z + weight of {name}, level {int(value)}", z, form
            continue
        above = "" if term.datum is None else " above its datum"
        if term.datum is not None:
            value = rounded(value - term.datum)
            yield f"{name} − datum", value, form
        product = rounded(term.weights[0][0] * value)
        yield f"weight · {name}{above}", product, form
        z = rounded(z + product)
        yield "z + that", z, form
    if sealed.exponential is not None:
        yield "probability", arithmetic.logistic(z, sealed.exponential, rounded), form


def _integer_steps(sealed: SealedModel, values: Sequence[float]) -> Iterator[tuple[str, float, Form]]:
    forms, table = forms_of(sealed), cast(Table, sealed.table)
    accumulator = forms.log_odds
    z = int(sealed.intercepts[0])
    yield "z = intercept", z, accumulator
    for term in sealed.terms:
        name, value = sealed.inputs[term.of[0]].name, int(values[term.of[0]])
        if term.form == "level":
            z += int(term.weights[0][value])
            yield f"z + weight of {name}, level {value}", z, accumulator
            continue
        weight = int(term.weights[0][0])
        yield f"{name} − datum", value - int(term.datum or 0), forms.inputs
        product = weight * (value - int(term.datum or 0))
        yield f"that · weight {weight_form(sealed).decimal(weight)}", product, accumulator
        product *= 2 ** int(term.shift or 0)
        yield f"that shifted left by {term.shift}", product, accumulator
        z += product
        yield "z + that", z, accumulator
    a = abs(z) >> table.drop
    yield "a = |z| without its last bits", a, accumulator
    i = a >> table.step
    yield "i, the node before it", i, accumulator
    if i < len(table.nodes) - 1:
        yield "f, how far beyond", a & (2**table.step - 1), accumulator
    yield "probability in units of 2^-15", score.outputs(sealed, values)[2][0], forms.probability
