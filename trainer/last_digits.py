"""Round the optimum to the grid of weights (multiples of 2^-30) so that it does not show how it was computed.

Row order, threads, block sizes and libraries change the unrounded weights in their last bits. A weight that lies near
a midpoint of the grid is taken further, with sums in pairs of doubles, until one more Newton step cannot change its
side. What a step changes is a sample of what rounding does to a weight; 100 times that is what is doubted.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from trainer.exact_sums import UNIT_ROUNDOFF
from trainer.grid import WEIGHT_STEP
from trainer.objective import Checked, Objective, checked_gradient, gradient, gradient_along, gradient_in_pairs

Array = NDArray[np.float64]

_PAIR_STEPS = 3  # at most, of each kind, where a weight lies near a midpoint
_LEAST_DOUBT = 1e-12  # no weight nearer to a midpoint than this is rounded without a closer look
_DOUBT_PER_CHANGE = 100.0
_DOUBT_OF_DOUBLES = 8.0 * UNIT_ROUNDOFF  # times `of_rows`; beside the sample, which can be a lucky one
_DOUBT_OF_ROWS = 100.0 * UNIT_ROUNDOFF  # times `of_rows`, where it is all that is left


def to_grid(
    objective: Objective, theta: Array, covariance: Array, curvature: Array, block_rows: int
) -> tuple[Array, Checked]:
    """θ on the grid and the gradient there; covariance (d + 1, d + 1); curvature (d + 1,), the Hessian's diagonal.

    `offset` is one more Newton step, from the rounded weights. `of_rows` is what rounding in single rows does to a
    step: some u (Σ_k |C_jk| h_k + sd_j Σ|θ|), h_k² = H_kk being about the sum of the squared slopes times entries.
    Ties, should there be any, go to the even multiple.
    """
    sds = np.sqrt(covariance.diagonal())
    of_rows = np.abs(covariance) @ np.sqrt(curvature) + sds * float(np.abs(theta).sum())
    least_doubt = np.maximum(_DOUBT_OF_DOUBLES * of_rows, _LEAST_DOUBT)
    rounded = np.rint(theta / WEIGHT_STEP) * WEIGHT_STEP
    checked = checked_gradient(objective, rounded, block_rows=block_rows)
    offset = -(covariance @ checked.slope)
    undecided = np.abs(offset) + _doubt(rounded + offset - theta, sds, least_doubt) >= 0.5 * WEIGHT_STEP
    if not undecided.any():
        return rounded, checked
    # A gradient in doubles is cheap beside one in pairs: perhaps θ was not settled to its last digits.
    theta = rounded + offset
    step = -(covariance @ gradient(objective, theta, block_rows=block_rows)[0])
    final = _nearest(theta, step)
    undecided = _from_midpoint(theta, step) <= _doubt(step, sds, least_doubt)
    if undecided.any():
        final = _round_in_pairs(objective, theta + step, covariance, of_rows, undecided, block_rows)
    if (final != rounded).any():
        checked = checked_gradient(objective, final, block_rows=block_rows)
    return final, checked


def _doubt(change: Array, sds: Array, least: Array) -> Array:
    """What is doubted of each weight: the largest change in posterior sd stands for all, so that none passes by a lucky
    sample."""
    doubt: Array = np.maximum(sds * (_DOUBT_PER_CHANGE * float(np.abs(change / sds).max())), least)
    return doubt


def _round_in_pairs(
    objective: Objective,
    theta: Array,
    covariance: Array,
    of_rows: Array,
    undecided: NDArray[np.bool_],
    block_rows: int,
) -> Array:
    """The grid point next to the optimum, for weights that sums in doubles leave undecided; θ is not rounded.

    First only the undecided Newton steps are summed in pairs, which is cheap and leaves the rounding in single rows.
    Where that does not decide (columns that nearly repeat each other), everything is in pairs.
    """

    def along(point: Array) -> Array:
        step = np.zeros(len(point))
        step[undecided] = -gradient_along(objective, point, covariance[:, undecided], block_rows=block_rows)
        return step

    def whole(point: Array) -> Array:
        result: Array = -(covariance @ gradient_in_pairs(objective, point))
        return result

    theta, step, decided = _refined(theta, along, np.where(undecided, _DOUBT_OF_ROWS * of_rows, -math.inf))
    if not decided:
        theta, step, _ = _refined(theta, whole, np.zeros(len(theta)))
    return _nearest(theta, step)


def _refined(theta: Array, newton_step: Callable[[Array], Array], least_doubt: Array) -> tuple[Array, Array, bool]:
    """θ and a last step not yet added, after steps until what one changes cannot take θ + step across a midpoint.

    Weights with a least doubt of −∞ are not asked.
    """
    step = np.zeros(len(theta))
    for _ in range(_PAIR_STEPS):
        before, theta = theta, theta + step
        lost = step - (theta - before)  # what rounding took from the step
        step = newton_step(theta)
        doubt = np.maximum(_DOUBT_PER_CHANGE * np.abs(step - lost), least_doubt)
        distance = _from_midpoint(theta, step)
        if (distance > doubt)[least_doubt >= 0.0].all():
            return theta, step, True
        if (least_doubt >= 0.5 * WEIGHT_STEP).any():
            break
    return theta, step, False


def _from_midpoint(theta: Array, step: Array) -> Array:
    """Distance of θ + step from the nearest midpoint of the grid."""
    _, rest = _split(theta, step)
    result: Array = np.abs(np.abs(rest - np.rint(rest)) - 0.5) * WEIGHT_STEP
    return result


def _nearest(theta: Array, step: Array) -> Array:
    """θ + step on the grid, ties to the even multiple."""
    even, rest = _split(theta, step)
    result: Array = (even + np.rint(rest)) * WEIGHT_STEP
    return result


def _split(theta: Array, step: Array) -> tuple[Array, Array]:
    """θ + step as an even multiple of the grid and a rest in units of it, the step not lost in the sum."""
    even = 2.0 * np.rint(theta / (2.0 * WEIGHT_STEP))
    return even, (theta - even * WEIGHT_STEP + step) / WEIGHT_STEP
