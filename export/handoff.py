"""coefficients.csv and HANDOFF.md: the model for an engineer of another language, in numbers and in words."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass

from jinja2 import Environment, PackageLoader, StrictUndefined

from export.targets import TARGETS, Vector
from export.vector_files import decimal_text, hex_bits
from runtime_min import arithmetic, score
from runtime_min.model import SealedModel
from runtime_min.names import c_input_name


@dataclass(frozen=True)
class Coefficient:
    """One device number: what it is, the input and level it belongs to, its unit, in decimal and raw bits."""

    what: str
    input: str
    level: str
    unit: str
    decimal: str
    bits: str


def coefficients(sealed: SealedModel) -> tuple[Coefficient, ...]:
    """Every number of the sealed model that another implementation needs, in the order in which it is used."""

    def entry(what: str, value: float, name: str = "", level: str = "", unit: str = "") -> Coefficient:
        bits = hex_bits(arithmetic.raw_bits(value, sealed.arithmetic), sealed.arithmetic)
        return Coefficient(what, name, level, unit, decimal_text(value, sealed.arithmetic), bits)

    rows = []
    for item in sealed.inputs:
        rows.append(entry("low", item.low, item.name, unit=item.unit))
        rows.append(entry("high", item.high, item.name, unit=item.unit))
        if item.typical is not None:
            rows.append(entry("typical", item.typical, item.name, unit=item.unit))
    rows.append(entry("intercept", sealed.intercepts[0], unit="log-odds"))
    for term in sealed.terms:
        item = sealed.inputs[term.of[0]]
        if term.datum is not None:
            rows.append(entry("datum", term.datum, item.name, unit=item.unit))
        if term.form == "level":
            for level, weight in zip(item.levels, term.weights[0], strict=True):
                rows.append(entry("weight", weight, item.name, level, "log-odds"))
        else:
            unit = f"log-odds per {item.unit}" if item.unit else "log-odds per unit"
            rows.append(entry("weight", term.weights[0][0], item.name, unit=unit))
    rows.append(entry("threshold low", sealed.decision.low, unit="log-odds"))
    rows.append(entry("threshold high", sealed.decision.high, unit="log-odds"))
    constants = sealed.exponential
    rows.append(entry("exp: 1/ln 2", constants.inv_ln2))
    rows.append(entry("exp: ln 2, high part", constants.ln2_high))
    rows.append(entry("exp: ln 2, low part", constants.ln2_low))
    rows.append(entry("exp: zero below", constants.floor))
    rows += [entry(f"exp: c{power}", value) for power, value in enumerate(constants.coefficients)]
    return tuple(rows)


def coefficients_csv(sealed: SealedModel) -> bytes:
    """The text of coefficients.csv."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["what", "input", "level", "unit", "decimal", "bits"])
    for row in coefficients(sealed):
        shown = (row.what, row.input, row.level, row.unit, row.decimal, row.bits)
        writer.writerow([_one_line(text) for text in shown])
    return out.getvalue().encode()


@dataclass(frozen=True)
class Step:
    """One line of the worked example: what is computed and the value after it."""

    what: str
    value: str
    bits: str


def worked_example(sealed: SealedModel, vectors: Sequence[Vector]) -> tuple[Vector, tuple[Step, ...]]:
    """The first random vector that is no fault, step by step as the reference scorer computes it."""
    vector = next(v for v in vectors if v.kind == "random" and v.expected.fault == 0)
    rounded = arithmetic.ROUND[sealed.arithmetic]
    steps: list[Step] = []

    def step(what: str, value: float) -> float:
        bits = hex_bits(arithmetic.raw_bits(value, sealed.arithmetic), sealed.arithmetic)
        steps.append(Step(what, decimal_text(value, sealed.arithmetic), bits))
        return value

    values = score.prepared(sealed, vector.inputs)[1]
    z = step("z = intercept", sealed.intercepts[0])
    for term in sealed.terms:
        item, value = sealed.inputs[term.of[0]], values[term.of[0]]
        if term.form == "level":
            z = step(f"z + weight of {item.name}, level {int(value)}", rounded(z + term.weights[0][int(value)]))
            continue
        if term.datum is not None:
            value = step(f"{item.name} − datum", rounded(value - term.datum))
        product = step(f"weight · {item.name}" + (" above its datum" if term.datum is not None else ""),
                       rounded(term.weights[0][0] * value))
        z = step("z + that", rounded(z + product))
    step("probability", arithmetic.logistic(z, sealed.exponential, rounded))
    return vector, tuple(steps)


def handoff_md(sealed: SealedModel, vectors: Sequence[Vector], write: Sequence[str]) -> bytes:
    """The text of HANDOFF.md."""
    environment = Environment(
        loader=PackageLoader("export", "."), undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["md"] = markdown_text
    vector, steps = worked_example(sealed, vectors)
    text = environment.get_template("handoff.md.jinja").render(
        sealed=sealed,
        coefficients=coefficients(sealed),
        example=zip(sealed.inputs, (decimal_text(value, sealed.arithmetic) for value in vector.inputs), strict=True),
        steps=steps,
        decision=vector.expected.decision,
        c_names=[c_input_name(entry.name, entry.unit) for entry in sealed.inputs],
        degree=len(sealed.exponential.coefficients) - 1,
        number=lambda value: decimal_text(value, sealed.arithmetic),
        files=[(target.name, target.file(sealed)) for target in TARGETS.values() if target.name in write],
        bits=8 if sealed.arithmetic == "binary32" else 16,
    )
    return text.encode()


def markdown_text(text: str) -> str:
    """Text from a plan as Markdown that shows it and does nothing else."""
    return re.sub(r"([\\`*_{}\[\]<>()#+!|~&$-])", r"\\\1", _one_line(text))


def _one_line(text: str) -> str:
    """Control and format characters (line ends, right-to-left marks) as \\u escapes; all else as it is."""
    return "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)
