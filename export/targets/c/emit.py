"""Sealed model -> the C header. Derives no model number; decides only which parts a model needs."""

from __future__ import annotations

import math

from export.targets import SelfTest, Vector
from export.targets.c import lexical
from export.targets.c.emit_integers import PARTS, integer_context, row_words
from export.targets.c.template import fill
from export.vectors import next_to
from runtime_min.model import INTEGERS, SealedModel, Term
from runtime_min.names import delivered_unit

SMALLEST_NORMAL = {"binary32": 2.0**-126, "binary64": 2.0**-1022}
SMALLEST = {"binary32": 2.0**-149, "binary64": 2.0**-1074}


def emit(sealed: SealedModel, self_test: SelfTest) -> bytes:
    """The header `NAME.h`, ASCII.

    Raises ReleaseError where the model's name is none that C takes.
    """
    shared = {"guard": f"{sealed.name.upper()}_H", "crc": f"0x{self_test.crc:08X}UL"}
    if sealed.arithmetic in INTEGERS:
        return fill(PARTS, sealed, **integer_context(sealed, self_test), **shared, **_words_of(sealed))
    kind = sealed.arithmetic
    names = lexical.input_names(sealed)
    clamped = [entry.outside == "clamp" for entry in sealed.inputs]
    typical = [entry.typical is not None for entry in sealed.inputs]
    datum = [term.datum is not None for term in sealed.terms]
    return fill(
        ("interface.h.jinja", "scoring.h.jinja", "self_test.h.jinja"),
        sealed,
        **shared,
        **_words_of(sealed),
        names=names,
        width=max(len(f"{sealed.name}_IN_{name},") for name in names),
        rules=[_rules(sealed.name.upper(), *flags) for flags in zip(clamped, typical, datum, strict=True)],
        clamped=clamped,
        typical=typical,
        datum=datum,
        low=[lexical.number(entry.low, kind) for entry in sealed.inputs],
        high=[lexical.number(entry.high, kind) for entry in sealed.inputs],
        typicals=[lexical.number(entry.typical or 0.0, kind) for entry in sealed.inputs],
        datums=[lexical.number(term.datum or 0.0, kind) for term in sealed.terms],
        levels=[str(len(entry.levels)) for entry in sealed.inputs],
        weights=[lexical.number(weight, kind) for term in sealed.terms for weight in term.weights[0]],
        weight_names=[
            f"{names[term.of[0]]}: {level}" if level else names[term.of[0]]
            for term in sealed.terms
            for level in sealed.inputs[term.of[0]].levels or ("",)
        ],
        subnormal=[names[term.of[0]] for term in sealed.terms if can_be_subnormal(sealed, term)],
        tests=[vector_words(vector, sealed) for vector in self_test.vectors],
    )


def _words_of(sealed: SealedModel) -> dict[str, object]:
    """How inputs and tables are put into words, in every arithmetic."""
    names = lexical.input_names(sealed)
    return {
        "table": lambda cells, labels=names: lexical.table(cells, labels),
        "delivered": delivered_unit,
        "levels_in_words": lambda entry: ", ".join(f"{rank} {level}" for rank, level in enumerate(entry.levels)),
    }


def vector_words(vector: Vector, sealed: SealedModel) -> list[str]:
    """Inputs, log-odds and probability of one row as words of bits, then fault and decision, 16 bits each, in one.

    In integers see `row_words`.
    """
    if sealed.arithmetic in INTEGERS:
        return row_words(vector, sealed)
    kind = sealed.arithmetic
    parts = [lexical.words(value, kind) for value in vector.inputs]
    parts += [lexical.words_of_bits(bits, kind) for bits in (*vector.expected.log_odds, *vector.expected.probability)]
    answers = vector.expected.fault | (vector.expected.decision & 0xFFFF) << 16
    return [word for part in parts for word in part] + [f"0x{answers:08X}UL"]


def can_be_subnormal(sealed: SealedModel, term: Term) -> bool:
    """Whether some reading within the limits makes a product w (x - datum), not 0, below the smallest normal number."""
    if term.form != "value" or term.weights[0][0] == 0:
        return False
    kind = sealed.arithmetic
    low, high = sealed.inputs[term.of[0]].low, sealed.inputs[term.of[0]].high
    datum = term.datum or 0.0
    if low < datum < high:
        nearest = min(datum - next_to(datum, -math.inf, kind), next_to(datum, math.inf, kind) - datum)
    else:
        nearest = min(abs(limit - datum) or SMALLEST[kind] for limit in (low, high))
    return abs(term.weights[0][0]) * nearest < SMALLEST_NORMAL[kind]


def _rules(name: str, clamped: bool, typical: bool, datum: bool) -> str:
    flags = [f"{name}_{flag}" for flag, on in (("CLAMP", clamped), ("TYPICAL", typical), ("DATUM", datum)) if on]
    return " | ".join(flags) or "0"
