"""Blocks of rows -> numbers, one column at a time; what cannot be read becomes a problem, and reading goes on."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from runtime_min.canonical import canonical
from runtime_min.errors import Problem, RowsError
from trainer.plan_checks import decimal_text, listed, shown

PROBLEMS_SHOWN = 20

MOST_LEVELS = 20
"""A column of at most so many different texts is an input with levels, where the plan names no input."""

Floats = npt.NDArray[np.float64]
Cells = list[str] | npt.NDArray[Any]
"""One column of a block: texts, "" where missing, or an array of bools, integers or floats, NaN where missing."""


class Block(NamedTuple):
    """`lines`: the line, or the number, of each row; `cells`: the cells of the column at a position."""

    lines: Sequence[int]
    cells: Callable[[int], Cells]


class Span(NamedTuple):
    """All values of the device's counts, `low` to `high`; rows may go to `least` and `most`."""

    low: Fraction
    high: Fraction
    least: float
    most: float


@dataclass
class Column:
    """One column that the plan uses, and the blocks of it read so far (NaN: missing).

    `codes` is None for a number; else it gives the index of each text, and `grows` lets new texts in. `limits`: what a
    number may not leave; `span`: what the device's counts can stand for; `least`: what a number may not be below;
    `one_of`: all that it may be. `refusal`: what to do about a cell that is not read. `missing`: what to do about an
    empty field, where there may be none.

    `either`: numbers or texts, which all rows together decide. Both are then kept: the number of each cell, NaN where
    there is none, in `blocks`, its text's code in `text_blocks`; `first_text` is the first cell that is no number.
    """

    header: str
    position: int
    refusal: str
    codes: dict[str, int] | None = None
    grows: bool = False
    limits: tuple[Fraction, Fraction] | None = None
    span: Span | None = None
    least: float | None = None
    one_of: tuple[float, ...] | None = None
    missing: str | None = None
    either: bool = False
    blocks: list[Floats] = field(default_factory=list)
    text_blocks: list[Floats] = field(default_factory=list)
    first_text: tuple[str, str] | None = None
    refused: set[str] = field(default_factory=set)

    def joined(self) -> Floats:
        return np.concatenate(self.blocks)


class Findings:
    """Problems as they are found; the first few of each column are kept, the others counted."""

    def __init__(self) -> None:
        self._file, self._where, self._place = 0, "", "line"
        self._kept: list[tuple[int, int, int, Problem]] = []
        self._counts: Counter[int] = Counter()
        self._last: list[Problem] = []

    def begin(self, where: str, place: str) -> None:
        """What is found from here on is in the file `where`, whose rows stand in a `place` ("line", "row")."""
        self._file, self._where, self._place = self._file + 1, where, place

    def here(self, line: int, column: Column | None) -> str:
        return f"{self._where}: {self._place} {line}" + (f", column {shown(column.header)}" if column else "")

    def add(self, line: int, column: Column | None, found: str, todo: str) -> None:
        position = column.position if column else -1
        self._counts[position] += 1
        if self._counts[position] <= PROBLEMS_SHOWN:
            self._kept.append((self._file, line, position, Problem(self.here(line, column), found, todo)))

    def add_last(self, problems: Sequence[Problem]) -> None:
        """Problems after which nothing more can be read."""
        self._last.extend(problems)

    def raise_any(self) -> None:
        first = [problem for *_, problem in sorted(self._kept)[:PROBLEMS_SHOWN]]
        more = self._counts.total() - len(first)
        if more:
            found = f"found {more} more problem{'s' if more > 1 else ''}"
            first.append(Problem(self._where, found, "mend these first"))
        if first or self._last:
            raise RowsError(first + self._last)


def read_block(block: Block, columns: Sequence[Column], findings: Findings) -> None:
    """Append to each column the numbers of its cells in `block`."""
    for column in columns:
        cells = block.cells(column.position)
        if column.either:
            values, codes = _either(block.lines, cells, column, findings)
            column.text_blocks.append(codes)
        elif column.codes is None:
            values = _numbers(block.lines, cells, column, findings)
        else:
            values = _indexes(block.lines, texts_of(cells), column, column.codes, findings)
        if column.missing:
            empty = [not cell for cell in cells] if isinstance(cells, list) else np.isnan(cells)
            for at in np.flatnonzero(empty).tolist():
                findings.add(block.lines[at], column, "found an empty field", column.missing)
        column.blocks.append(values)


