"""Sealed model in integers -> the parts of its C header. Derives no model number; decides which parts a model needs.

All that the header reads of an input stands in one row of a table, in the order in which it is read: a pointer that
goes on through the table is the cheapest way to it on small parts.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from fractions import Fraction

from export.targets import SelfTest, Vector
from export.targets.c import lexical
from export.targets.c.scalings import scalings
from runtime_min.arithmetic import ACCUMULATOR_BITS, from_bits
from runtime_min.integer_score import count_bits, missing_count
from runtime_min.model import SealedModel
from runtime_min.proof import Step, proof

PARTS = ("integer_interface.h.jinja", "integer_scoring.h.jinja", "integer_self_test.h.jinja")
HALVES = "HALVES"  # the macro that chooses the product in halves
LEVELS = -1  # the shift of an input with levels, which has none
ADDED = "shifted product"
OTHER_STEPS = {
    "intercept": "intercept",
    "threshold": "thresholds",
    "between two nodes": "between two nodes of the table",
}
COLUMNS = {
    "low": "the lowest count",
    "high": "the highest",
    "typical": "what stands in for a missing one (NAME_MISSING: nothing)",
    "clamp": "1 where others are clamped",
    "shift": "the shift of its product",
    "datum": "the datum",
    "weight": "the weight of a count",
}


def integer_context(sealed: SealedModel, self_test: SelfTest) -> dict[str, object]:
    """What the templates `PARTS` need beside the model."""
    names = lexical.input_names(sealed)
    accumulator = ACCUMULATOR_BITS[sealed.arithmetic]
    columns = _columns(sealed)
    has_levels = any(entry.levels for entry in sealed.inputs)
    has_numbers = "datum" in columns
    table = sealed.table
    assert table is not None  # a sealed model is valid
    prefix = sealed.name.upper()
    words = dict(COLUMNS, weight=COLUMNS["weight"] if has_numbers else "the position of its first weight")
    listed = "; ".join(words[column].replace("NAME", prefix) for column in columns)
    return {
        "names": names,
        "width": max(len(f"{sealed.name}_IN_{name},") for name in names),
        "columns": columns,
        "column_words": lexical.comment_lines(f"Of each input: {listed}."),
        "enumerators": lexical.wrapped([f"{prefix}_{name.upper()}" for name in columns], "    ", "    "),
        "rows": _rows(sealed, columns, names),
        "any_clamp": any(entry.outside == "clamp" for entry in sealed.inputs),
        "guard_missing": any(entry.outside == "clamp" and entry.typical is None for entry in sealed.inputs),
        "has_levels": has_levels,
        "has_numbers": has_numbers,
        "mixed": has_levels and has_numbers,
        "level_weights": [
            lexical.integer(int(weight), accumulator)
            for term in sealed.terms
            if term.form == "level"
            for weight in term.weights[0]
        ],
        "level_names": [
            f"{names[term.of[0]]}: {level}"
            for term in sealed.terms
            if term.form == "level"
            for level in sealed.inputs[term.of[0]].levels
        ],
        "one_threshold": sealed.decision.low == sealed.decision.high,
        "nodes": [str(node) for node in table.nodes],
        "part": "uint16_t" if table.step <= 16 else "uint32_t",
        "count_bits": count_bits(sealed),
        "sum_bits": accumulator,
        "missing": lexical.integer(missing_count(sealed), count_bits(sealed)),
        "no_log_odds": lexical.integer(-(1 << (accumulator - 1)), accumulator),
        "real_threshold": lambda units: f"{float(Fraction(units) / 2 ** (sealed.accumulator_shift or 0)):.6g}",
        "can_halve": can_halve(sealed),
        "scalings": scalings(sealed),
        "most": (1 << (count_bits(sealed) - 1)) - 1,
        "lpm": _lpm,
        "proof": proof_lines(sealed),
        "tests": [row_words(vector, sealed) for vector in self_test.vectors],
    }


def row_words(vector: Vector, sealed: SealedModel) -> list[str]:
    """One test row in words as wide as a count: inputs, log-odds (the low word first), probability, fault, decision."""
    bits = count_bits(sealed)
    z = int(from_bits(vector.expected.log_odds[0], sealed.arithmetic))
    parts = [z] if bits == ACCUMULATOR_BITS[sealed.arithmetic] else [_signed(z, bits), z >> bits]
    answers = [*parts, _signed(vector.expected.probability[0] & 0xFFFF, bits), vector.expected.fault]
    numbers = [*map(int, vector.inputs), *answers, vector.expected.decision]
    return [lexical.integer(number, bits) for number in numbers]


def proof_lines(sealed: SealedModel) -> Iterator[str]:
    """The proof as a table: the largest magnitude after each step of each input, and what its type holds."""
    steps = proof(sealed)
    heads = {"count": "count", "count - datum": "less datum", "product": "product", ADDED: "added", "sum": "sum"}
    found: dict[str, dict[str, Step]] = {}
    for step in steps:
        what = ADDED if step.what == "weight of a level" else step.what
        found.setdefault(step.of, {})[what] = step
    rows = [["", *heads.values()]]
    for name, entry in zip(lexical.input_names(sealed), sealed.inputs, strict=True):
        of = found[entry.name]
        rows.append([name, *(str(of[head].largest) if head in of else "" for head in heads)])
    bits = {head: next((of[head].bits for of in found.values() if head in of), None) for head in heads}
    rows.append(["of", *("" if width is None else str(2 ** (width - 1) - 1) for width in bits.values())])
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    for row in rows:
        yield "    " + "  ".join([row[0].ljust(widths[0]), *map(str.rjust, row[1:], widths[1:])])
    yield ""
    for what, shown in OTHER_STEPS.items():
        of_it = [step for step in steps if step.what == what]
        yield f"    {shown}: {max(step.largest for step in of_it)} of {2 ** (of_it[0].bits - 1) - 1}"


def can_halve(sealed: SealedModel) -> bool:
    """Whether int32 products may be made of two products of 32 bits: no count is 2^15 or more from its datum."""
    if sealed.arithmetic != "int32":
        return False
    distances = [step.largest for step in proof(sealed) if step.what == "count - datum"]
    return bool(distances) and max(distances) < 1 << 15


def _columns(sealed: SealedModel) -> list[str]:
    """What differs from input to input, and so stands in the table."""
    numbers = [term for term in sealed.terms if term.form == "value"]
    clamped = [entry.outside == "clamp" for entry in sealed.inputs]
    there = {
        "low": True,
        "high": True,
        "typical": any(entry.typical is not None for entry in sealed.inputs),
        "clamp": any(clamped) and not all(clamped),
        "shift": any(term.shift for term in numbers) or 0 < len(numbers) < len(sealed.terms),
        "datum": bool(numbers),
        "weight": True,
    }
    return [column for column, needed in there.items() if needed]


def _rows(sealed: SealedModel, columns: Sequence[str], names: Sequence[str]) -> str:
    """The table's rows as C: numbers in columns, with each input's name."""
    bits = count_bits(sealed)
    first = 0
    rows = []
    for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
        cells = {
            "low": entry.low,
            "high": entry.high,
            "typical": missing_count(sealed) if entry.typical is None else entry.typical,
            "clamp": entry.outside == "clamp",
            "shift": LEVELS if term.shift is None else term.shift,
            "datum": term.datum or 0,
            "weight": first if term.form == "level" else term.weights[0][0],
        }
        first += len(term.weights[0]) if term.form == "level" else 0
        rows.append([lexical.integer(int(cells[column]), bits) for column in columns])
    widths = [max(len(row[column]) for row in rows) for column in range(len(columns))]
    lines = [", ".join(map(str.rjust, row, widths)) for row in rows]
    return lexical.table(lines, list(names))


def _signed(number: int, bits: int) -> int:
    """The last `bits` bits of a number, as a signed integer."""
    half = 1 << (bits - 1)
    return (number + half) % (2 * half) - half


def _lpm(bits: int, further: bool) -> str:
    """AVR's instructions that read a number from program memory; `further`: the pointer then stands behind it."""
    last = bits // 8 - 1
    steps = (f"lpm %{'ABCD'[k]}0, Z{'+' if k < last or further else ''}" for k in range(last + 1))
    return "\\n\\t".join(steps)
