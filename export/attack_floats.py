"""The search for the worst inputs in floating point.

The log-odds error of a device at inputs x is written as a sum of small parts, each found exactly or nearly so by
error-free transformations (Ogita, Rump and Oishi 2005, Accurate sum and dot product):

    e(x) = (b - T(d)) + sum_j [ (u_j - w_j)(x_j - d_j) + u_j * subtraction error + product error + sum error ]

in the words of `budget`; a real input X_j up to half a gap from x_j adds |w_j| times that half gap with whichever sign
hurts. Candidates are uniform rows, corners, rows grown input by input from the best few hundred beginnings (a beam),
and changes of the best rows by a few units in the last place up to the whole range; or every row, where the inputs are
levels and counts and there are few enough.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from export.attack_effort import CHUNK, Effort, Found, every_row, largest, row_count
from export.exact import datums, device_intercept, device_weights, log_odds_of, slopes
from runtime_min.model import SealedModel, TrainedModel

Floats = npt.NDArray[np.floating[Any]]

DTYPES: dict[str, type[np.floating[Any]]] = {"binary32": np.float32, "binary64": np.float64}


@dataclass(frozen=True)
class _Line:
    """One score of both models as arrays of the arithmetic, and the small differences between them in binary64."""

    dtype: type[np.floating[Any]]
    lows: Floats
    highs: Floats
    levels: tuple[int, ...]
    whole: tuple[bool, ...]
    datums: Floats
    intercept: np.floating[Any]
    intercept_off: float
    weights: tuple[Floats, ...]
    weights_off: tuple[Floats, ...]
    trained_weights: tuple[Floats, ...]


@dataclass(frozen=True)
class _State:
    """Rows after some of the terms: partial log-odds, error so far, and what reals can add to the error either way."""

    z: Floats
    error: Floats
    up: Floats
    down: Floats

    def harm(self) -> Floats:
        """The largest |device - trained| over the reals that round to each row."""
        return np.maximum(self.error + self.up, self.down - self.error)


def search_floats(trained: TrainedModel, sealed: SealedModel, k: int, rng: np.random.Generator, size: Effort) -> Found:
    """The best rows found for class k + 1, best first, and how many were tried."""
    line = _line(trained, sealed, k)
    with np.errstate(all="ignore"):
        count = row_count(sealed, size.every)
        if count is not None:
            best = np.zeros((0, len(sealed.inputs)), line.dtype)
            for rows in every_row(sealed, CHUNK):
                best = _best(line, np.concatenate([best, rows.astype(line.dtype)]), size.verified)
            return Found(_rows(best), count, everything=True)
        best, tried = _search(line, rng, size)
        return Found(_rows(_best(line, best, size.verified)), tried, everything=False)


def _rows(rows: Floats) -> list[tuple[float, ...]]:
    return [tuple(float(value) for value in row) for row in rows]


def _line(trained: TrainedModel, sealed: SealedModel, k: int) -> _Line:
    dtype = DTYPES[sealed.arithmetic]
    positions = range(len(sealed.inputs))
    exact = [slopes(trained, sealed, k, at) for at in positions]
    device = [device_weights(sealed, k, at) for at in positions]
    origin = log_odds_of(trained, sealed, datums(sealed))[k]
    return _Line(
        dtype=dtype,
        lows=np.array([entry.low for entry in sealed.inputs], dtype),
        highs=np.array([entry.high for entry in sealed.inputs], dtype),
        levels=tuple(len(entry.levels) for entry in sealed.inputs),
        whole=tuple(entry.counts is not None for entry in sealed.inputs),
        datums=np.array([float(datum) for datum in datums(sealed)], dtype),
        intercept=dtype(sealed.intercepts[k]),
        intercept_off=float(device_intercept(sealed, k) - origin),
        weights=tuple(np.array([float(u) for u in row], dtype) for row in device),
        weights_off=tuple(
            np.array([float(u - w) for u, w in zip(row, meant, strict=True)])
            for row, meant in zip(device, exact, strict=True)
        ),
        trained_weights=tuple(np.array([float(w) for w in row]) for row in exact),
    )


# --- the error of rows ------------------------------------------------------------------------------------------------


def _start(line: _Line, rows: int) -> _State:
    zero = np.zeros(rows)
    return _State(np.full(rows, line.intercept), zero + line.intercept_off, zero, zero)


def _run(line: _Line, rows: Floats) -> _State:
    state = _start(line, len(rows))
    for position in range(rows.shape[1]):
        state = _step(line, position, state, rows[:, position])
    return state


def _step(line: _Line, position: int, state: _State, x: Floats) -> _State:
    """Add one term, in the order of the reference scorer."""
    if line.levels[position]:
        level = x.astype(np.intp)
        z, error = _two_sum(state.z, line.weights[position][level])
        return _State(z, state.error + line.weights_off[position][level] + error, state.up, state.down)
    weight, datum = line.weights[position][0], line.datums[position]
    value, subtraction = _two_sum(x, -datum) if datum else (x, np.zeros(len(x)))
    product, rounding = _two_product(weight, value)
    z, error = _two_sum(state.z, product)
    wide = float(weight)
    exact = value.astype(np.float64) - subtraction
    error = state.error + line.weights_off[position][0] * exact + wide * subtraction + rounding + error
    above = (np.nextafter(x, line.dtype(np.inf)).astype(np.float64) - x) / 2
    below = (x - np.nextafter(x, line.dtype(-np.inf)).astype(np.float64)) / 2
    if line.whole[position]:  # of counts, half a gap holds no other whole number until gaps are wider than 1
        above, below = np.floor(above), np.floor(below)
    slope = line.trained_weights[position][0]
    less, more = (below, above) if slope > 0 else (above, below)
    return _State(z, error, state.up + abs(slope) * less, state.down + abs(slope) * more)


def _two_sum(a: Floats, b: Floats | np.floating[Any]) -> tuple[Floats, Floats]:
    """(s, s - (a + b)): the rounded sum and its error, exact where nothing overflows (Knuth)."""
    s = a + b
    t = s - a
    lost = (a - (s - t)) + (b - t)
    return s, -lost.astype(np.float64)


def _two_product(a: np.floating[Any], b: Floats) -> tuple[Floats, Floats]:
    """(p, p - a b): the rounded product and its error; in binary64 by splitting (Dekker 1971, Veltkamp)."""
    p = a * b
    if b.dtype == np.float32:
        return p, p.astype(np.float64) - np.float64(a) * b.astype(np.float64)
    a_high, b_high = _upper_half(np.atleast_1d(a)), _upper_half(b)
    a_low, b_low = a - a_high, b - b_high
    return p, -(a_low * b_low - (((p - a_high * b_high) - a_low * b_high) - a_high * b_low))


def _upper_half(x: Floats) -> Floats:
    """The upper 26 bits of binary64 numbers; very large ones are made smaller on the way, so that nothing overflows."""
    scale = np.where(np.abs(x) > 2.0**990, 2.0**-40, 1.0)
    wide = (x * scale) * (2.0**27 + 1)
    return (wide - (wide - x * scale)) / scale


# --- candidates -------------------------------------------------------------------------------------------------------


def _search(line: _Line, rng: np.random.Generator, size: Effort) -> tuple[Floats, int]:
    """The best rows found, and how many were tried."""
    with np.errstate(all="ignore"):
        width = max(size.width, size.verified)
        rows = np.concatenate([_uniform(line, rng, size.uniform), _corners(line, rng, size.corners)])
        tried = len(rows)
        pool = [_best(line, rows, width)]
        for run in range(size.beams):
            grown, count = _beam(line, rng, size, run)
            pool.append(_best(line, grown, width))
            tried += count
        best = _best(line, np.concatenate(pool), width)
        for _ in range(size.rounds):
            changed = _changed(line, rng, np.repeat(best, 16, axis=0))
            tried += len(changed)
            best = _best(line, np.concatenate([best, changed]), width)
    return best, tried


def _best(line: _Line, rows: Floats, count: int) -> Floats:
    harm = np.nan_to_num(_run(line, rows).harm(), nan=-1.0)
    return rows[largest(harm, count)]


def _column(line: _Line, rng: np.random.Generator, position: int, count: int) -> Floats:
    """Uniform values of one input."""
    if line.levels[position]:
        return rng.integers(line.levels[position], size=count).astype(line.dtype)
    low, high = np.float64(line.lows[position]), np.float64(line.highs[position])
    share = rng.random(count)
    return _clipped(line, position, low * (1 - share) + high * share)


def _clipped(line: _Line, position: int, values: npt.NDArray[Any]) -> Floats:
    if line.whole[position]:
        values = np.rint(values)
    return np.clip(values.astype(line.dtype), line.lows[position], line.highs[position])


def _uniform(line: _Line, rng: np.random.Generator, count: int) -> Floats:
    return np.stack([_column(line, rng, position, count) for position in range(len(line.levels))], axis=1)


def _corners(line: _Line, rng: np.random.Generator, count: int) -> Floats:
    if 2 ** len(line.levels) <= count:
        return np.array(list(itertools.product(*zip(line.lows, line.highs, strict=True))), line.dtype)
    side = rng.integers(2, size=(count, len(line.levels)))
    return np.where(side == 1, line.highs, line.lows).astype(line.dtype)


def _beam(line: _Line, rng: np.random.Generator, size: Effort, run: int) -> tuple[Floats, int]:
    """Grow rows input by input, keeping the beginnings with the largest error so far.

    Errors are largest where values are, so each run leans towards one corner: the first two towards the largest and
    the smallest log-odds, the others towards random ones.
    """
    pulls: list[Callable[[float], bool]] = [lambda slope: slope > 0, lambda slope: slope < 0]
    state = _start(line, 1)
    rows = np.zeros((1, 0), line.dtype)
    tried = 0
    for position in range(len(line.levels)):
        slope = float(line.trained_weights[position][0])
        high = pulls[run](slope) if run < 2 else bool(rng.integers(2))
        values = _near(line, rng, position, high, len(rows) * size.branch)
        wide = _State(*(np.repeat(part, size.branch) for part in (state.z, state.error, state.up, state.down)))
        grown = _step(line, position, wide, values)
        tried += len(values)
        # Half of the beginnings are kept for an error above the trained log-odds, half for one below.
        above = np.argsort(-np.nan_to_num(grown.error + grown.up, nan=-1.0), kind="stable")[: size.width]
        below = np.argsort(-np.nan_to_num(grown.down - grown.error, nan=-1.0), kind="stable")[: size.width]
        kept = np.unique(np.concatenate([above, below]))
        rows = np.concatenate([np.repeat(rows, size.branch, axis=0), values[:, None]], axis=1)[kept]
        state = _State(grown.z[kept], grown.error[kept], grown.up[kept], grown.down[kept])
    return rows, tried


def _near(line: _Line, rng: np.random.Generator, position: int, high: bool, count: int) -> Floats:
    """Values of one input, most of them near one limit: at 2^-1 to 2^-20 of the range from it; some anywhere."""
    values = _column(line, rng, position, count)
    if line.levels[position]:
        return values
    low_end, high_end = np.float64(line.lows[position]), np.float64(line.highs[position])
    distance = (high_end - low_end) * np.exp2(-20 * rng.random(count))
    near = _clipped(line, position, high_end - distance if high else low_end + distance)
    return np.where(rng.random(count) < 0.75, near, values).astype(line.dtype)


def _changed(line: _Line, rng: np.random.Generator, rows: Floats) -> Floats:
    """Each row with one input (sometimes a few) moved: by a few units in the last place up to the whole range."""
    rows = rows.copy()
    width = len(line.levels)
    for _ in range(1 + int(rng.integers(3) == 0) + int(rng.integers(9) == 0)):
        moved = rng.integers(width, size=len(rows))
        for position in range(width):
            at = np.flatnonzero(moved == position)
            if not len(at):
                continue
            if line.levels[position]:
                rows[at, position] = _column(line, rng, position, len(at))
                continue
            old = rows[at, position].astype(np.float64)
            span = np.float64(line.highs[position]) - np.float64(line.lows[position])
            unit = np.spacing(np.abs(rows[at, position])).astype(np.float64)
            unit = np.maximum(unit, float(line.whole[position]))
            # Log-uniform from one unit to the whole range, either way.
            reach = np.maximum(np.log2(np.maximum(span / unit, 2.0)), 1.0)
            step = unit * np.floor(np.exp2(reach * rng.random(len(at)))) * rng.choice((-1.0, 1.0), len(at))
            rows[at, position] = _clipped(line, position, old + step)
    return rows
