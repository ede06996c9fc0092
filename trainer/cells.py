"""Blocks of records -> numbers, one column at a time; what cannot be read becomes a problem, and reading goes on."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from runtime_min.errors import Problem, RowsError
from trainer.plan_checks import decimal_text, listed, shown

PROBLEMS_SHOWN = 20

Floats = npt.NDArray[np.float64]
Record = tuple[int, list[str]]
"""The line on which a record starts, and its fields."""


@dataclass
class Column:
    """One column that the plan uses, and the blocks of it read so far (NaN: missing).

    `codes` is None for a number; else it gives the index of each text, and `grows` lets new texts in. `limits`: what a
    number may not leave. `refusal`: what to do about a text that is not read; `refuse_once`: say it for the first only.
    """

    header: str
    position: int
    refusal: str
    codes: dict[str, int] | None = None
    grows: bool = False
    limits: tuple[Fraction, Fraction] | None = None
    may_be_missing: bool = True
    refuse_once: bool = False
    blocks: list[Floats] = field(default_factory=list)

    def joined(self) -> Floats:
        return np.concatenate(self.blocks)


class Findings:
    """Problems as they are found; the first few of each column are kept, the others counted."""

    def __init__(self, where: str) -> None:
        self._where = where
        self._kept: list[tuple[int, int, Problem]] = []
        self._counts: Counter[int] = Counter()
        self._last: list[Problem] = []

    def add(self, line: int, column: Column | None, found: str, todo: str) -> None:
        position, place = (column.position, f", column {shown(column.header)}") if column else (-1, "")
        self._counts[position] += 1
        if self._counts[position] <= PROBLEMS_SHOWN:
            self._kept.append((line, position, Problem(f"{self._where}: line {line}{place}", found, todo)))

    def count(self, column: Column) -> int:
        return self._counts[column.position]

    def add_last(self, problems: Sequence[Problem]) -> None:
        """Problems after which nothing more can be read."""
        self._last.extend(problems)

    def raise_any(self) -> None:
        first = [problem for _, _, problem in sorted(self._kept)[:PROBLEMS_SHOWN]]
        more = self._counts.total() - len(first)
        if more:
            found = f"found {more} more problem{'s' if more > 1 else ''}"
            first.append(Problem(self._where, found, "mend these first"))
        if first or self._last:
            raise RowsError(first + self._last)


def read_block(block: Sequence[Record], width: int, columns: Sequence[Column], findings: Findings) -> None:
    """Append to each column the numbers of those records in `block` that have `width` fields."""
    whole = [record for record in block if len(record[1]) == width]
    if len(whole) < len(block):
        todo = "give each row one field a column, in quotes where a field holds a comma"
        for line, fields in block:
            if len(fields) != width:
                count = f"{len(fields)} field{'s' if len(fields) > 1 else ''}"
                findings.add(line, None, f"found {count} where the header has {width}", todo)
    lines = [line for line, _ in whole]
    for column in columns:
        cells = [fields[column.position] for _, fields in whole]
        if column.codes is None:
            values = _numbers(lines, cells, column, findings)
        else:
            values = _indexes(lines, cells, column, column.codes, findings)
        if not column.may_be_missing:
            for at in np.flatnonzero([not cell for cell in cells]):
                findings.add(lines[at], column, "found an empty field", "write the class, or remove the row")
        column.blocks.append(values)


def _numbers(lines: list[int], cells: list[str], column: Column, findings: Findings) -> Floats:
    values = _converted(cells)
    for at in np.flatnonzero(~np.isfinite(values)):
        if cells[at]:
            if not (column.refuse_once and findings.count(column)):
                findings.add(lines[at], column, *_not_a_number(cells[at], column.refusal))
            values[at] = np.nan
    if column.limits:
        low, high = column.limits
        # A row is in range when its binary64 lies within the limits rounded to binary64.
        inside = (float(low) <= values) & (values <= float(high))
        for at in np.flatnonzero(~(inside | np.isnan(values))):
            found = f"found {shown_number(values[at])}, outside the range {decimal_text(low)} to {decimal_text(high)}"
            findings.add(lines[at], column, found, 'correct it, widen the range, or write outside = "clamp"')
    return values


def _converted(cells: list[str]) -> Floats:
    """Each cell as binary64; NaN where it is missing or no number."""
    together = "".join(cells)
    # float() reads more than a number in a file may be: 1_000, and the digits of other scripts.
    if together.isascii() and "_" not in together:
        try:
            return np.fromiter(map(float, cells), np.float64, len(cells))
        except ValueError:
            pass
    return np.array([_number(cell) for cell in cells], np.float64)


def _number(cell: str) -> float:
    if not cell.isascii() or "_" in cell:
        return math.nan
    try:
        return float(cell)
    except ValueError:
        return math.nan


def _not_a_number(cell: str, refusal: str) -> tuple[str, str]:
    if cell.strip().lower().lstrip("+-") in ("nan", "inf", "infinity"):
        return f"found {shown(cell)}, not a finite number", "leave the field empty where a value is missing"
    if math.isinf(_number(cell)):
        return f"found {shown(cell)}, too large for binary64", "correct it"
    return f"found {shown(cell)}, not a number", refusal


def _indexes(lines: list[int], cells: list[str], column: Column, codes: dict[str, int], findings: Findings) -> Floats:
    if column.grows:
        for cell in cells:
            if cell and cell not in codes:
                codes[cell] = len(codes)
    values = np.array([codes.get(cell, math.nan) for cell in cells], np.float64)
    for at in np.flatnonzero(np.isnan(values)):
        if cells[at]:
            findings.add(lines[at], column, f"found {shown(cells[at])}, not one of {listed(codes)}", column.refusal)
    return values


def shown_number(value: float) -> str:
    return repr(float(value)).removesuffix(".0")
