"""vectors.csv and witness.csv: to text and back.

Every number stands in decimal (the shortest that reads back to the same number) and, in vectors.csv, as raw bits in
hexadecimal. Reading holds the two against each other, so that neither can be edited alone.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from export.targets import Output, Vector
from runtime_min import arithmetic
from runtime_min.errors import FileError, Problem
from runtime_min.integer_score import count_bits
from runtime_min.model import INTEGERS, SealedModel, TrainedModel

_RESULTS = ("fault", "log_odds", "log_odds_bits", "probability", "probability_bits", "decision")


@dataclass(frozen=True)
class Form:
    """How a number is written: one of a floating-point `kind`, or (kind "") an integer, signed or not, of `width` bits.

    Bits are `width` / 4 hexadecimal digits, most significant first; a signed integer is in two's complement.
    """

    kind: str
    width: int
    signed: bool = True

    def decimal(self, value: float) -> str:
        """The number in decimal."""
        return decimal_text(value, self.kind) if self.kind else str(int(value))

    def bits(self, value: float) -> str:
        """The number's bits."""
        raw = arithmetic.raw_bits(value, self.kind) if self.kind else int(value) & ((1 << self.width) - 1)
        return f"{raw:0{self.width // 4}X}"

    def read(self, bits: str) -> float:
        """The number of these bits. Raises ValueError where they are no number of this width."""
        if len(bits) != self.width // 4:
            raise ValueError(f"found {bits}, expected {self.width // 4} hexadecimal digits")
        raw = int(bits, 16)
        if self.kind:
            return arithmetic.from_bits(raw, self.kind)
        return raw - (1 << self.width) if self.signed and raw >> (self.width - 1) else raw


@dataclass(frozen=True)
class Forms:
    """How a model's inputs, log-odds and probabilities are written."""

    inputs: Form
    log_odds: Form
    probability: Form


def forms_of(sealed: SealedModel) -> Forms:
    """Floats; or counts, the accumulator and 16 bits without a sign."""
    if sealed.arithmetic in INTEGERS:
        accumulator = Form("", arithmetic.ACCUMULATOR_BITS[sealed.arithmetic])
        return Forms(Form("", count_bits(sealed)), accumulator, Form("", 16, signed=False))
    floats = Form(sealed.arithmetic, 32 if sealed.arithmetic == "binary32" else 64)
    return Forms(floats, floats, floats)


def decimal_text(value: float, kind: str) -> str:
    """The shortest decimal that reads back to the same number of the arithmetic; "nan", "inf", "-inf"."""
    if not math.isfinite(value):
        return repr(value)
    if kind == "binary32":
        for digits in range(1, 10):
            text = f"{value:.{digits}g}"
            if arithmetic.round_binary32(float(text)) == value:
                return _plain(text)
    return _plain(repr(value))


def _plain(text: str) -> str:
    """`1e-05` as `1e-5`, and always a point or an exponent, so that it reads as a real number."""
    mantissa, mark, exponent = text.partition("e")
    if mark:
        return f"{mantissa}e{int(exponent)}"
    return text if "." in text else text + ".0"


def vectors_csv(sealed: SealedModel, vectors: Sequence[Vector]) -> bytes:
    """The text of vectors.csv."""
    forms = forms_of(sealed)
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(_header(sealed))
    for vector in vectors:
        row: list[str | int] = [vector.kind]
        for value in vector.inputs:
            row += [forms.inputs.decimal(value), forms.inputs.bits(value)]
        row.append(vector.expected.fault)
        for form, bits in (
            (forms.log_odds, vector.expected.log_odds[0]),
            (forms.probability, vector.expected.probability[0]),
        ):
            value = arithmetic.from_bits(bits, sealed.arithmetic)
            row += [form.decimal(value), form.bits(value)]
        writer.writerow([*row, vector.expected.decision])
    return out.getvalue().encode()


def _header(sealed: SealedModel) -> list[str]:
    inputs = [name for entry in sealed.inputs for name in (entry.name, f"{entry.name}_bits")]
    return ["kind", *inputs, *_RESULTS]


def read_vectors(sealed: SealedModel, path: Path) -> tuple[Vector, ...]:
    """The vectors in a file. Raises FileError with every line that is not what `vectors_csv` writes."""
    problems: list[Problem] = []
    vectors: list[Vector] = []
    try:
        rows = list(csv.reader(io.StringIO(path.read_bytes().decode("ascii"), newline=""), strict=True))
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise FileError(Problem(str(path), f"cannot be read ({error})", "take it from the release again")) from None
    header = _header(sealed)
    if not rows or rows[0] != header:
        raise FileError(Problem(f"{path}: line 1", "found other columns than this model's", "take the file again"))
    for line, row in enumerate(rows[1:], 2):
        where = f"{path}: line {line}"
        if len(row) != len(header):
            problems.append(Problem(where, f"found {len(row)} fields", f"expected {len(header)}"))
            continue
        try:
            vectors.append(_vector(sealed, row))
        except ValueError as error:
            problems.append(Problem(where, str(error), "take the file from the release again"))
    if problems:
        raise FileError(problems)
    return tuple(vectors)


def _vector(sealed: SealedModel, row: list[str]) -> Vector:
    forms, width = forms_of(sealed), len(sealed.inputs)

    def number(form: Form, at: int) -> float:
        value = form.read(row[at + 1])
        if (form.decimal(value), form.bits(value)) != (row[at], row[at + 1]):
            raise ValueError(f"the decimal {row[at]} and the bits {row[at + 1]} are two different numbers")
        return value

    inputs = tuple(number(forms.inputs, 1 + 2 * position) for position in range(width))
    at = 1 + 2 * width
    results = number(forms.log_odds, at + 1), number(forms.probability, at + 3)
    log_odds, probability = ((arithmetic.raw_bits(value, sealed.arithmetic),) for value in results)
    return Vector(row[0], inputs, Output(int(row[at]), log_odds, probability, int(row[at + 5])))


def witness_csv(trained: TrainedModel) -> bytes:
    """The text of witness.csv: inputs, log-odds as training computed them, and the bound of that computation."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([*(entry.name for entry in trained.inputs), "log_odds", "bound"])
    for row in trained.witness:
        writer.writerow([repr(value) for value in (*row.inputs, row.log_odds[0], row.bounds[0])])
    return out.getvalue().encode()
