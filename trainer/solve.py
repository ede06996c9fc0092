"""Find the MAP weights by Newton's method and prove that they are found.

    θ ← θ − t H⁻¹ g,   g and H gradient and Hessian of the negative log posterior

Step rule. Along a step the second derivative φ″ changes by at most the factor exp(R t), R the largest change of a
log-odds (Bach, Electronic Journal of Statistics 4 (2010), section 2). So a Newton step with R <= 1 always descends:
φ(1) − φ(0) <= −φ″(0) (1 − (e^R − 1 − R)/R²). It is taken whole. Any other step is shortened or stretched until the
slope along it lies between minus half of what it was and zero, which for a convex function is descent with the
curvature condition of Wolfe: convergence from any start. The search needs no further reading of the columns.

Last digits. Weights are multiples of 2^-30 (`grid`). Row order, threads, block sizes and libraries change the
unrounded weights in their last bits, so a weight that lies near a midpoint of the grid is taken further with gradients
in pairs of doubles until one more step cannot change the side.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack
from threadpoolctl import ThreadpoolController

from runtime_min.errors import FitError, Problem
from trainer.exact_sums import UNIT_ROUNDOFF
from trainer.grid import WEIGHT_STEP
from trainer.objective import (
    BLOCK_ROWS,
    Objective,
    Prior,
    gradient,
    gradient_and_hessian,
    gradient_in_pairs,
    log_odds,
    objective_of,
    slopes,
    term_sizes,
)

Array = NDArray[np.float64]

_WHOLE_STEP = 1.0  # R up to which a Newton step is taken whole
_SETTLED = 1e-6  # R after which the Hessian at hand is the optimum's to about this relative error
_MOST_STEPS = 200
_MOST_PAIR_STEPS = 3
_LEAST_PIVOT = 1e-13  # of the scaled Hessian, whose entries carry errors of some 1e-15
_LEAST_DOUBT = 1e-12  # no weight nearer to a midpoint of the grid than this is rounded without a closer look
_DOUBT_PER_CHANGE = 100.0

_threads = ThreadpoolController()  # made once: looking the libraries up takes longer than a small fit


@dataclass(frozen=True)
class Solution:
    """The MAP weights and their certificate.

    intercept, weights: multiples of 2^-30. covariance: (d + 1, d + 1), intercept first, the inverse Hessian of the
    negative log posterior at the optimum. At the returned weights: gradient: the largest |gradient_i| / Σ|terms that
    make it|; newton_decrement: sqrt(gᵀ H⁻¹ g); distance: a bound on |weight − optimum| in posterior sd, the largest
    over intercept and weights.
    """

    intercept: float
    weights: tuple[float, ...]
    covariance: tuple[tuple[float, ...], ...]
    gradient: float
    newton_decrement: float
    distance: float


class _Factor(NamedTuple):
    """Cholesky factor of D H D, D = diag(H)^-½, so that scales far apart cost no digits."""

    lower: Array
    scaling: Array

    def solve(self, vector: Array) -> Array:
        solution, _ = lapack.dpotrs(self.lower, vector * self.scaling, lower=1)
        result: Array = solution * self.scaling
        return result

    def inverse(self) -> Array:
        half, _ = lapack.dpotri(self.lower, lower=1)
        full = np.tril(half) + np.tril(half, -1).T
        result: Array = full * self.scaling * self.scaling[:, np.newaxis]
        return result


def solve(
    columns: Array,
    labels: NDArray[np.integer],
    row_weights: Array | None,
    prior: Prior,
    start: Array | None = None,
    *,
    block_rows: int = BLOCK_ROWS,
) -> Solution:
    """The MAP weights of standardised columns (n, d) and labels (n,) 0/1; row_weights (n,) >= 0; start (d + 1,).

    Raises FitError where no optimum is found; `judge` can say why. `block_rows` changes no bit of the weights.
    """
    objective = objective_of(columns, labels, row_weights, prior)
    theta = np.zeros(columns.shape[1] + 1) if start is None else np.array(start, dtype=np.float64)
    with _threads.limit(limits=1, user_api="blas"), np.errstate(over="ignore", under="ignore", invalid="ignore"):
        theta, factor = _newton(objective, theta, block_rows)
        covariance = factor.inverse()
        theta = _to_grid(objective, theta, covariance, block_rows)
        return _certified(objective, theta, covariance, block_rows)


def _newton(objective: Objective, theta: Array, block_rows: int) -> tuple[Array, _Factor]:
    """Newton steps from any start until a step changes no log-odds by more than `_SETTLED`."""
    z = log_odds(objective.columns, theta)
    for _ in range(_MOST_STEPS):
        slope, hessian = gradient_and_hessian(objective, theta, z, block_rows=block_rows)
        exact = _factor(hessian)
        factor = exact or _factor(_curvature_bound(objective))
        if factor is None:
            break
        step = -factor.solve(slope)
        reached = log_odds(objective.columns, theta + step)
        along = reached - z
        change = float(np.abs(along).max())
        if change <= _WHOLE_STEP:
            theta, z = theta + step, reached
            if change <= _SETTLED:
                if exact is None:  # the slope vanishes together with the curvature: there is no optimum to end at
                    break
                return theta, exact
        else:
            length = _search(objective, theta, step, z, along)
            theta = theta + length * step
            z = log_odds(objective.columns, theta)
        if not np.isfinite(theta).all():
            break
    raise FitError(
        Problem(
            "rows",
            "the fit finds no optimum: its curvature vanishes along some weights",
            "give every term a prior with a finite sd, or remove columns that repeat others or separate the classes",
        )
    )


def _search(objective: Objective, theta: Array, step: Array, z: Array, along: Array) -> float:
    """A length t with −½|φ'(0)| <= φ'(t) <= 0, φ the negative log posterior along the step; φ' only rises."""

    def slope_at(length: float) -> float:
        by_row, _ = slopes(z + length * along, objective.sides, objective.row_weights)
        by_prior = (theta + length * step - objective.means) * objective.precisions
        return float(by_row @ along + by_prior @ step)

    first = slope_at(0.0)
    low, high = 0.0, math.inf
    length = 1.0
    for _ in range(200):
        slope = slope_at(length)
        if slope > 0.0:
            high = length
        elif slope < 0.5 * first:
            low = length
        else:
            return length
        length = 2.0 * length if high == math.inf else 0.5 * (low + high)
    return low


