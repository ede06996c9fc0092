"""vectors.csv and witness.csv: to text and back.

Every number stands in decimal (the shortest that reads back to the same number) and, in vectors.csv, as raw bits in
hexadecimal. Reading holds the two against each other, so that neither can be edited alone.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from pathlib import Path

from export.targets import Output, Vector
from runtime_min import arithmetic
from runtime_min.errors import FileError, Problem
from runtime_min.model import SealedModel, TrainedModel

_RESULTS = ("fault", "log_odds", "log_odds_bits", "probability", "probability_bits", "decision")


def hex_bits(bits: int, kind: str) -> str:
    """Raw bits as 8 (binary32) or 16 (binary64) hexadecimal digits."""
    return f"{bits:0{8 if kind == 'binary32' else 16}X}"


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
    kind = sealed.arithmetic
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(_header(sealed))
    for vector in vectors:
        row: list[str | int] = [vector.kind]
        for value in vector.inputs:
            row += [decimal_text(value, kind), hex_bits(arithmetic.raw_bits(value, kind), kind)]
        row.append(vector.expected.fault)
        for bits in (vector.expected.log_odds[0], vector.expected.probability[0]):
            row += [decimal_text(arithmetic.from_bits(bits, kind), kind), hex_bits(bits, kind)]
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
            vectors.append(_vector(sealed.arithmetic, row, len(sealed.inputs)))
        except ValueError as error:
            problems.append(Problem(where, str(error), "take the file from the release again"))
    if problems:
        raise FileError(problems)
    return tuple(vectors)


def _vector(kind: str, row: list[str], width: int) -> Vector:
    def number(at: int) -> int:
        bits = int(row[at + 1], 16)
        written = row[at]
        if decimal_text(arithmetic.from_bits(bits, kind), kind) != written:
            raise ValueError(f"the decimal {written} and the bits {row[at + 1]} are two different numbers")
        return bits

    inputs = tuple(arithmetic.from_bits(number(1 + 2 * position), kind) for position in range(width))
    at = 1 + 2 * width
    output = Output(int(row[at]), (number(at + 1),), (number(at + 3),), int(row[at + 5]))
    return Vector(row[0], inputs, output)


def witness_csv(trained: TrainedModel) -> bytes:
    """The text of witness.csv: inputs, log-odds as training computed them, and the bound of that computation."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([*(entry.name for entry in trained.inputs), "log_odds", "bound"])
    for row in trained.witness:
        writer.writerow([repr(value) for value in (*row.inputs, row.log_odds[0], row.bounds[0])])
    return out.getvalue().encode()
