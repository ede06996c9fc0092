"""The log posterior of two classes: rows -> its gradient and Hessian, block by block.

    maximise  Σ_l ω_l log p(y_l | x_l)  −  ½ Σ_i ((θ_i − m_i) / s_i)²,     z = b + Σ_j w_j x_j,   θ = (b, w_1 … w_d)

Everything here is of the *negative* log posterior, which is convex. A row of class 0 has side +1, of class 1 side −1.
With t = side · z its loss is log(1 + exp t), its slope by z is side ω expit(t) and its curvature ω expit(t) expit(−t):
sums and products of positive numbers, where p − y and p (1 − p) would cancel.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from trainer.exact_sums import Pairs, add_pairs, pair_sum, scale_pairs, two_product, two_sum
from trainer.pair_logistic import logistic_pairs

Array = NDArray[np.float64]

BLOCK_ROWS = 4096  # rows that are read once and used several times while they are in the cache
_PAIR_BLOCK_ROWS = 256  # in pairs some twenty arrays of a block's size are alive
_LARGEST_EXPONENT = 700.0  # its exp is finite, and expit(−700) = 1e-304 is far below any sum it joins


@dataclass(frozen=True)
class Prior:
    """Gaussian prior on the standardised weights, in column order; infinite sd: flat; the intercept's mean is 0."""

    means: tuple[float, ...]
    sds: tuple[float, ...]
    intercept_sd: float = math.inf


class Objective(NamedTuple):
    """columns (n, d); sides (n,) ±1; row_weights (n,) > 0 or None; means and precisions 1/sd² (d + 1,), 0 for flat."""

    columns: Array
    sides: Array
    row_weights: Array | None
    means: Array
    precisions: Array


def objective_of(columns: Array, labels: NDArray[np.integer], row_weights: Array | None, prior: Prior) -> Objective:
    """Rows of weight 0 say nothing and are left out, so that nothing in them can spoil a sum."""
    sides = 1.0 - 2.0 * labels.astype(np.float64)
    if row_weights is not None and not (row_weights > 0).all():
        used = row_weights > 0
        columns, sides, row_weights = columns[used], sides[used], row_weights[used]
    means = np.array((0.0, *prior.means))
    sds = np.array((prior.intercept_sd, *prior.sds))
    return Objective(columns, sides, row_weights, means, 1.0 / (sds * sds))


def log_odds(columns: Array, theta: Array) -> Array:
    """z = b + X w, (n,)."""
    z: Array = columns @ theta[1:]
    z += theta[0]
    return z


def value(objective: Objective, theta: Array) -> float:
    """The negative log posterior at θ, but for a constant: Σ ω log(1 + exp t) + ½ Σ ((θ − m) / s)²."""
    losses = np.logaddexp(0.0, objective.sides * log_odds(objective.columns, theta))
    by_row = losses.sum() if objective.row_weights is None else losses @ objective.row_weights
    return float(by_row + 0.5 * ((theta - objective.means) ** 2 @ objective.precisions))


def slopes(z: Array, sides: Array, row_weights: Array | None) -> tuple[Array, Array]:
    """First and second derivative of each row's loss by its log-odds z."""
    growth = sides * z
    np.negative(growth, out=growth)
    np.exp(np.minimum(growth, _LARGEST_EXPONENT, out=growth), out=growth)  # exp(−t)
    share = 1.0 / (1.0 + growth)  # expit(t)
    weighted = share if row_weights is None else share * row_weights
    return weighted * sides, weighted * (share * growth)


def gradient(objective: Objective, theta: Array, *, block_rows: int = BLOCK_ROWS) -> tuple[Array, Array]:
    """Gradient at θ, (d + 1,), and the log-odds there, (n,): one reading of the columns."""
    total = (theta - objective.means) * objective.precisions
    z = np.empty(len(objective.columns))
    for rows, block, sides, row_weights in _blocks(objective, block_rows):
        part = log_odds(block, theta)
        z[rows] = part
        slope, _ = slopes(part, sides, row_weights)
        total[0] += slope.sum()
        total[1:] += slope @ block
    return total, z


class Checked(NamedTuple):
    """Gradient, Σ|terms| of each of its components, and the largest |entry| of each column (intercept 1), (d + 1,)."""

    slope: Array
    sizes: Array
    largest: Array