def _factor(hessian: Array) -> _Factor | None:
    """The factor, or None where rounding has eaten what one weight adds to the others."""
    diagonal = np.diagonal(hessian)
    if not (diagonal > 0.0).all() or not np.isfinite(diagonal).all():
        return None
    scaling = 1.0 / np.sqrt(diagonal)
    lower, failed = lapack.dpotrf(hessian * scaling * scaling[:, np.newaxis], lower=1)
    if failed or not float(np.diagonal(lower).min()) ** 2 > _LEAST_PIVOT:
        return None
    return _Factor(lower, scaling)


def _curvature_bound(objective: Objective) -> Array:
    """¼ Xᵀ Ω X + prior, no less than the Hessian anywhere (Böhning and Lindsay 1988): for a start so far out that the
    Hessian vanishes."""
    z = np.zeros(len(objective.columns))
    return gradient_and_hessian(objective, objective.means, z)[1]


def _to_grid(objective: Objective, theta: Array, covariance: Array, block_rows: int) -> Array:
    """Round to the grid; in pairs of doubles where the doubt about a weight reaches a midpoint."""
    for attempt in range(1 + _MOST_PAIR_STEPS):
        rounded = np.rint(theta / WEIGHT_STEP) * WEIGHT_STEP
        if attempt == 0:
            slope, z = gradient(objective, rounded, block_rows=block_rows)
            noise = _rounding_of_step(objective, rounded, z, covariance, block_rows)
        else:
            slope, noise = gradient_in_pairs(objective, rounded), np.zeros(len(theta))
        offset = -(covariance @ slope)
        change = np.abs(rounded + offset - theta)
        doubt = np.maximum(np.maximum(_DOUBT_PER_CHANGE * change, _LEAST_DOUBT), noise)
        theta = rounded + offset
        if (np.abs(offset) + doubt < 0.5 * WEIGHT_STEP).all():
            return rounded
    return rounded + np.rint(offset / WEIGHT_STEP) * WEIGHT_STEP


def _rounding_of_step(objective: Objective, theta: Array, z: Array, covariance: Array, block_rows: int) -> Array:
    """Bound on what rounding in the gradient does to a Newton step: |C| (k u Σ|terms| + (d + 2) u Σ|terms of z|)."""
    additions = block_rows + len(objective.columns) // block_rows + 8
    sizes = term_sizes(objective, theta, z, block_rows=block_rows)
    bound: Array = np.abs(covariance) @ (additions * UNIT_ROUNDOFF * sizes)
    return bound


def _certified(objective: Objective, theta: Array, covariance: Array, block_rows: int) -> Solution:
    slope, z = gradient(objective, theta, block_rows=block_rows)
    sizes = term_sizes(objective, theta, z, block_rows=block_rows)
    step = covariance @ slope
    decrement = math.sqrt(max(float(slope @ step), 0.0))
    sds = np.sqrt(np.diagonal(covariance))
    relative = np.abs(slope) / np.where(sizes > 0, sizes, 1.0)
    return Solution(
        intercept=float(theta[0]) + 0.0,
        weights=tuple((theta[1:] + 0.0).tolist()),
        covariance=tuple(map(tuple, covariance.tolist())),
        gradient=float(relative.max()),
        newton_decrement=decrement,
        distance=float((np.abs(step) / sds).max()),
    )
