"""The attack on an error budget: a search over the ranges for the inputs with the largest error.

The log-odds error of a device at inputs x is written as a sum of small parts, each found exactly or nearly so by
error-free transformations (Ogita, Rump and Oishi 2005, Accurate sum and dot product):

    e(x) = (b - T(d)) + sum_j [ (u_j - w_j)(x_j - d_j) + u_j * subtraction error + product error + sum error ]

in the words of `budget`; a real input X_j up to half a gap from x_j adds |w_j| times that half gap with whichever sign
hurts. Candidates are uniform rows, corners, rows grown input by input from the best few hundred beginnings (a beam),
and changes of the best rows by a few units in the last place up to the whole range. The search only guides: what is
reported was computed anew in rationals, from the trained model as it stands and the reference scorer.

Deterministic: the same models, seed and effort give the same result.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
import numpy.typing as npt

from export.budget import Budget, datums
from export.exact import slopes, trained_log_odds
from runtime_min.model import SealedModel, TrainedModel
from runtime_min.score import scores
from runtime_min.sealing import round_to

Floats = npt.NDArray[np.floating[Any]]

DTYPES: dict[str, type[np.floating[Any]]] = {"binary32": np.float32, "binary64": np.float64}
NEAREST = Fraction(2**30 - 1, 2**30)
"""Reals are taken at this share of half a gap: beyond it ties decide which number a real rounds to."""


@dataclass(frozen=True)
class Effort:
    """Sizes of the search. uniform: random rows; corners: rows of limits; beams: runs of the beam; width: beginnings
    kept; branch: values tried for each; rounds: rounds of changes; verified: rows computed anew in rationals."""

    uniform: int
    corners: int
    beams: int
    width: int
    branch: int
    rounds: int
    verified: int


EFFORTS = {
    "quick": Effort(uniform=20_000, corners=1_000, beams=4, width=24, branch=64, rounds=40, verified=8),
    "thorough": Effort(uniform=200_000, corners=4_000, beams=16, width=64, branch=128, rounds=200, verified=32),
}


@dataclass(frozen=True)
class Attack:
    """The largest error found. `inputs`: the device numbers; `reals`: the real inputs that round to them."""

    worst: Fraction
    share: float
    inputs: tuple[float, ...]
    reals: tuple[Fraction, ...]
    tried: int


@dataclass(frozen=True)
class _Line:
    """One score of both models as arrays of the arithmetic, and the small differences between them in binary64."""

    dtype: type[np.floating[Any]]
    lows: Floats
    highs: Floats
    levels: tuple[int, ...]
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


def attack(trained: TrainedModel, sealed: SealedModel, budget: Budget, seed: int, effort: str) -> Attack:
    """Search for the largest |device log-odds - trained log-odds|. effort: "quick" (half a second at most for 40
    inputs) or "thorough" (a few seconds).

    A share above 1 means that the budget, or something that it relies on, is wrong.
    """
    size = EFFORTS[effort]
    found: list[tuple[float, int, tuple[float, ...]]] = []
    tried = 0
    for k in range(len(sealed.intercepts)):
        line = _line(trained, sealed, k)
        rng = np.random.default_rng([seed, k])
        rows, count = _search(line, rng, size)
        tried += count
        harm = _run(line, rows).harm()
        for at in np.argsort(-harm, kind="stable")[: size.verified]:
            found.append((float(harm[at]), k, tuple(float(value) for value in rows[at])))
    worst = max((_verified(trained, sealed, k, row) for _, k, row in found), key=lambda result: result[0])
    share = float(worst[0] / budget.log_odds) if budget.log_odds else (math.inf if worst[0] else 0.0)
    return Attack(worst[0], share, worst[1], worst[2], tried)


def error_at(trained: TrainedModel, sealed: SealedModel, reals: Sequence[Fraction], k: int = 0) -> Fraction:
    """|device log-odds - trained log-odds| of class k + 1 at real inputs, in rationals, by the reference scorer."""
    inputs = tuple(round_to(sealed.arithmetic, real) for real in reals)
    return abs(Fraction(scores(sealed, inputs)[k]) - trained_log_odds(trained, reals)[k])


def _verified(
    trained: TrainedModel, sealed: SealedModel, k: int, row: tuple[float, ...]
) -> tuple[Fraction, tuple[float, ...], tuple[Fraction, ...]]:
    """The error at the worst reals that round to a row, both ways."""
    results = []
    for sign in (1, -1):
        reals = []
        for position, (value, entry) in enumerate(zip(row, sealed.inputs, strict=True)):
            if entry.levels:
                reals.append(Fraction(value))
                continue
            lower = (slopes(trained, k, position, 0)[0] > 0) == (sign > 0)
            neighbour = float(np.nextafter(DTYPES[sealed.arithmetic](value), -np.inf if lower else np.inf))
            real = Fraction(value) + (Fraction(neighbour) - Fraction(value)) / 2 * NEAREST
            reals.append(real if round_to(sealed.arithmetic, real) == value else Fraction(value))
        results.append((error_at(trained, sealed, reals, k), row, tuple(reals)))
    return max(results, key=lambda result: result[0])


def _line(trained: TrainedModel, sealed: SealedModel, k: int) -> _Line:
    dtype = DTYPES[sealed.arithmetic]
    exact = [slopes(trained, k, at, len(entry.levels)) for at, entry in enumerate(sealed.inputs)]
    origin = trained_log_odds(trained, datums(sealed))[k]
    return _Line(
        dtype=dtype,
        lows=np.array([entry.low for entry in sealed.inputs], dtype),
        highs=np.array([entry.high for entry in sealed.inputs], dtype),
        levels=tuple(len(entry.levels) for entry in sealed.inputs),
        datums=np.array([term.datum or 0.0 for term in sealed.terms], dtype),
        intercept=dtype(sealed.intercepts[k]),
        intercept_off=float(Fraction(sealed.intercepts[k]) - origin),
        weights=tuple(np.array(term.weights[k], dtype) for term in sealed.terms),
        weights_off=tuple(
            np.array([float(Fraction(u) - w) for u, w in zip(term.weights[k], row, strict=True)])
            for term, row in zip(sealed.terms, exact, strict=True)
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
    return rows[np.argsort(-harm, kind="stable")[:count]]


def _column(line: _Line, rng: np.random.Generator, position: int, count: int) -> Floats:
    """Uniform values of one input."""
    if line.levels[position]:
        return rng.integers(line.levels[position], size=count).astype(line.dtype)
    low, high = np.float64(line.lows[position]), np.float64(line.highs[position])
    share = rng.random(count)
    return _clipped(line, position, low * (1 - share) + high * share)


def _clipped(line: _Line, position: int, values: npt.NDArray[Any]) -> Floats:
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
            # Log-uniform from one unit to the whole range, either way.
            reach = np.maximum(np.log2(np.maximum(span / unit, 2.0)), 1.0)
            step = unit * np.floor(np.exp2(reach * rng.random(len(at)))) * rng.choice((-1.0, 1.0), len(at))
            rows[at, position] = _clipped(line, position, old + step)
    return rows
