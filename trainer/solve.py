"""Find the MAP weights by Newton's method and prove that they are found.

    θ ← θ − t H⁻¹ g,   g and H gradient and Hessian of the negative log posterior

Step rule. Along a step the second derivative φ″ changes by at most the factor exp(R t), R the largest change of a
log-odds (Bach, Electronic Journal of Statistics 4 (2010), section 2). So a Newton step with R <= 1 always descends:
φ(1) − φ(0) <= −φ″(0) (1 − (e^R − 1 − R)/R²). It is taken whole. Any other step is shortened or stretched until the
slope along it lies between minus half of what it was and zero, which for a convex function is descent with the
curvature condition of Wolfe; a few trials take it close to the end of the descent, since a long step far from the
optimum points well but ends short. The search needs no further reading of the columns. A start that is no better than
zero gives way to zero, where every row has its full curvature: far out all of them can vanish in binary64.

Last digits: `last_digits` rounds the weights so that row order, threads and libraries do not show.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack
from threadpoolctl import ThreadpoolController

from runtime_min.errors import FitError, Problem
from trainer.approach import Solve, approach, sample, sample_size
from trainer.exact_sums import UNIT_ROUNDOFF
from trainer.last_digits import to_grid
from trainer.objective import (
    BLOCK_ROWS,
    Checked,
    Objective,
    Prior,
    gradient_and_hessian,
    objective_of,
    sided_log_odds,
    slopes,
    value,
)

Array = NDArray[np.float64]

_WHOLE_STEP = 1.0  # R up to which a Newton step is taken whole
_SETTLED = 1e-7  # R after which the Hessian at hand is the optimum's to less than this relative error
_SETTLED_MANY = 1e-5  # the same for many rows, where one more Hessian costs a quarter of the fit
_APPROACHED = 3e-5  # R of an approaching step after which one Newton step settles
_SAMPLE_SETTLED = 0.1  # the optimum of a sample is farther than that from the optimum of all rows
_MOST_STEPS = 200
_ROUNDINGS_OF_LOG_ODDS = 4.0
_LEAST_PIVOT = 1e-13  # of the scaled Hessian, whose entries carry errors of some 1e-15

_STRETCH = 1.25  # first trial of a search: from zero, where curvature is largest, a Newton step always ends short
_CLOSE, _CLOSE_TRIALS = 0.004, 4  # a search tries so often to leave no more than this share of the slope
_SPLITTING_TRIALS = 8  # trials of a search after which only halving is trusted

# Made once: looking the libraries up takes longer than a small fit.
_blas = [library for library in ThreadpoolController().lib_controllers if library.user_api == "blas"]


@dataclass(frozen=True)
class Solution:
    """The MAP weights and their certificate.

    intercept, weights: multiples of 2^-30. covariance: (d + 1, d + 1), intercept first, the inverse Hessian of the
    negative log posterior at the optimum. At the returned weights: gradient: the largest |gradient_i| / Σ|terms that
    make it|; newton_decrement: sqrt(gᵀ H⁻¹ g); distance: a bound on |weight − optimum| in posterior sd, the largest
    over intercept and weights: it says what the grid costs.
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
        half, _ = lapack.dpotri(self.lower, lower=1)  # the upper triangle stays 0
        half.flat[:: len(half) + 1] *= 0.5
        full = half + half.T
        full *= self.scaling
        full *= self.scaling[:, np.newaxis]
        result: Array = full
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

    Raises FitError where there is no optimum to find; `judge` says why. `start` and `block_rows` change no bit of the
    weights.
    """
    objective = objective_of(columns, labels, row_weights, prior)
    with one_thread():
        theta, t, settled = _better_start(objective, start), None, _SETTLED
        if size := sample_size(objective):
            near = _newton(sample(objective, size), theta, None, _SAMPLE_SETTLED, block_rows)
            settled = _SETTLED_MANY
            if near is not None:
                theta, t = approach(objective, near[0], near[1].solve, _APPROACHED, block_rows)
        found = _newton(objective, theta, t, settled, block_rows)
        if found is None:
            raise FitError(
                Problem(
                    "rows",
                    "the fit finds no optimum: the curvature vanishes along some weights",
                    "give every term a prior with a finite sd, or remove columns that repeat others",
                )
            )
        covariance = found[1].inverse()
        theta, checked = to_grid(objective, found[0], covariance, found[1].scaling ** -2.0, block_rows)
    return _certified(theta, checked, covariance)


def near_optimum(objective: Objective, start: Array, settled: float) -> tuple[Array, Solve] | None:
    """(θ, g -> H⁻¹ g) after Newton steps from `start` until one changes no log-odds by more than `settled`.

    Not on the grid and not certified: for many fits of which only one will count. None where there is no optimum to
    find. To be called within `one_thread`.
    """
    found = _newton(objective, start, None, settled, BLOCK_ROWS)
    return None if found is None else (found[0], found[1].solve)


@contextmanager
def one_thread() -> Iterator[None]:
    """BLAS on one thread, which small products need, and no warnings of numbers that overflow on the way."""
    before = [(library, library.get_num_threads()) for library in _blas]
    changed = [(library, threads) for library, threads in before if threads != 1]
    for library, _ in changed:
        library.set_num_threads(1)
    try:
        with np.errstate(all="ignore"):
            yield
    finally:
        for library, threads in changed:
            library.set_num_threads(threads)


def _better_start(objective: Objective, start: Array | None) -> Array:
    zero = np.zeros(len(objective.means))
    if start is None:
        return zero
    given = np.array(start, dtype=np.float64)
    return given if value(objective, given) <= value(objective, zero) else zero


def _newton(
    objective: Objective, theta: Array, t: Array | None, settled: float, block_rows: int
) -> tuple[Array, _Factor] | None:
    """Newton steps from any start until one changes no log-odds by more than `settled`; t is that of θ.

    None where the curvature vanishes along some weights, or nothing is settled after `_MOST_STEPS`.
    """
    if t is None:
        t = sided_log_odds(objective, theta)
    for _ in range(_MOST_STEPS):
        slope, hessian = gradient_and_hessian(objective, theta, t, block_rows=block_rows)
        factor = _factor(hessian)
        if factor is None:
            return None
        step = -factor.solve(slope)
        reached = sided_log_odds(objective, theta + step)
        along = reached - t
        change = float(np.abs(along).max())
        if not math.isfinite(change):
            return None
        if change <= _WHOLE_STEP:
            theta, t = theta + step, reached
            if change <= settled:
                return theta, factor
        else:
            length = _search(objective, theta, step, t, along, float(slope @ step))
            if length is None:
                return None
            theta = theta + length * step
            t = sided_log_odds(objective, theta)
    return None


def _search(objective: Objective, theta: Array, step: Array, t: Array, along: Array, first: float) -> float | None:
    """A length l with −½|φ'(0)| <= φ'(l) <= 0, φ the negative log posterior along the step; φ' only rises.

    None where there seems to be none, because φ falls for ever. first: φ'(0).

    Newton's method for φ'(l) = −½ `_CLOSE` |φ'(0)|, with the curvature half a step ahead as its change so far foretells
    it, finds one where φ' is close to 0 in two or three trials.
    """
    squares = along * along
    prior_slope = float(((theta - objective.means) * objective.precisions) @ step)
    prior_bend = float((step * step) @ objective.precisions)
    low, high, enough = 0.0, math.inf, False
    last, last_bend = 0.0, -first  # of a Newton step, φ''(0) = −φ'(0)
    length = _STRETCH
    for trial in range(1, 100):
        by_row, curvature = slopes(t + length * along, objective.row_weights)
        slope = float(by_row @ along) + prior_slope + length * prior_bend
        bend = float(curvature @ squares) + prior_bend
        if slope > 0.0:
            high = length
        else:
            low, enough = length, slope >= 0.5 * first
            if slope >= _CLOSE * first or (enough and trial >= _CLOSE_TRIALS):
                break
        left = 0.5 * _CLOSE * first - slope
        ahead = left / bend if bend > 0.0 else math.inf
        bend_ahead = bend + 0.5 * ahead * (bend - last_bend) / (length - last)
        last, last_bend = length, bend
        ahead = length + (left / bend_ahead if bend_ahead > 0.0 else ahead)
        if trial < _SPLITTING_TRIALS and low < ahead < min(high, 4.0 * length):
            length = ahead
        else:
            length = 2.0 * length if high == math.inf else 0.5 * (low + high)
    return low if enough else None


def _factor(hessian: Array) -> _Factor | None:
    """The factor, or None where rounding has eaten what one weight adds to the others."""
    scaling = 1.0 / np.sqrt(hessian.diagonal())  # NaN or infinite where there is no curvature: then `failed`
    scaled = hessian * scaling
    scaled *= scaling[:, np.newaxis]
    lower, failed = lapack.dpotrf(scaled.T, lower=1, overwrite_a=1)
    if failed or not float(lower.diagonal().min()) ** 2 > _LEAST_PIVOT:
        return None
    return _Factor(lower, scaling)


def _certified(theta: Array, checked: Checked, covariance: Array) -> Solution:
    """The certificate at θ.

    With e the distance to the optimum, λ the decrement and t the largest change of a log-odds along e, the Hessians on
    the way differ from H by at most the factor exp(t). So |e|_H <= e^t λ and |e − H⁻¹g|_H <= (e^t − 1) λ, where
    t <= ρ |e|_H, ρ = Σ_j sd_j max|x_j|; for a = ρ λ <= 0.2 the fixed point t = a e^t lies below 1.3 a. A component in
    posterior sd is never more than the H-norm. A row's log-odds are rounded by some u Σ|θ|; in posterior sd that moves
    the step by about as much, since Σ ω v (x · C e_j)² <= C_jj.
    """
    step = covariance @ checked.slope
    decrement = math.sqrt(max(float(checked.slope @ step), 0.0))
    sds = np.sqrt(covariance.diagonal())
    reach = float(sds @ checked.largest) * decrement
    beyond = math.expm1(1.3 * reach) * decrement if reach <= 0.2 else math.inf
    beyond += _ROUNDINGS_OF_LOG_ODDS * UNIT_ROUNDOFF * float(np.abs(theta).sum())
    sizes = np.where(checked.sizes > 0, checked.sizes, 1.0)
    return Solution(
        intercept=float(theta[0]) + 0.0,
        weights=tuple((theta[1:] + 0.0).tolist()),
        covariance=tuple(map(tuple, covariance.tolist())),
        gradient=float(np.abs(checked.slope / sizes).max()),
        newton_decrement=decrement,
        distance=float((np.abs(step) / sds).max()) + beyond,
    )
