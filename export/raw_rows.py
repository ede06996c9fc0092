"""The rows of a plan read once more, from the files alone, for `optimality`: independent of everything in `trainer`.

Only rows that the trainer took come here, so that nothing is refused: what cannot be read raises what it raises.
"""

from __future__ import annotations

import csv
import hashlib
import importlib
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from runtime_min.canonical import canonical
from runtime_min.model import Request, TrainedModel

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Source:
    """Where the rows are and how the plan splits them. held_out: a share, or a column of 0 and 1; weight and group:
    columns, or None."""

    files: tuple[Path, ...]
    label: str
    held_out: Fraction | str
    seed: int
    weight: str | None = None
    group: str | None = None


@dataclass(frozen=True)
class RawRows:
    """The rows that the plan keeps, in file order. values (n, inputs): levels as positions, NaN where missing; labels
    (n,) class index; weights (n,) > 0; held_out (n,). total and dropped as FittedRows has them; sha256 of the files."""

    values: Floats
    labels: npt.NDArray[np.int64]
    weights: Floats
    held_out: npt.NDArray[np.bool_]
    total: int
    dropped: int
    sha256: str


def raw_rows(trained: TrainedModel, request: Request, source: Source) -> RawRows:
    """All rows of all files, less those with a missing value that is a fault, and those of weight 0."""
    values: list[list[float]] = []
    labels, weights, digests, marks = [], [], [], []
    total = dropped = 0
    for file in source.files:
        for row in _records(file):
            total += 1
            numbers = [_number(row[entry.column], entry.levels) for entry in request.inputs]
            absent = [entry for entry, number in zip(request.inputs, numbers, strict=True) if number != number]
            if any(entry.missing == "fault" for entry in absent):
                dropped += 1
                continue
            weight = 1.0 if source.weight is None else float(row[source.weight])
            if not weight:
                continue
            label = _text(row[source.label])
            parsed = [
                None if number != number else entry.levels[int(number)] if entry.levels else number
                for entry, number in zip(request.inputs, numbers, strict=True)
            ]
            key = [label, *parsed, weight] if source.group is None else [_text(row[source.group])]
            digests.append(hashlib.sha256(canonical([source.seed, *key]).encode()).digest())
            marks.append(isinstance(source.held_out, str) and float(row[source.held_out]) == 1)
            values.append([_clamped(entry, number) for entry, number in zip(request.inputs, numbers, strict=True)])
            labels.append(trained.classes.index(label))
            weights.append(weight)
    held = np.array(marks) if isinstance(source.held_out, str) else _first(digests, source)
    sha256 = _sha256(source.files)
    return RawRows(np.array(values), np.array(labels), np.array(weights), held, total, dropped, sha256)


def _records(file: Path) -> Iterator[dict[str, Any]]:
    """Each row by column name: texts of a CSV, single values of arrays."""
    ending = file.suffix.lower()
    if ending == ".csv":
        with file.open(encoding="utf-8-sig", newline="") as stream:
            yield from csv.DictReader(stream, strict=True)
        return
    if ending == ".npz":
        with np.load(file) as arrays:
            columns = {name: arrays[name].tolist() for name in arrays.files}
    else:
        columns = importlib.import_module("pyarrow.parquet").read_table(file).to_pydict()
    for row in zip(*columns.values(), strict=True):
        yield dict(zip(columns, row, strict=True))


def _text(cell: Any) -> str:
    """A class, level or group as a text; "" where it is missing."""
    if isinstance(cell, bytes):
        return cell.decode()
    if isinstance(cell, str):
        return cell
    if cell is None or cell != cell:
        return ""
    return str(cell) if type(cell) is int else canonical(cell if isinstance(cell, bool) else float(cell))


def _number(cell: Any, levels: Sequence[str]) -> float:
    """A value, or the position of a level; NaN where it is missing."""
    if cell is None or cell == "" or cell != cell:
        return math.nan
    return float(levels.index(_text(cell))) if levels else float(cell)


def _clamped(entry: Any, number: float) -> float:
    if entry.outside != "clamp" or entry.low is None or number != number:
        return number
    return min(max(number, float(Fraction(entry.low))), float(Fraction(entry.high)))


def _first(digests: Sequence[bytes], source: Source) -> npt.NDArray[np.bool_]:
    """True where the SHA-256 comes first.

    Of groups, round(share g) of them, one at least on each side; of rows, as near to round(share n) as equal rows,
    which stay together, allow.
    """
    share = Fraction(source.held_out)
    if not share:
        return np.zeros(len(digests), dtype=bool)
    if source.group is not None:
        names = sorted(set(digests))
        chosen = set(names[: min(max(round(share * len(names)), 1), len(names) - 1)])
    else:
        ordered = sorted(digests)
        ends = [at for at, (one, other) in enumerate(pairwise(ordered), 1) if one != other]
        wanted = round(share * len(ordered))
        chosen = set(ordered[: min(ends, key=lambda end: (abs(end - wanted), end))])
    return np.array([digest in chosen for digest in digests])


def _sha256(files: Sequence[Path]) -> str:
    digests = [hashlib.sha256(file.read_bytes()).hexdigest() for file in files]
    if len(digests) == 1:
        return digests[0]
    return hashlib.sha256("".join(f"{digest}\n" for digest in digests).encode()).hexdigest()
