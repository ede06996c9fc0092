"""Which rows are held out, and which fold a row is in: by what rows hold, never by where they stand.

Rows are sorted by SHA-256 of the canonical JSON array [seed, label, inputs in plan order, weight], groups by that of
[seed, group], and the first round(share n) are held out. The same rows in another order are therefore split in the same
way.
"""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Sequence
from fractions import Fraction
from heapq import heappop, heappush
from itertools import accumulate
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from runtime_min.canonical import canonical
from runtime_min.errors import Problem, RowsError

if TYPE_CHECKING:
    from trainer.table import Rows

_ROW_WEIGHT = 1.0


def row_keys(
    labels: Sequence[str], columns: Sequence[Sequence[str | float | None]], weights: Sequence[float] | None = None
) -> tuple[bytes, ...]:
    """The canonical array of each row without its seed: `label,input,…,weight]`.

    `labels`: the class of each row, as text. `columns`: one sequence an input, of parsed values; a level is its text, a
    missing value None. `weights`: one a row; None is 1 for each.
    """
    last = [_ROW_WEIGHT] * len(labels) if weights is None else weights
    parts = [_json_texts(labels), *(_json_texts(column) for column in columns), _json_texts(last)]
    return tuple(f"{','.join(row)}]".encode() for row in zip(*parts, strict=True))


def held_out_rows(rows: Rows, share: Fraction | str, seed: int) -> npt.NDArray[np.bool_]:
    """(n,) True where a row of `rows` is held out. `share`: what the plan says under held_out.

    Where that is a column's name, the rows themselves say which. Where it is a share of rows in groups, the first
    round(share g) of the g groups are held out. Else it is a share of the rows: equal rows stay together, so the number
    held out is the one nearest to round(share n) that allows it (the smaller of two as near). At least one group or row
    is on each side; none is held out for a share of 0. Raises RowsError where there are not two to part.
    """
    if isinstance(share, str):
        if rows.held_out is None:
            raise ValueError(f"the rows were read without the column {share}")
        return rows.held_out
    if share == 0:
        return np.zeros(len(rows.keys), dtype=bool)
    digests = _digests(rows, seed)
    counts = Counter(digests)
    if len(counts) < 2:
        what = "two different rows" if rows.groups is None else "two groups"
        more = "rows" if rows.groups is None else "groups"
        found = f"found no {what} to hold out one of"
        raise RowsError(Problem("[rows]: held_out", found, f"write held_out = 0, or give more {more}"))
    order = sorted(counts)
    if rows.groups is not None:
        count = min(max(round(share * len(order)), 1), len(order) - 1)
    else:
        wanted = round(share * len(digests))
        held = list(accumulate(counts[digest] for digest in order[:-1]))
        count = 1 + min(range(len(held)), key=lambda at: (abs(held[at] - wanted), at))
    first = set(order[:count])
    return np.array([digest in first for digest in digests])


def folds(rows: Rows, fitted: npt.NDArray[np.bool_], count: int, seed: int) -> npt.NDArray[np.int64]:
    """The fold, 0 … count - 1, of each fitted row of `rows`, in their order. `fitted`: (n,) bool; `count`: 2 or more.

    Groups stay together, and where there are none, equal rows. Sorted by their hashes (rows without groups: class by
    class, so that each fold gets its share of each), they are dealt in turn: each goes to the fold with the fewest rows
    so far, of several the first. With fewer groups, or different rows, than `count` there are so many folds. Raises
    RowsError where all fitted rows would be in one.
    """
    digests = _digests(rows, seed)
    labels = rows.labels if rows.groups is None else np.zeros(len(digests), np.int64)
    members: dict[tuple[int, bytes], list[int]] = {}
    for place, row in enumerate(np.flatnonzero(fitted).tolist()):
        members.setdefault((int(labels[row]), digests[row]), []).append(place)
    if len(members) < 2:
        what = "different rows" if rows.groups is None else "groups"
        found = f"found no two {what} among the rows to fit, to choose sd by cross-validation"
        raise RowsError(Problem("[prior]: sd", found, f"write a number for sd, or give more {what}"))
    chosen = np.empty(int(np.count_nonzero(fitted)), np.int64)
    sizes = [(0, fold) for fold in range(min(count, len(members)))]
    for unit in sorted(members):
        size, fold = heappop(sizes)
        chosen[members[unit]] = fold
        heappush(sizes, (size + len(members[unit]), fold))
    return chosen


def _digests(rows: Rows, seed: int) -> list[bytes]:
    """SHA-256 of the canonical array of each row, or of [seed, group] where there are groups."""
    seeded = f"[{canonical(seed)},".encode()
    if rows.groups is None:
        return [hashlib.sha256(seeded + key).digest() for key in rows.keys]
    of_group = {group: hashlib.sha256(seeded + f"{canonical(group)}]".encode()).digest() for group in set(rows.groups)}
    return [of_group[group] for group in rows.groups]


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
