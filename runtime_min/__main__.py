"""Score a CSV with nothing but Python: ``python -m runtime_min SEALED ROWS.csv``.

The rows hold values in the plan's units, whatever the device delivers: where it delivers value - origin or a count,
each value is converted exactly from its decimal (to the nearest count, ties to even), as the device's reading would be.

Writes the rows' inputs as they were given, log_odds, probability, decision and model_id, as CSV to standard output.
In integers log_odds and probability are the device's integers, in units of 2^-accumulator_shift and 2^-15.
"""

from __future__ import annotations

import csv
import math
import sys
from collections.abc import Iterator
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import TextIO

from runtime_min import score
from runtime_min.codec import load
from runtime_min.errors import FirmlogitError, Problem, RowsError
from runtime_min.folding import delivered
from runtime_min.model import INTEGERS, Input, SealedModel

USAGE = """usage: python -m runtime_min SEALED ROWS.csv
ROWS.csv holds values in the plan's units; where the device delivers counts or values above an origin, they are
converted."""

Read = tuple[float, float]
"""(the value in the plan's unit, what the device delivers)."""


def score_rows(sealed: SealedModel, path: Path, out: TextIO) -> None:
    """Score every row of a CSV (columns by input name or by the plan's header) and write the scored rows to `out`.

    Values are in the plan's units; an empty field is a missing value; a level stands as its name or its position.
    Raises RowsError before anything is written, with every problem of the file.
    """
    rows = list(_read(sealed, path))
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([*(entry.name for entry in sealed.inputs), "log_odds", "probability", "decision", "model_id"])
    for given in rows:
        row = [device for _, device in given]
        fault = score.check_inputs(sealed, row)
        z, p = score.log_odds(sealed, row), score.probability(sealed, row)
        shown = ["" if math.isnan(value) else repr(value) for value, _ in given]
        results = ["", ""] if fault else [repr(z), repr(p)]
        writer.writerow([*shown, *results, score.decide(sealed, row), sealed.model_id])


def _read(sealed: SealedModel, path: Path) -> Iterator[tuple[Read, ...]]:
    where = str(path)
    problems: list[Problem] = []
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            lines = csv.reader(file, strict=True)
            header = next(lines, [])
            places = _places(sealed, header, where)
            for row in lines:
                if len(row) != len(header):
                    found = f"found {len(row)} fields under {len(header)} column names"
                    problems.append(Problem(f"{where}: line {lines.line_num}", found, "give one field a column"))
                    continue
                values = []
                for entry, place in zip(sealed.inputs, places, strict=True):
                    value = _number(row[place], entry, sealed.arithmetic)
                    if value is None:
                        at = f'{where}: line {lines.line_num}: column "{header[place]}"'
                        problems.append(Problem(at, f'found "{row[place]}"', "give a number or a level"))
                    else:
                        values.append(value)
                if len(values) == len(places):
                    yield tuple(values)
    except OSError as error:
        raise RowsError(Problem(where, f"cannot be read ({error.strerror})", "name an existing file")) from None
    except (csv.Error, UnicodeDecodeError) as error:
        raise RowsError(Problem(where, f"is not CSV in UTF-8 ({error})", "save it as such")) from None
    if problems:
        raise RowsError(problems)


def _places(sealed: SealedModel, header: list[str], where: str) -> list[int]:
    columns = {entry.name: entry.column for entry in sealed.about.request.inputs}
    problems = []
    places = []
    for entry in sealed.inputs:
        names = [name for name in (entry.name, columns[entry.name]) if header.count(name) == 1]
        if names:
            places.append(header.index(names[0]))
        else:
            wanted = f'"{entry.name}" or "{columns[entry.name]}"'
            problems.append(Problem(where, f"no single column is named {wanted}", "name each input's column once"))
    if problems:
        raise RowsError(problems)
    return places


def _number(field: str, entry: Input, arithmetic: str) -> Read | None:
    if field in entry.levels:
        level = float(entry.levels.index(field))
        return level, level
    if field == "":
        return math.nan, math.nan
    try:
        value = float(field) if field.isascii() and "_" not in field else None
    except ValueError:
        value = None
    if value is None or not math.isfinite(value) or entry.levels:
        return None if value is None else (value, value)
    if entry.origin is None and entry.counts is None and arithmetic not in INTEGERS:
        return value, value
    # A binary64 of 0 may stand for an exponent that no rational survives.
    exact = Fraction(Decimal(field.strip())) if value else Fraction(0)
    return value, delivered(entry, exact, arithmetic)


def main(arguments: list[str]) -> int:
    """Exit status: 0 scored, 2 the request or the data were wrong."""
    if len(arguments) != 2:
        print(USAGE, file=sys.stderr)
        return 2
    try:
        score_rows(load(arguments[0]), Path(arguments[1]), sys.stdout)
    except FirmlogitError as error:
        print(error, file=sys.stderr)
        return error.exit_status
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
