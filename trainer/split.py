"""Which rows are held out: by what they hold, never by where they stand.

Rows are sorted by SHA-256 of the canonical JSON array [seed, label, inputs in plan order, weight], and the first
round(share n) are held out. The same rows in another order are therefore split in the same way.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from fractions import Fraction
from itertools import groupby
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from runtime_min.canonical import canonical
from runtime_min.errors import Problem, RowsError

if TYPE_CHECKING:
    from trainer.table import Rows

_ROW_WEIGHT = "1"


def row_keys(labels: Sequence[str], columns: Sequence[Sequence[str | float | None]]) -> tuple[bytes, ...]:
    """The canonical array of each row without its seed: `label,input,…,weight]`.

    `labels`: the class of each row, as text. `columns`: one sequence an input, of parsed values; a level is its text, a
    missing value None.
    """
    parts = [_json_texts(labels), *(_json_texts(column) for column in columns), [_ROW_WEIGHT] * len(labels)]
    return tuple(f"{','.join(row)}]".encode() for row in zip(*parts, strict=True))


def held_out_rows(rows: Rows, share: Fraction, seed: int) -> npt.NDArray[np.bool_]:
    """(n,) True where a row of `rows` is held out.

    Equal rows stay together, so the number held out is the one nearest to round(share n) that allows it (the smaller of
    two as near), with at least one row on each side; none for a share of 0. Raises RowsError where all rows are equal.
    """
    held_out = np.zeros(len(rows.keys), dtype=bool)
    if share == 0:
        return held_out
    seeded = f"[{canonical(seed)},".encode()
    digests = [hashlib.sha256(seeded + key).digest() for key in rows.keys]
    order = sorted(range(len(digests)), key=digests.__getitem__)
    bounds = [0]
    for _, equal in groupby(order, key=digests.__getitem__):
        bounds.append(bounds[-1] + len(list(equal)))
    if len(bounds) < 3:
        found = "found no two different rows to hold out one of"
        raise RowsError(Problem("[rows]: held_out", found, "write held_out = 0, or give more rows"))
    wanted = round(share * len(order))
    count = min(bounds[1:-1], key=lambda bound: (abs(bound - wanted), bound))
    held_out[order[:count]] = True
    return held_out


def _json_texts(values: Sequence[str | float | None]) -> list[str]:
    """`canonical` of each value, sooner: repr and RFC 8785 agree on a fraction that repr writes without an exponent."""
    known: dict[str | float | None, str] = {}
    texts = []
    for value in values:
        text = repr(value) if isinstance(value, float) else ""
        if not text or "e" in text or text.endswith(".0"):
            text = known.get(value, "") or known.setdefault(value, canonical(value))
        texts.append(text)
    return texts
