"""HANDOFF.md: the model for an engineer of another language, in numbers and in words."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from fractions import Fraction
from functools import lru_cache

from jinja2 import Environment, PackageLoader, StrictUndefined, Template

from export.coefficients import coefficients, coefficients_csv, one_line
from export.targets import TARGETS, Vector
from export.targets.table.layout import layout
from export.vector_files import decimal_text, forms_of
from export.worked_example import worked_example
from runtime_min.arithmetic import ACCUMULATOR_BITS, WEIGHT_BITS, from_bits
from runtime_min.integer_score import count_bits, missing_count
from runtime_min.model import INTEGERS, SealedModel
from runtime_min.names import c_position_name, delivered_unit, exact_decimal
from runtime_min.proof import proof

__all__ = ["coefficients_csv", "handoff_md"]

FILE_MEANS = {
    "python": "the model for Python and MicroPython",
    "c": "the model for C99 and C++",
    "onnx": "the model for ONNX, opset 18",
}


def handoff_md(
    sealed: SealedModel, vectors: Sequence[Vector], write: Sequence[str], prevalence: str | None = None
) -> bytes:
    """The text of HANDOFF.md. prevalence: the event's share in the field, where the trained model states one."""
    vector, steps = worked_example(sealed, vectors)
    forms = forms_of(sealed)
    text = _template().render(
        sealed=sealed,
        prevalence=prevalence,
        coefficients=coefficients(sealed),
        example=zip(sealed.inputs, map(forms.inputs.decimal, vector.inputs), strict=True),
        steps=steps,
        decision=vector.expected.decision,
        c_names=[c_position_name(entry) for entry in sealed.inputs],
        passed_as=lambda entry: delivered_unit(entry) or "a number",
        passed_unit=lambda entry: "counts" if entry.counts else delivered_unit(entry),
        meaning=_meaning(sealed, vector),
        deliveries=list(_deliveries(sealed)),
        assumed=[entry.name for entry in sealed.about.request.inputs if entry.assumed and not entry.levels],
        number=forms.log_odds.decimal,
        files=[
            (FILE_MEANS.get(target.name, f"the {target.name} artefact"), target.file(sealed))
            for target in TARGETS.values()
            if target.name in write
        ],
        table=layout(sealed) if "table" in write else None,
        table_value=lambda value: str(int(value)) if sealed.table else decimal_text(value, sealed.arithmetic),
        **(_integer_words(sealed) if sealed.arithmetic in INTEGERS else _float_words(sealed)),
    )
    return text.encode()


def _float_words(sealed: SealedModel) -> dict[str, object]:
    digits = 8 if sealed.arithmetic == "binary32" else 16
    return {
        "degree": len(sealed.exponential.coefficients) - 1 if sealed.exponential else 0,
        "bits": f"the {digits} hexadecimal digits of the number, most significant first",
    }


def _integer_words(sealed: SealedModel) -> dict[str, object]:
    accumulator = ACCUMULATOR_BITS[sealed.arithmetic]
    return {
        "bits": "hexadecimal digits in the width of the number, most significant first, in two's complement",
        "counts": count_bits(sealed),
        "missing": missing_count(sealed),
        "accumulator": accumulator,
        "weights": WEIGHT_BITS[sealed.arithmetic],
        "least": -(2 ** (accumulator - 1)),
        "proof": proof(sealed),
    }


def _meaning(sealed: SealedModel, vector: Vector) -> str:
    """What the integers of the worked example mean; nothing in floating point."""
    if sealed.accumulator_shift is None:
        return ""
    results = vector.expected.log_odds[0], vector.expected.probability[0]
    z, chance = (from_bits(bits, sealed.arithmetic) for bits in results)
    shift = sealed.accumulator_shift
    return f" z / 2^{shift} is {z / 2**shift:.6g} in log-odds, and the probability {chance / 2**15:.6g}."


def _deliveries(sealed: SealedModel) -> Iterator[str]:
    """How a value becomes what is passed, for each input that is not passed as it is."""
    for entry in sealed.inputs:
        unit = f" {entry.unit}" if entry.unit else ""
        if entry.counts is not None:
            gain, offset = (exact_decimal(Fraction(text)) for text in (entry.counts.gain, entry.counts.offset))
            sign = "signed" if entry.counts.signed else "unsigned"
            whose = "the scaling that was chosen for it" if entry.counts.chosen else "the device's own counts"
            less = f"value + {offset[1:]}" if offset.startswith("-") else f"value − {offset}"
            yield (
                f"{entry.name}: {whose}, {sign}, of {entry.counts.bits} bits: value = {offset} + {gain} · count{unit}, "
                f"count = round(({less}) / {gain})."
            )
        elif entry.origin is not None:
            origin = exact_decimal(Fraction(entry.origin))
            yield f"{entry.name}: the value less {origin}{unit}, subtracted before it becomes a {sealed.arithmetic}."


@lru_cache(maxsize=1)
def _template() -> Template:
    environment = Environment(
        loader=PackageLoader("export", "."),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["md"] = markdown_text
    return environment.get_template("handoff.md.jinja")


def markdown_text(text: str) -> str:
    """Text from a plan as Markdown that shows it and does nothing else."""
    return re.sub(r"([\\`*_{}\[\]<>()#+!|~&$-])", r"\\\1", one_line(text))
