"""What training itself says of sample rows: log-odds from standardised columns and unfolded weights.

    z = B + d + sum_j W_j q_j,    q_j = (v_j - c_j) / s_j,    j = 1 … m, in that order, in binary64

A check holds the device's numbers, which went through the fold, against these. Each comes with a bound on its distance
to the exact real function of the same B, W, c, s. d is 0, or where the plan states the event's share in the field what
turns the odds of the fitted rows into those of the field:

    d = ln(share / (1 - share) * Ω_0 / Ω_1),    Ω_k the weight of the fitted rows of class k

Computed here, and not with what sealing has for it, so that a mistake there shows. The rows are invented, and where the
plan allows real ones some of the fitted rows come after them.

The bound. u = 2^-53, e = 2^-1075 (half the smallest subnormal number). Every operation obeys fl(x) = x (1 + d) + h with
|d| <= u, |h| <= e; h = 0 in a sum or difference (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., 2.2
and problem 2.19). Let p be the computed W q.

* Each term passes a subtraction, a division and a product: p = W q (1 + d)^3 + h', |h'| <= 1.01 e (1 + |W|). So
  |p - W q| <= 3 u |p| / (1 - 6 u) + 1.02 e (1 + |W|).
* Each sum z_j = fl(z_(j-1) + p_j) errs by at most u |z_j|, since fl(x) = x / (1 + d) too with |d| <= u.
* z_0 = fl(B + d) likewise; d is computed to 50 digits and rounded once, which errs by u |d|.

    |z - exact| <= u (|z_0| + |d| + sum_j |z_j| + 3.01 sum_j |p_j|) + 1.02 e sum_j (1 + |W_j|)

The items of z_0 are left out where d = 0: then z_0 = B.

This is a running error bound (Higham 3.3): it knows the partial sums that occurred. It is itself computed in binary64
from nonnegative numbers: fewer than 4 m roundings up or down, each by u at most, so a factor 1 + 2^-20 covers
m < 2^30; the last item is written as 2^-1073 sum_j (1 + |W_j|), four times what is needed, for the same reason.
"""

from __future__ import annotations

import hashlib
import random
from collections.abc import Sequence
from decimal import Context, Decimal
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from runtime_min.errors import FitError, Problem
from runtime_min.model import Score, TrainedInput, TrainedTerm, Witness
from trainer.design import Column, design_matrix

Floats = npt.NDArray[np.float64]

INVENTED_ROWS = 32
REAL_ROWS = 16
UNIT_ROUNDOFF = 2.0**-53
ROUNDED_BOUND = 1.0 + 2.0**-20
UNDERFLOW = 2.0**-1073


def witness_of(
    inputs: Sequence[TrainedInput],
    terms: Sequence[TrainedTerm],
    scores: Sequence[Score],
    limits: Sequence[tuple[float, float]],
    shift: float = 0.0,
    real: Floats | None = None,
) -> tuple[Witness, ...]:
    """The witness over `limits`, one (low, high) an input; for levels (0, K - 1). shift: d, in log-odds.

    real (n, inputs): rows of the data, complete, or None; a limit stands in for what rounding puts beyond it.
    Raises FitError where a limit is so far out that log-odds there are not finite.
    """
    parts = [_invented(inputs, limits), _corners(terms, scores[0], limits)]
    if real is not None:
        parts.append(np.clip(real, *np.array(limits).T))
    values = np.concatenate(parts)
    answers = [log_odds_with_bounds(terms, score, values, shift) for score in scores]
    log_odds = np.column_stack([z for z, _ in answers])
    bounds = np.column_stack([bound for _, bound in answers])
    if not (np.isfinite(log_odds).all() and np.isfinite(bounds).all()):
        raise FitError(Problem("ranges", "found limits at which the log-odds are not finite", "narrow the ranges"))
    rows = zip(values.tolist(), log_odds.tolist(), bounds.tolist(), strict=True)
    return tuple(Witness(tuple(row), tuple(z), tuple(bound)) for row, z, bound in rows)


