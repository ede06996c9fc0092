"""The log posterior of two classes: rows -> its gradient and Hessian, block by block.

    maximise  Σ_l ω_l log p(y_l | x_l)  −  ½ Σ_i ((θ_i − m_i) / s_i)²,     z = b + Σ_j w_j x_j,   θ = (b, w_1 … w_d)

Everything here is of the *negative* log posterior, which is convex. A row of class 0 has side +1, of class 1 side −1.
With t = side · z its loss is log(1 + exp t), its slope by t is ω expit(t) and its curvature ω expit(t) expit(−t):
sums and products of positive numbers, where p − y and p (1 − p) would cancel. The design has the sides in it, which
rounds nothing.
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
WIDE = 24  # weights from which a product that knows its symmetry (syrk) beats a general one
_SIDE_BY_SIDE = 16  # rows that are compared in one loop
_PAIR_BLOCK_ROWS = 256  # in pairs some twenty arrays of a block's size are alive
_LARGEST_EXPONENT = 700.0  # its exp is finite, and expit(−700) = 1e-304 is far below any sum it joins


@dataclass(frozen=True)
class Prior:
    """Gaussian prior on the standardised weights, in column order; infinite sd: flat; the intercept's mean is 0."""

    means: tuple[float, ...]
    sds: tuple[float, ...]
    intercept_sd: float = math.inf


class Objective(NamedTuple):
    """design (d + 1, n): each row's 1 and columns, times its side, the numbers of a column side by side in memory. From
    `WIDE` weights on it is the columns as they are given, (d, n): a copy would cost more than short loops do.

    sides (n,) ±1; row_weights (n,) > 0 or None; means and precisions 1/sd² (d + 1,), 0 for flat.
    """

    design: Array
    sides: Array
    row_weights: Array | None
    means: Array
    precisions: Array


class _Block(NamedTuple):
    """Some rows of an objective; sides is None where the design has them in it."""

    rows: slice
    design: Array
    sides: Array | None
    row_weights: Array | None


def objective_of(columns: Array, labels: NDArray[np.integer], row_weights: Array | None, prior: Prior) -> Objective:
    """Rows of weight 0 say nothing and are left out, so that nothing in them can spoil a sum."""
    if row_weights is not None and not (row_weights > 0).all():
        used = row_weights > 0
        columns, labels, row_weights = columns[used], labels[used], row_weights[used]
    rows, width = columns.shape
    sides: Array = 1.0 - 2.0 * labels.astype(np.float64)
    design = columns.T
    if width + 1 < WIDE:
        design = np.empty((width + 1, rows))
        design[0] = sides
        np.multiply(columns.T, sides, out=design[1:])
    means = np.array((0.0, *prior.means))
    sds = np.array((prior.intercept_sd, *prior.sds))
    return Objective(design, sides, row_weights, means, 1.0 / (sds * sds))


def sided_log_odds(objective: Objective, theta: Array) -> Array:
    """t of each row, (n,)."""
    return _t(theta, _Block(slice(None), *_parts(objective, slice(None))))


def value(objective: Objective, theta: Array) -> float:
    """The negative log posterior at θ, but for a constant: Σ ω log(1 + exp t) + ½ Σ ((θ − m) / s)²."""
    losses = np.logaddexp(0.0, sided_log_odds(objective, theta))
    by_row = losses.sum() if objective.row_weights is None else losses @ objective.row_weights
    return float(by_row + 0.5 * ((theta - objective.means) ** 2 @ objective.precisions))


def slopes(t: Array, row_weights: Array | None) -> tuple[Array, Array]:
    """First and second derivative of each row's loss by t."""
    growth = np.negative(t)
    np.minimum(growth, _LARGEST_EXPONENT, out=growth)
    np.exp(growth, out=growth)  # exp(−t)
    slope = growth + 1.0
    np.divide(1.0, slope, out=slope)  # expit(t)
    growth *= slope
    growth *= slope
    if row_weights is not None:
        slope *= row_weights
        growth *= row_weights
    return slope, growth


def gradient(objective: Objective, theta: Array, *, block_rows: int = BLOCK_ROWS) -> tuple[Array, Array]:
    """Gradient at θ, (d + 1,), and t there, (n,): one reading of the design."""
    total = (theta - objective.means) * objective.precisions
    t = np.empty(objective.design.shape[1])
    for block in _blocks(objective, block_rows):
        t[block.rows] = part = _t(theta, block)
        total += _sum_of_rows(block, slopes(part, block.row_weights)[0])
    return total, t


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
    room = _room(objective, block_rows)
    for block in _blocks(objective, block_rows):
        slope, _ = slopes(_t(theta, block), block.row_weights)
        total += _sum_of_rows(block, slope)
        absolute = np.abs(block.design, out=room[:, : len(slope)])
        if block.sides is not None:
            sizes[0] += slope.sum()
        first = 0 if block.sides is None else 1
        sizes[first:] += absolute @ slope
        np.maximum(largest[first:], _row_maxima(absolute), out=largest[first:])
    return Checked(total, sizes, largest)


