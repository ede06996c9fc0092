"""The search for the worst inputs in integers.

The accumulator is exact, so that the error of a row is what its numbers are off by,

    e(n) = (b - T(d)) + sum_j (u_j 2^s_j - w_j) (n_j - d_j),

and where the tool chose the counts, half a count times |w_j| with whichever sign hurts, the same for all. Every row is
tried where there
are few enough; else uniform rows, corners, rows grown input by input (a beam) and changes of the best. Rows next to the
limits and far from them are handed on too, so that the reference scorer is held against this picture of it.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from export.attack_effort import CHUNK, EVERY_ROW, Effort, Found, every_row, largest, row_count
from export.exact import datums, device_intercept, device_weights, log_odds_of, slopes
from runtime_min.model import SealedModel, TrainedModel

Ints = npt.NDArray[np.int64]
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class _Line:
    """The differences between one score of both models, in log-odds."""

    lows: Ints
    highs: Ints
    levels: tuple[int, ...]
    datums: Ints
    start: float
    off: tuple[Floats, ...]


def search_integers(
    trained: TrainedModel, sealed: SealedModel, k: int, rng: np.random.Generator, size: Effort
) -> Found:
    """The best rows found for class k + 1 and as many chosen at random, and how many were tried."""
    line = _line(trained, sealed, k)
    some = _uniform(line, rng, size.uniform)
    count = row_count(sealed, EVERY_ROW)
    if count is not None:
        best = np.zeros((0, len(line.levels)), np.int64)
        for rows in every_row(sealed, CHUNK):
            best = _best(line, np.concatenate([best, rows]), size.verified)
        return Found(_rows(np.concatenate([best, some[: size.verified]])), count, everything=True)
    width = max(size.width, size.verified)
    corners = _corners(line, rng, size.corners)
    tried = len(some) + len(corners)
    best = _best(line, np.concatenate([some, corners]), width)
    for _ in range(size.beams):
        grown, grown_from = _beam(line, rng, size)
        best = _best(line, np.concatenate([best, grown]), width)
        tried += grown_from
    for _ in range(size.rounds):
        changed = _changed(line, rng, np.repeat(best, 16, axis=0))
        best = _best(line, np.concatenate([best, changed]), width)
        tried += len(changed)
    shown = [best[: size.verified], corners[: size.verified], some[: size.verified]]
    return Found(_rows(np.concatenate(shown)), tried, everything=False)


def _rows(rows: Ints) -> list[tuple[float, ...]]:
    return [tuple(int(value) for value in row) for row in rows]


def _line(trained: TrainedModel, sealed: SealedModel, k: int) -> _Line:
    positions = range(len(sealed.inputs))
    exact = [slopes(trained, sealed, k, at) for at in positions]
    off = [
        np.array([float(u - w) for u, w in zip(device_weights(sealed, k, at), exact[at], strict=True)])
        for at in positions
    ]
    return _Line(
        lows=np.array([int(entry.low) for entry in sealed.inputs], np.int64),
        highs=np.array([int(entry.high) for entry in sealed.inputs], np.int64),
        levels=tuple(len(entry.levels) for entry in sealed.inputs),
        datums=np.array([int(datum) for datum in datums(sealed)], np.int64),
        start=float(device_intercept(sealed, k) - log_odds_of(trained, sealed, datums(sealed))[k]),
        off=tuple(off),
    )


def _errors(line: _Line, position: int, values: Ints) -> Floats:
    """What one input adds to the error."""
    if line.levels[position]:
        return line.off[position][values]
    result: Floats = line.off[position][0] * (values - line.datums[position])
    return result


def _best(line: _Line, rows: Ints, count: int) -> Ints:
    error = np.full(len(rows), line.start)
    for position in range(rows.shape[1]):
        error += _errors(line, position, rows[:, position])
    return rows[largest(np.abs(error), count)]


def _uniform(line: _Line, rng: np.random.Generator, count: int) -> Ints:
    return rng.integers(line.lows, line.highs, size=(count, len(line.levels)), endpoint=True)


def _corners(line: _Line, rng: np.random.Generator, count: int) -> Ints:
    if 2 ** len(line.levels) <= count:
        return np.array(list(itertools.product(*zip(line.lows, line.highs, strict=True))), np.int64)
    side = rng.integers(2, size=(count, len(line.levels)))
    return np.where(side == 1, line.highs, line.lows)


def _beam(line: _Line, rng: np.random.Generator, size: Effort) -> tuple[Ints, int]:
    """Grow rows input by input from both limits and anywhere, keeping the beginnings furthest off either way."""
    rows, error, tried = np.zeros((1, 0), np.int64), np.array([line.start]), 0
    for position, (low, high) in enumerate(zip(line.lows, line.highs, strict=True)):
        values = np.concatenate([[low, high], rng.integers(low, high, size=size.branch - 2, endpoint=True)])
        grown = (error[:, None] + _errors(line, position, values)[None, :]).ravel()
        tried += len(grown)
        order = np.argsort(grown, kind="stable")
        kept = np.unique(np.concatenate([order[: size.width], order[-size.width :]]))
        before, value = np.divmod(kept, len(values))
        rows = np.concatenate([rows[before], values[value][:, None]], axis=1)
        error = grown[kept]
    return rows, tried


def _changed(line: _Line, rng: np.random.Generator, rows: Ints) -> Ints:
    """Each row with one input moved, by one count up to the whole range, or to a limit."""
    rows = rows.copy()
    at, moved = np.arange(len(rows)), rng.integers(len(line.levels), size=len(rows))
    span = (line.highs - line.lows)[moved]
    step = np.exp2(np.log2(span + 1.0) * rng.random(len(rows))).astype(np.int64)
    value = rows[at, moved] + step * rng.choice((-1, 1), len(rows))
    rows[at, moved] = np.clip(value, line.lows[moved], line.highs[moved])
    return rows
