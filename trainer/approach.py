"""Come near the optimum of many rows with few readings of them: the large-data companion of Newton's method.

A random sample of the rows is fitted first; its optimum is the start and its Hessian the metric of limited-memory
BFGS steps on all rows (Nocedal, Mathematics of Computation 35 (1980), two-loop recursion). A reading that yields a
gradient costs a fraction of one that yields a Hessian. Nothing here has to succeed: where a step does not make the
gradient clearly smaller, the point reached so far is a start for Newton like any other.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from trainer.objective import Objective, gradient

Array = NDArray[np.float64]
Solve = Callable[[Array], Array]

_SAMPLE_ROWS_A_WEIGHT = 50
_SAMPLE_SHARE = 20  # of many rows, one in so many
_LEAST_ENTRIES = 200_000  # columns with fewer entries are read so fast that a sample does not pay
_LEAST_GAIN = 0.7  # a step that leaves more of the gradient than this is no better than a Newton step
_MOST_STEPS = 15


def sample_size(objective: Objective) -> int:
    """Rows of the sample to fit first; 0 where starting with all rows is as fast."""
    size, rows = len(objective.means), len(objective.sides)
    wanted = max(_SAMPLE_ROWS_A_WEIGHT * size, rows // _SAMPLE_SHARE)
    return wanted if rows * (size - 1) >= _LEAST_ENTRIES and rows >= 4 * wanted else 0


def sample(objective: Objective, size: int) -> Objective:
    """About `size` rows with weights that make up for the others; heavy rows stay, a rare class is drawn more often.

    Each class gives half. A row that weighs more than its class's share a draw is taken with its own weight. The seed
    is fixed, and what is drawn decides the time taken, not the result.
    """
    draws = np.random.default_rng(0)
    parts, weights = [], []
    for side in (1.0, -1.0):
        rows = np.flatnonzero(objective.sides == side)
        own = np.ones(len(rows)) if objective.row_weights is None else objective.row_weights[rows]
        heavy = own * (size // 2) > own.sum()
        if len(rows) <= size // 2:
            heavy[:] = True
        light = np.flatnonzero(~heavy)
        parts.append(rows[heavy])
        weights.append(own[heavy])
        if len(light):
            drawn = light[draws.integers(len(light), size=size // 2)]
            parts.append(rows[drawn])
            weights.append(own[drawn] * (own[light].sum() / own[drawn].sum()))
    chosen = np.concatenate(parts)
    return objective._replace(
        design=objective.design.T[chosen].T, sides=objective.sides[chosen], row_weights=np.concatenate(weights)
    )


def approach(objective: Objective, theta: Array, metric: Solve, settled: float, block_rows: int) -> tuple[Array, Array]:
    """Steps until one changes no log-odds by more than `settled`, or until steps stop paying; θ and its t.

    metric: g -> H⁻¹ g for a Hessian like that of the optimum.
    """
    slope, t = gradient(objective, theta, block_rows=block_rows)
    size = float(slope @ metric(slope))
    pairs: list[tuple[Array, Array, float]] = []
    for _ in range(_MOST_STEPS):
        step = -_two_loops(slope, metric, pairs)
        reached = theta + step
        reached_slope, reached_t = gradient(objective, reached, block_rows=block_rows)
        reached_size = float(reached_slope @ metric(reached_slope))
        if not reached_size <= _LEAST_GAIN**2 * size:
            break
        change = float(np.abs(reached_t - t).max())
        bend = reached_slope - slope
        pairs.append((step, bend, float(step @ bend)))
        theta, t, slope, size = reached, reached_t, reached_slope, reached_size
        if change <= settled:
            break
    return theta, t


def _two_loops(slope: Array, metric: Solve, pairs: list[tuple[Array, Array, float]]) -> Array:
    direction = slope.copy()
    shares = []
    for step, bend, curvature in reversed(pairs):
        share = float(step @ direction) / curvature
        direction -= share * bend
        shares.append(share)
    direction = metric(direction)
    for (step, bend, curvature), share in zip(pairs, reversed(shares), strict=True):
        direction += (share - float(bend @ direction) / curvature) * step
    return direction