def log_odds_with_bounds(
    terms: Sequence[TrainedTerm], score: Score, values: Floats, shift: float = 0.0
) -> tuple[Floats, Floats]:
    """(log-odds, bounds), each (n,), of rows `values` (n, inputs), a level as its index; see the head of the module."""
    columns = [Column(term.name, term.form, term.of, term.level) for term in terms]
    centres = np.array([term.centre for term in terms])
    scales = np.array([term.scale for term in terms])
    weights = np.array(score.weights)
    with np.errstate(over="ignore", invalid="ignore"):
        products = (design_matrix(columns, values) - centres) / scales * weights
        steps = np.empty((len(values), len(terms) + 1))
        steps[:, 0] = score.intercept + shift
        steps[:, 1:] = products
        partial = np.add.accumulate(steps, axis=1)
        sizes = np.abs(partial[:, 1:]).sum(axis=1) + 3.01 * np.abs(products).sum(axis=1)
        if shift:
            sizes += abs(score.intercept + shift) + abs(shift)
        bounds = ROUNDED_BOUND * UNIT_ROUNDOFF * sizes + UNDERFLOW * (1.0 + np.abs(weights)).sum()
    return partial[:, -1], bounds


def shift_to_field(prevalence: Fraction | None, class_weights: Sequence[float]) -> float:
    """d, from the event's share in the field (None: that of the rows) and the weight of the rows of either class."""
    if prevalence is None:
        return 0.0
    first, event = map(Fraction, class_weights)
    odds = prevalence / (1 - prevalence) * first / event
    digits = Context(prec=60)
    return float(digits.subtract(digits.ln(Decimal(odds.numerator)), digits.ln(Decimal(odds.denominator))))


def real_rows(keys: Sequence[bytes], fitted: npt.NDArray[np.intp]) -> npt.NDArray[np.intp]:
    """Which of the fitted rows (their positions in `keys`) the witness holds: the first by SHA-256, each content once.

    keys: what each row holds, as `split` tells rows apart; so the order of the rows changes nothing.
    """
    first: dict[bytes, int] = {}
    for position in fitted.tolist():
        first.setdefault(hashlib.sha256(b"witness" + keys[position]).digest(), position)
    return np.array([first[digest] for digest in sorted(first)[:REAL_ROWS]], dtype=np.intp)


def _invented(inputs: Sequence[TrainedInput], limits: Sequence[tuple[float, float]]) -> Floats:
    """Uniform over the limits, from a generator that knows nothing but the names of the inputs."""
    uniform = random.Random("\n".join(entry.name for entry in inputs)).random
    shares = np.array([uniform() for _ in range(INVENTED_ROWS * len(inputs))]).reshape(INVENTED_ROWS, len(inputs))
    low, high = np.array(limits).T
    # (1 - t) low + t high: high - low could be too large for binary64.
    values: Floats = np.clip((1.0 - shares) * low + shares * high, low, high)
    for position, entry in enumerate(inputs):
        if entry.levels:
            values[:, position] = np.floor(shares[:, position] * len(entry.levels))
    return values


def _corners(terms: Sequence[TrainedTerm], score: Score, limits: Sequence[tuple[float, float]]) -> Floats:
    """Four corners of the limits: all low, all high, the least and the greatest log-odds."""
    ends = np.array(limits).T
    least, greatest = ends.copy()
    levels: dict[int, list[float]] = {}
    for term, weight in zip(terms, score.weights, strict=True):
        position = term.of[0]
        if term.level is not None:
            levels.setdefault(position, [0.0]).append(weight)
        else:
            low, high = limits[position]
            least[position], greatest[position] = (low, high) if weight > 0 else (high, low)
    for position, weights in levels.items():
        least[position] = float(weights.index(min(weights)))
        greatest[position] = float(weights.index(max(weights)))
    corners: Floats = np.stack([*ends, least, greatest])
    return corners
