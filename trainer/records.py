"""A CSV file -> records, in blocks, in bounded memory (RFC 4180; UTF-8; LF or CRLF; a byte order mark is fine).

Stops at the first mistake after which fields can no longer be told apart, by raising RowsError with one problem. Knows
nothing of plans, and converts nothing.
"""

from __future__ import annotations

import csv
import hashlib
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

from runtime_min.errors import Problem, RowsError
from trainer.cells import Block, Findings

LONGEST_RECORD = 1_000_000
"""Bytes of one record, its line breaks included."""

MOST_COLUMNS = 4096
_BLOCK_RECORDS = 4096
_BLOCK_BYTES = 2_000_000

# What spreadsheets put between the fields where the comma is taken by the numbers.
_NO_COMMAS = ((";", "semicolons"), ("\t", "tabs"))

# What the csv module says of a broken record -> our sentence.
_BROKEN = (
    ("unexpected end of data", "found a quote that is never closed", "close it, or double it inside a quoted field"),
    ("expected after", "found text after a closing quote", 'double the quotes inside a quoted field: "a ""b"" c"'),
    ("field larger than", "found a field that is too long", "look for a quote that is never closed"),
    ("new-line character", "found a carriage return alone", "save the file with LF or CRLF line ends"),
)


class CsvFile:
    """A CSV file as a source of rows; a problem names the line on which its row starts."""

    place = "line"

    def __init__(self, path: Path, stream: BinaryIO) -> None:
        self.where = str(path)
        self._lines = Lines(stream, self.where)
        self._records = records(self._lines)
        _, self.header = next(self._records, (1, []))
        if not self.header:
            raise RowsError(Problem(self.where, "found no header", "give a .csv with a header and rows"))
        if len(self.header) == 1 and (marks := [name for mark, name in _NO_COMMAS if mark in self.header[0]]):
            todo = "save the file with commas between the fields and points in the numbers"
            raise RowsError(Problem(f"{self.where}: line 1", f"found {marks[0]} between the fields", todo))

    def blocks(self, findings: Findings) -> Iterator[Block]:
        """The rows that have as many fields as the header; the others become problems."""
        width = len(self.header)
        todo = "give each row one field a column, in quotes where a field holds a comma"
        for block in self._record_blocks():
            whole = [record for record in block if len(record[1]) == width]
            for line, fields in block if len(whole) < len(block) else ():
                if len(fields) != width:
                    count = f"{len(fields)} field{'s' if len(fields) > 1 else ''}"
                    findings.add(line, None, f"found {count} where the header has {width}", todo)
            yield Block([line for line, _ in whole], _Fields(whole))

    def _record_blocks(self) -> Iterator[list[tuple[int, list[str]]]]:
        block: list[tuple[int, list[str]]] = []
        end = self._lines.bytes + _BLOCK_BYTES
        for record in self._records:
            block.append(record)
            if len(block) == _BLOCK_RECORDS or self._lines.bytes >= end:
                yield block
                block, end = [], self._lines.bytes + _BLOCK_BYTES
        if block:
            yield block

    def sha256(self) -> str:
        """Of the file's bytes, all of which were read."""
        return self._lines.sha256


class _Fields:
    def __init__(self, rows: list[tuple[int, list[str]]]) -> None:
        self._rows = rows

    def __call__(self, position: int) -> list[str]:
        return [fields[position] for _, fields in self._rows]


class Lines:
    """The lines of a file as the csv module wants them; `sha256` is of all bytes once the last line is read."""

    def __init__(self, stream: BinaryIO, where: str) -> None:
        self._stream = stream
        self._digest = hashlib.sha256()
        self.where = where
        self.number = 0
        self.bytes = 0
        self.record_bytes = 0

    @property
    def sha256(self) -> str:
        return self._digest.hexdigest()

    def __iter__(self) -> Iterator[str]:
        return self

    def __next__(self) -> str:
        raw = self._stream.readline(LONGEST_RECORD + 1)
        if not raw:
            raise StopIteration
        self.number += 1
        self.bytes += len(raw)
        self.record_bytes += len(raw)
        if self.record_bytes > LONGEST_RECORD:
            found = f"found a row of more than {LONGEST_RECORD} bytes"
            todo = "look for missing line ends, or for a quote that is never closed"
            raise RowsError(Problem(self.here(), found, todo))
        self._digest.update(raw)
        if self.number == 1:
            raw = raw.removeprefix(b"\xef\xbb\xbf")
        try:
            return raw.decode("utf-8")
        except UnicodeDecodeError:
            raise RowsError(Problem(self.here(), "found text that is not UTF-8", "save the file as UTF-8")) from None

    def here(self) -> str:
        return f"{self.where}: line {self.number}"


def records(lines: Lines) -> Iterator[tuple[int, list[str]]]:
    """(line on which the record starts, its fields) for each record; empty lines are no records."""
    reader = csv.reader(lines, strict=True)
    while True:
        lines.record_bytes = 0
        start = lines.number + 1
        try:
            fields = next(reader)
        except StopIteration:
            return
        except csv.Error as error:
            raise RowsError(_broken(f"{lines.where}: line {start}", str(error))) from None
        if len(fields) > MOST_COLUMNS:
            found = f"found {len(fields)} fields, more than {MOST_COLUMNS}"
            raise RowsError(Problem(f"{lines.where}: line {start}", found, "keep the columns that the plan names"))
        if fields:
            yield start, fields


def _broken(where: str, message: str) -> Problem:
    for mark, found, todo in _BROKEN:
        if mark in message:
            return Problem(where, found, todo)
    return Problem(where, f"found a row that is not CSV ({message})", "correct it")
