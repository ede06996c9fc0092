"""Which columns separate the classes: a linear programme over the columns that have a flat prior.

Rows are separated when some direction u of the flat weights, intercept included, has a_l · u >= 0 in every row l and
more in at least one, a_l = ±(1, x_l) signed by the class; then the likelihood rises for ever along u (Albert and
Anderson 1984: complete where all are above 0, else quasi-complete). The u with the least Σ|u_j| names few columns.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from runtime_min.errors import Problem
from trainer.objective import Prior

Array = NDArray[np.float64]

_ROWS_AT_FIRST = 400
_ROWS_A_ROUND = 400
_TOLERANCE = 1e-7  # the linear programme's own
_ROUNDS = 200
_NAMES_TOLD = 6


def separation_problems(
    columns: Array, labels: NDArray[np.integer], prior: Prior, names: Sequence[str], class_names: Sequence[str]
) -> list[Problem]:
    """One problem that names the separating columns, or none; columns (n, d) standardised, labels (n,) 0/1."""
    flat = np.flatnonzero(np.isinf(prior.sds))
    with_intercept = prior.intercept_sd == math.inf
    rows = columns[:, flat]
    if with_intercept:
        rows = np.column_stack((rows, np.ones(len(rows))))
    rows = rows * (2.0 * labels - 1.0)[:, np.newaxis]
    direction = _sparse_direction(rows, len(flat))
    if direction is None:
        return []
    largest = np.abs(direction[: len(flat)]).max(initial=0.0)
    chosen = [names[flat[index]] for index in np.flatnonzero(np.abs(direction[: len(flat)]) > 1e-6 * largest)]
    quoted = ", ".join(f'"{name}"' for name in chosen[:_NAMES_TOLD])
    if len(chosen) > _NAMES_TOLD:
        quoted += f" and {len(chosen) - _NAMES_TOLD} more"
    one = len(chosen) == 1
    return [
        Problem(
            f"rows: column{'' if one else 's'} {quoted}",
            f'{"separates" if one else "together separate"} the classes "{class_names[0]}" and "{class_names[1]}", '
            "so that no finite weight fits best",
            f"give {'it' if one else 'them'} a prior with a finite sd, or add rows where the classes overlap",
        )
    ]


def _sparse_direction(rows: Array, penalised: int) -> Array | None:
    """u with rows · u >= 0, mean(rows · u) = 1 and the least Σ|u_j| over the first `penalised`, or None.

    Only the rows that a solution breaks enter the programme, so that its size does not grow with theirs.
    """
    width = rows.shape[1]
    cost = np.concatenate([np.r_[np.ones(penalised), np.zeros(width - penalised)]] * 2)
    average = rows.mean(axis=0)
    active = np.unique(np.linspace(0, len(rows) - 1, min(_ROWS_AT_FIRST, len(rows))).astype(np.intp))
    for _ in range(_ROUNDS):
        part = rows[active]
        found = linprog(
            cost,
            A_ub=np.hstack((-part, part)),
            b_ub=np.zeros(len(part)),
            A_eq=np.hstack((average, -average))[np.newaxis],
            b_eq=[1.0],
            method="highs",
        )
        if found.x is None:
            return None
        direction: Array = found.x[:width] - found.x[width:]
        reach = rows @ direction
        broken = np.flatnonzero(reach < -_TOLERANCE * max(1.0, float(np.abs(direction).max())))
        broken = np.setdiff1d(broken, active)
        if not len(broken):
            return direction
        active = np.union1d(active, broken[np.argsort(reach[broken], kind="stable")[:_ROWS_A_ROUND]])
    return None