def texts_of(cells: Cells) -> list[str]:
    """Each cell as a text: a number as canonical JSON has it (1, not 1.0), a bool as false or true."""
    if isinstance(cells, list):
        return cells
    known: dict[Any, str] = {}
    texts = []
    for value in cells.tolist():
        text = known.get(value)
        if text is None:
            text = str(value) if isinstance(value, int) and not isinstance(value, bool) else _text_of(value)
            known[value] = text
        texts.append(text)
    return texts


def _text_of(value: bool | float) -> str:
    if isinstance(value, bool) or math.isfinite(value):
        return canonical(value)
    return "" if value != value else str(value)


def _numbers(lines: Sequence[int], cells: Cells, column: Column, findings: Findings) -> Floats:
    values = _converted(cells)
    for at in np.flatnonzero(~np.isfinite(values)).tolist():
        cell = cells[at] if isinstance(cells, list) else texts_of(cells[at : at + 1])[0]
        if cell:
            todo = column.missing or "leave the field empty where a value is missing"
            findings.add(lines[at], column, *not_a_number(cell, column.refusal, todo))
            values[at] = np.nan
    inside = np.ones(len(values), dtype=bool)
    if column.limits:
        low, high = column.limits
        # A row is in range when its binary64 lies within the limits rounded to binary64.
        inside = (float(low) <= values) & (values <= float(high))
        for at in np.flatnonzero(~(inside | np.isnan(values))).tolist():
            found = f"found {shown_number(values[at])}, outside the range {decimal_text(low)} to {decimal_text(high)}"
            findings.add(lines[at], column, found, 'correct it, widen the range, or write outside = "clamp"')
    if column.span:
        span = column.span
        for at in np.flatnonzero(((values < span.least) | (span.most < values)) & inside).tolist():
            beyond = f"which no count gives: all counts span {decimal_text(span.low)} to {decimal_text(span.high)}"
            todo = "correct it, or correct bits, gain and offset"
            findings.add(lines[at], column, f"found {shown_number(values[at])}, {beyond}", todo)
    wrong = np.zeros(len(values), dtype=bool)
    if column.least is not None:
        wrong = values < column.least
    if column.one_of is not None:
        wrong = ~np.isin(values, column.one_of) & ~np.isnan(values)
    for at in np.flatnonzero(wrong).tolist():
        findings.add(lines[at], column, f"found {shown_number(values[at])}", column.refusal)
    return values


def _converted(cells: Cells) -> Floats:
    """Each cell as binary64; NaN where it is missing or no number."""
    if not isinstance(cells, list):
        return cells.astype(np.float64)
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


def not_a_number(cell: str, refusal: str, if_not_finite: str) -> tuple[str, str]:
    """(what was found, what to do) of a cell that is no finite number."""
    if cell.strip().lower().lstrip("+-") in ("nan", "inf", "infinity"):
        return f"found {shown(cell)}, not a finite number", if_not_finite
    if math.isinf(_number(cell)):
        return f"found {shown(cell)}, too large for binary64", "correct it"
    return f"found {shown(cell)}, not a number", refusal


def _indexes(
    lines: Sequence[int], cells: list[str], column: Column, codes: dict[str, int], findings: Findings
) -> Floats:
    if column.grows:
        for cell in cells:
            if cell and cell not in codes:
                codes[cell] = len(codes)
    values = np.array([codes.get(cell, math.nan) for cell in cells], np.float64)
    for at in np.flatnonzero(np.isnan(values)).tolist():
        if cells[at] and cells[at] not in column.refused:  # each text once, where it stands first
            column.refused.add(cells[at])
            findings.add(lines[at], column, f"found {shown(cells[at])}, not one of {listed(codes)}", column.refusal)
    return values


def _either(lines: Sequence[int], cells: Cells, column: Column, findings: Findings) -> tuple[Floats, Floats]:
    """(numbers, codes of texts). More texts than can be levels are not all kept: one too many is enough to tell."""
    values = _converted(cells)
    finite = np.isfinite(values)
    if finite.all():
        return values, np.full(len(values), np.nan)
    codes = {} if column.codes is None else column.codes
    column.codes = codes
    texts = texts_of(cells)
    for at in np.flatnonzero(~finite).tolist():
        if texts[at]:
            if column.first_text is None:
                column.first_text = (findings.here(lines[at], column), texts[at])
            if len(codes) <= MOST_LEVELS:
                codes.setdefault(texts[at], len(codes))
    return np.where(finite, values, np.nan), np.array([codes.get(text, math.nan) for text in texts])


def shown_number(value: float) -> str:
    return repr(float(value)).removesuffix(".0")
