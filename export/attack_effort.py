"""How long an attack on an error budget may search, and the rows that are few enough to be tried one and all."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from runtime_min.model import INTEGERS, Input, SealedModel

EVERY_ROW = 2**24
"""In integers, where a row costs little, so many are tried one and all at any effort."""

CHUNK = 2**16


@dataclass(frozen=True)
class Effort:
    """Sizes of the search. uniform: random rows; corners: rows of limits; beams: runs of the beam; width: beginnings
    kept; branch: values tried for each; rounds: rounds of changes; verified: rows computed anew in rationals; every: in
    floating point, where the device can be given no more than so many rows, all are tried."""

    uniform: int
    corners: int
    beams: int
    width: int
    branch: int
    rounds: int
    verified: int
    every: int


EFFORTS = {
    "quick": Effort(uniform=20_000, corners=1_000, beams=4, width=24, branch=64, rounds=40, verified=8, every=2**20),
    "thorough": Effort(
        uniform=200_000, corners=4_000, beams=16, width=64, branch=128, rounds=200, verified=32, every=2**24
    ),
}


class Found(NamedTuple):
    """What a search found: rows, best first; how many it tried; whether these are all rows that there are."""

    rows: list[tuple[float, ...]]
    tried: int
    everything: bool


def row_count(sealed: SealedModel, most: int) -> int | None:
    """How many rows the device can be given; None where a real number is among the inputs, or more than `most` rows."""
    if not all(_is_whole(sealed, entry) for entry in sealed.inputs):
        return None
    count = math.prod(int(entry.high) - int(entry.low) + 1 for entry in sealed.inputs)
    return count if count <= most else None


def _is_whole(sealed: SealedModel, entry: Input) -> bool:
    return bool(entry.levels) or entry.counts is not None or sealed.arithmetic in INTEGERS


def every_row(sealed: SealedModel, chunk: int) -> Iterator[npt.NDArray[np.int64]]:
    """All rows that `row_count` counts, in chunks of (n, inputs); the last input changes first."""
    sizes = [int(entry.high) - int(entry.low) + 1 for entry in sealed.inputs]
    lows = np.array([int(entry.low) for entry in sealed.inputs], np.int64)
    total = math.prod(sizes)
    for start in range(0, total, chunk):
        at = np.arange(start, min(start + chunk, total))
        yield np.stack(np.unravel_index(at, sizes), axis=1) + lows


def largest(harm: npt.NDArray[np.floating[Any]], count: int) -> npt.NDArray[np.intp]:
    """The positions of the `count` largest numbers, the largest first, of equal ones the first."""
    near = np.flatnonzero(harm >= np.partition(harm, -count)[-count]) if len(harm) > count else np.arange(len(harm))
    return near[np.argsort(-harm[near], kind="stable")][:count]
