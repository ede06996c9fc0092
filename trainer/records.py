"""A CSV file -> records, one at a time, in bounded memory (RFC 4180; UTF-8; LF or CRLF; a byte order mark is fine).

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

LONGEST_RECORD = 1_000_000
"""Bytes of one record, its line breaks included."""

MOST_COLUMNS = 4096

# What the csv module says of a broken record -> our sentence.
_BROKEN = (
    ("unexpected end of data", "found a quote that is never closed", "close it, or double it inside a quoted field"),
    ("expected after", "found text after a closing quote", 'double the quotes inside a quoted field: "a ""b"" c"'),
    ("field larger than", "found a field that is too long", "look for a quote that is never closed"),
    ("new-line character", "found a carriage return alone", "save the file with LF or CRLF line ends"),
)


def opened(path: Path) -> BinaryIO:
    """The file at `path`. Raises RowsError where there is none to read."""
    where, todo = str(path), "give the path of a .csv"
    try:
        if path.is_dir():
            raise RowsError(Problem(where, "found a folder", todo))
        return path.open("rb")
    except FileNotFoundError:
        raise RowsError(Problem(where, "found no such file", todo)) from None
    except OSError as error:
        raise RowsError(Problem(where, f"cannot be read ({error.strerror})", "make it readable")) from None


class Lines:
    """The lines of a file as the csv module wants them; `sha256` is of all bytes once the last line is read."""

    def __init__(self, stream: BinaryIO, where: str) -> None:
        self._stream = stream
        self._digest = hashlib.sha256()
        self.where = where
        self.number = 0
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
