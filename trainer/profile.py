"""What each column of a data file holds, in one pass: for a draft of a plan, before anything is known of the file."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

from runtime_min.errors import Problem, RowsError
from trainer.cells import MOST_LEVELS, Findings, texts_of
from trainer.columns import repeated
from trainer.sources import Source, opened

TEXTS_KEPT = 1000
"""Of a column's different texts, as many as are told apart; a column with more is no label, level or group."""


@dataclass(frozen=True)
class Profile:
    """One column. `counts`: how often each different text stands there, None where there are too many to tell.

    `low`, `high`: of the numbers, where every cell that is not empty is a finite number; else None. `whole`: they are
    whole numbers. `runs`: each is the one before plus 1, as a row's number is. `mixed`: the first text that is no
    finite number, in a column that has numbers too.
    """

    header: str
    rows: int
    missing: int
    counts: dict[str, int] | None
    low: float | None
    high: float | None
    whole: bool
    runs: bool
    mixed: str | None = None

    @property
    def numeric(self) -> bool:
        """Every cell that is not empty is a finite number, and there is one."""
        return self.low is not None

    @property
    def constant(self) -> bool:
        """All cells that are not empty are the same."""
        return self.counts is not None and len(self.counts) <= 1


class _Column:
    def __init__(self, header: str) -> None:
        self.header = header
        self.rows = self.missing = 0
        self.counts: dict[str, int] | None = {}
        self.low, self.high = math.inf, -math.inf
        self.numeric = self.whole = self.runs = True
        self.last: float | None = None
        self.first_text: str | None = None
        self.first_texts: list[str] = []

    def read(self, texts: list[str]) -> None:
        self.rows += len(texts)
        for text in texts:
            if text == "":
                self.missing += 1
                continue
            if self.counts is not None:
                self.counts[text] = self.counts.get(text, 0) + 1
                if len(self.counts) > TEXTS_KEPT:
                    self.first_texts, self.counts = list(self.counts), None
            if self.numeric:
                self._read_number(text)

    def _read_number(self, text: str) -> None:
        number = _number(text)
        if not math.isfinite(number):
            self.numeric, self.first_text = False, text
            return
        self.low, self.high = min(self.low, number), max(self.high, number)
        self.whole &= number.is_integer()
        self.runs &= self.last is None or number == self.last + 1
        self.last = number

    def profile(self) -> Profile:
        there = self.numeric and self.last is not None
        low, high = (self.low, self.high) if there else (None, None)
        seen = self.first_texts if self.counts is None else self.counts
        mixed = self.first_text if any(math.isfinite(_number(text)) for text in seen) else None
        whole = there and self.whole
        return Profile(self.header, self.rows, self.missing, self.counts, low, high, whole, self.runs, mixed)


def _number(text: str) -> float:
    try:
        return float(text) if text.isascii() and "_" not in text else math.nan
    except ValueError:
        return math.nan


def profiles(path: Path) -> tuple[Profile, ...]:
    """A profile of each column that has a header.

    Raises RowsError where the file cannot be read, two columns have one name, or the header holds numbers alone.
    """
    with opened(path) as source:
        findings = Findings()
        _refuse_header(source)
        findings.begin(source.where, source.place)
        columns = [_Column(header) for header in source.header]
        for block in source.blocks(findings):
            for position, column in enumerate(columns):
                column.read(texts_of(block.cells(position)))
        findings.raise_any()
    if not columns or not columns[0].rows:
        raise RowsError(Problem(str(path), "found a header and no rows", "give a file with rows"))
    return tuple(column.profile() for column in columns if column.header)


def _refuse_header(source: Source) -> None:
    where = f"{source.where}: line 1" if source.place == "line" else source.where
    if source.header and all(math.isfinite(_number(name)) for name in source.header):
        found = "found numbers alone where the names of the columns stand"
        raise RowsError(Problem(where, found, "write a line with a name for each column above the rows"))
    repeated_headers = repeated(source.header, where)
    if repeated_headers:
        raise RowsError(repeated_headers)


def few_texts(column: Profile) -> bool:
    """A column of texts that can be an input with levels."""
    return not column.numeric and column.counts is not None and 2 <= len(column.counts) <= MOST_LEVELS