def gradient_and_hessian(
    objective: Objective, theta: Array, t: Array, *, block_rows: int = BLOCK_ROWS
) -> tuple[Array, Array]:
    """Gradient (d + 1,) and Hessian (d + 1, d + 1) at θ, where the sided log-odds are t."""
    size = len(theta)
    total = (theta - objective.means) * objective.precisions
    hessian = np.zeros((size, size))
    hessian.flat[:: size + 1] = objective.precisions
    room = _room(objective, block_rows)
    for block in _blocks(objective, block_rows):
        slope, curvature = slopes(t[block.rows], block.row_weights)
        total += _sum_of_rows(block, slope)
        if block.sides is None:
            hessian += np.multiply(block.design, curvature, out=room[:, : len(slope)]) @ block.design.T
        else:
            hessian[0, 0] += curvature.sum()
            hessian[0, 1:] += block.design @ curvature
            scaled = np.multiply(block.design, np.sqrt(curvature), out=room[:, : len(slope)])
            hessian[1:, 1:] += scaled @ scaled.T  # a product that knows its symmetry
    if len(objective.design) < size:
        hessian[1:, 0] = hessian[0, 1:]
    return total, hessian


def _parts(objective: Objective, rows: slice) -> tuple[Array, Array | None, Array | None]:
    design, sides, row_weights, means, _ = objective
    return (
        design[:, rows],
        None if len(design) == len(means) else sides[rows],
        None if row_weights is None else row_weights[rows],
    )


def _blocks(objective: Objective, block_rows: int) -> Iterator[_Block]:
    for start in range(0, objective.design.shape[1], block_rows):
        rows = slice(start, start + block_rows)
        yield _Block(rows, *_parts(objective, rows))


def _t(theta: Array, block: _Block) -> Array:
    if block.sides is None:
        t: Array = theta @ block.design
        return t
    t = theta[1:] @ block.design
    t += theta[0]
    t *= block.sides
    return t


def _sum_of_rows(block: _Block, factors: Array) -> Array:
    """Σ_l factor_l side_l (1, x_l), (d + 1,)."""
    if block.sides is None:
        total: Array = block.design @ factors
        return total
    factors = factors * block.sides
    total = np.empty(len(block.design) + 1)
    total[0] = factors.sum()
    np.dot(block.design, factors, out=total[1:])
    return total


def _sided(block: _Block) -> Array:
    """The design (d + 1, rows) with the sides in it."""
    if block.sides is None:
        return block.design
    return np.vstack((block.sides, block.design * block.sides))


def _room(objective: Objective, block_rows: int) -> Array:
    """Room for what is made of a block, laid out like the design."""
    return np.empty_like(objective.design[:, :block_rows])


def _row_maxima(block: Array) -> Array:
    """The largest of each row of (m, rows) >= 0; several columns side by side where these are laid out so."""
    size, rows = block.shape
    whole = rows - rows % _SIDE_BY_SIDE
    if block.flags.c_contiguous or not whole:
        result: Array = block.max(axis=1)
        return result
    by_row = block.T
    largest = by_row[:whole].reshape(-1, size * _SIDE_BY_SIDE).max(axis=0).reshape(_SIDE_BY_SIDE, size)
    of_all: Array = np.concatenate((largest, by_row[whole:])).max(axis=0)
    return of_all


def gradient_along(objective: Objective, theta: Array, directions: Array, *, block_rows: int = BLOCK_ROWS) -> Array:
    """directionsᵀ g for directions (d + 1, m), the sum over the rows in pairs of doubles, (m,).

    What a row's slope and its part of a direction are rounded by stays: near the optimum some u in posterior sd along
    C e_j, since Σ ω v (x · C e_j)² <= C_jj.
    """
    total = Pairs(np.zeros(directions.shape[1]), np.zeros(directions.shape[1]))
    for block in _blocks(objective, block_rows):
        slope, _ = slopes(_t(theta, block), block.row_weights)
        if block.sides is None:
            along = block.design.T @ directions
        else:
            along = block.design.T @ directions[1:]
            along += directions[0]
            slope *= block.sides
        total = add_pairs(total, pair_sum(two_product(along, np.broadcast_to(slope[:, np.newaxis], along.shape))))
    by_prior: Array = ((theta - objective.means) * objective.precisions) @ directions
    return total.high + (total.low + by_prior)


def gradient_in_pairs(objective: Objective, theta: Array) -> Array:
    """Gradient at θ with log-odds, logistic and sums in pairs of doubles, (d + 1,): what is rounded away does not show
    in 25 digits, in any order of the rows, on any machine."""
    zero = np.zeros(len(theta))
    total = Pairs(zero, zero)
    for block in _blocks(objective, _PAIR_BLOCK_ROWS):
        rows = np.ascontiguousarray(_sided(block).T)
        slope = logistic_pairs(pair_sum(two_product(np.ascontiguousarray(rows.T), theta[:, np.newaxis])))
        if block.row_weights is not None:
            slope = scale_pairs(slope, block.row_weights)
        total = add_pairs(
            total, pair_sum(scale_pairs(Pairs(slope.high[:, np.newaxis], slope.low[:, np.newaxis]), rows))
        )
    total = add_pairs(total, scale_pairs(two_sum(theta, -objective.means), objective.precisions))
    return total.high + total.low
