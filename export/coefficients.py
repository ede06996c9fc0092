"""coefficients.csv: every number of a sealed model that another implementation needs."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

from export.vector_files import Form, forms_of
from runtime_min import arithmetic
from runtime_min.model import INTEGERS, Input, SealedModel, Term
from runtime_min.names import delivered_unit, exact_decimal


@dataclass(frozen=True)
class Coefficient:
    """One number: what it is, the input and level it belongs to, its unit, in decimal and raw bits.

    What the device does not carry, the map between its counts and the input's unit, has no bits.
    """

    what: str
    input: str
    level: str
    unit: str
    decimal: str
    bits: str


def coefficients(sealed: SealedModel) -> tuple[Coefficient, ...]:
    """Every number, in the order in which it is used."""
    return tuple(_inputs(sealed)) + tuple(_line(sealed)) + tuple(_probability(sealed))


def coefficients_csv(sealed: SealedModel) -> bytes:
    """The text of coefficients.csv."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["what", "input", "level", "unit", "decimal", "bits"])
    for row in coefficients(sealed):
        shown = (row.what, row.input, row.level, row.unit, row.decimal, row.bits)
        writer.writerow([one_line(text) for text in shown])
    return out.getvalue().encode()


def one_line(text: str) -> str:
    """Control and format characters (line ends, right-to-left marks) as \\u escapes; all else as it is."""
    return "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)


def weight_form(sealed: SealedModel) -> Form:
    """How the weight of a number is written; a level's weight is as wide as log-odds."""
    if sealed.arithmetic in INTEGERS:
        return Form("", arithmetic.WEIGHT_BITS[sealed.arithmetic])
    return forms_of(sealed).inputs


def _inputs(sealed: SealedModel) -> Iterator[Coefficient]:
    form = forms_of(sealed).inputs
    for entry in sealed.inputs:
        yield from _maps(entry)
        for what, value in (("low", entry.low), ("high", entry.high), ("typical", entry.typical)):
            if value is not None:
                yield Coefficient(what, entry.name, "", delivered_unit(entry), form.decimal(value), form.bits(value))


def _maps(entry: Input) -> Iterator[Coefficient]:
    """The input's unit and what the device delivers: value = origin + delivered, or value = offset + gain * count."""
    if entry.counts is not None:
        gain, offset = (exact_decimal(Fraction(text)) for text in (entry.counts.gain, entry.counts.offset))
        yield Coefficient("gain", entry.name, "", f"{entry.unit} per count".lstrip(), gain, "")
        yield Coefficient("offset", entry.name, "", entry.unit, offset, "")
    elif entry.origin is not None:
        yield Coefficient("origin", entry.name, "", entry.unit, exact_decimal(Fraction(entry.origin)), "")


def _line(sealed: SealedModel) -> Iterator[Coefficient]:
    forms, unit = forms_of(sealed), log_odds_unit(sealed)

    def log_odds(what: str, value: float, name: str = "", level: str = "") -> Coefficient:
        return Coefficient(what, name, level, unit, forms.log_odds.decimal(value), forms.log_odds.bits(value))

    yield log_odds("intercept", sealed.intercepts[0])
    for term in sealed.terms:
        entry = sealed.inputs[term.of[0]]
        if term.form == "level":
            for level, weight in zip(entry.levels, term.weights[0], strict=True):
                yield log_odds("weight", weight, entry.name, level)
            continue
        if term.datum is not None:
            shown, bits = forms.inputs.decimal(term.datum), forms.inputs.bits(term.datum)
            yield Coefficient("datum", entry.name, "", delivered_unit(entry), shown, bits)
        weight, form = term.weights[0][0], weight_form(sealed)
        yield Coefficient(
            "weight", entry.name, "", _weight_unit(sealed, entry, term), form.decimal(weight), form.bits(weight)
        )
        if term.shift is not None:
            yield Coefficient("shift left", entry.name, "", "bits", str(term.shift), f"{term.shift:02X}")
    yield log_odds("threshold low", sealed.decision.low)
    yield log_odds("threshold high", sealed.decision.high)


def log_odds_unit(sealed: SealedModel) -> str:
    """Of intercept, level weights, thresholds and log-odds."""
    return "log-odds" if sealed.accumulator_shift is None else f"2^-{sealed.accumulator_shift} log-odds"


def _weight_unit(sealed: SealedModel, entry: Input, term: Term) -> str:
    per = "count" if entry.counts is not None else entry.unit or "unit"
    if sealed.accumulator_shift is None:
        return f"log-odds per {per}"
    return f"2^{(term.shift or 0) - sealed.accumulator_shift} log-odds per {per}"


def _probability(sealed: SealedModel) -> Iterator[Coefficient]:
    constants, table, forms = sealed.exponential, sealed.table, forms_of(sealed)
    if constants is not None:
        numbers = [
            ("exp: 1/ln 2", constants.inv_ln2),
            ("exp: ln 2, high part", constants.ln2_high),
            ("exp: ln 2, low part", constants.ln2_low),
            ("exp: zero below", constants.floor),
            *((f"exp: c{power}", value) for power, value in enumerate(constants.coefficients)),
        ]
        for what, value in numbers:
            yield Coefficient(what, "", "", "", forms.probability.decimal(value), forms.probability.bits(value))
    if table is not None:
        yield Coefficient("table: drop", "", "", "bits", str(table.drop), f"{table.drop:02X}")
        yield Coefficient("table: step", "", "", "bits", str(table.step), f"{table.step:02X}")
        for position, node in enumerate(table.nodes):
            shown, bits = forms.probability.decimal(node), forms.probability.bits(node)
            yield Coefficient(f"table: T[{position}]", "", "", "2^-15", shown, bits)