def checked_gradient(objective: Objective, theta: Array, *, block_rows: int = BLOCK_ROWS) -> Checked:
    """Gradient at θ with what its rounding and its smallness are measured against."""
    total = (theta - objective.means) * objective.precisions
    sizes = np.abs(total)
    largest = np.zeros(len(theta))
    largest[0] = 1.0
    for _, block, sides, row_weights in _blocks(objective, block_rows):
        slope, _ = slopes(log_odds(block, theta), sides, row_weights)
        total[0] += slope.sum()
        total[1:] += slope @ block
        slope, block = np.abs(slope), np.abs(block)
        sizes[0] += slope.sum()
        sizes[1:] += slope @ block
        largest[1:] = np.maximum(largest[1:], block.max(axis=0))
    return Checked(total, sizes, largest)


def gradient_and_hessian(
    objective: Objective, theta: Array, z: Array, *, block_rows: int = BLOCK_ROWS
) -> tuple[Array, Array]:
    """Gradient (d + 1,) and Hessian (d + 1, d + 1) at θ, whose log-odds are z."""
    width = len(theta) - 1
    firsts = np.zeros((2, width + 1))  # sums of slope and curvature, each times (1, x)
    squares = np.zeros((width, width))
    room = np.empty((min(block_rows, len(z)), width))
    for rows, block, sides, row_weights in _blocks(objective, block_rows):
        both = np.array(slopes(z[rows], sides, row_weights))
        firsts[:, 0] += both.sum(axis=1)
        firsts[:, 1:] += both @ block
        scaled = np.multiply(block, np.sqrt(both[1])[:, np.newaxis], out=room[: len(block)])
        squares += scaled.T @ scaled
    hessian = np.empty((width + 1, width + 1))
    hessian[0], hessian[1:, 0], hessian[1:, 1:] = firsts[1], firsts[1, 1:], squares
    hessian.flat[:: width + 2] += objective.precisions
    return firsts[0] + (theta - objective.means) * objective.precisions, hessian


def _blocks(objective: Objective, block_rows: int) -> Iterator[tuple[slice, Array, Array, Array | None]]:
    columns, sides, row_weights = objective.columns, objective.sides, objective.row_weights
    for start in range(0, len(columns), block_rows):
        rows = slice(start, start + block_rows)
        yield rows, columns[rows], sides[rows], None if row_weights is None else row_weights[rows]


def gradient_along(objective: Objective, theta: Array, directions: Array, *, block_rows: int = BLOCK_ROWS) -> Array:
    """directionsᵀ g for directions (d + 1, m), the sum over the rows in pairs of doubles, (m,).

    What a row's slope and its part of a direction are rounded by stays: near the optimum some u in posterior sd along
    C e_j, since Σ ω v (x · C e_j)² <= C_jj.
    """
    total = Pairs(np.zeros(directions.shape[1]), np.zeros(directions.shape[1]))
    for _, block, sides, row_weights in _blocks(objective, block_rows):
        slope, _ = slopes(log_odds(block, theta), sides, row_weights)
        along = block @ directions[1:] + directions[0]
        total = add_pairs(total, pair_sum(two_product(along, np.broadcast_to(slope[:, np.newaxis], along.shape))))
    by_prior: Array = ((theta - objective.means) * objective.precisions) @ directions
    return total.high + (total.low + by_prior)


def gradient_in_pairs(objective: Objective, theta: Array) -> Array:
    """Gradient at θ with log-odds, logistic and sums in pairs of doubles, (d + 1,): what is rounded away does not show
    in 25 digits, in any order of the rows, on any machine."""
    columns, sides, row_weights, means, precisions = objective
    zero = np.zeros(len(theta))
    total = Pairs(zero, zero)
    for start in range(0, len(columns), _PAIR_BLOCK_ROWS):
        rows = slice(start, start + _PAIR_BLOCK_ROWS)
        side = sides[rows]
        block = np.vstack((np.ones(len(side)), columns[rows].T))  # (d + 1, rows)
        z = pair_sum(two_product(block, np.broadcast_to(theta[:, np.newaxis], block.shape)))
        share = logistic_pairs(Pairs(z.high * side, z.low * side))
        slope = Pairs(share.high * side, share.low * side)
        if row_weights is not None:
            slope = scale_pairs(slope, row_weights[rows])
        terms = scale_pairs(Pairs(slope.high[:, np.newaxis], slope.low[:, np.newaxis]), np.ascontiguousarray(block.T))
        total = add_pairs(total, pair_sum(terms))
    total = add_pairs(total, scale_pairs(two_sum(theta, -means), precisions))
    return total.high + total.low
