"""What data cannot answer: say so before a fit is tried, with the column and what to do.

Under a prior with a finite sd there is always exactly one optimum. Under a flat prior there is none where the classes
are separated along the flat columns (Albert and Anderson, Biometrika 71 (1984)), and more than one where those columns
are linearly dependent. A constant column is refused under any prior: its weight would be the prior's, not the data's.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack, solve_triangular

from runtime_min.errors import FitError, Problem
from trainer.objective import Prior
from trainer.separation import separation_problems
from trainer.solve import solve
from trainer.standardise import standardise

Array = NDArray[np.float64]
Labels = NDArray[np.integer]

LEAST_PRIOR_SD = 1e-4
_DEPENDENT = 1e-12  # share of a column's variance that the others leave, at which it counts as a sum of them
_SAME = 1e-6  # multiple of another column that counts as nothing
_SAMPLE_ROWS = 1000  # rows a class of the sample that shows, almost always, that nothing is separated


def judge(
    values: Array,
    labels: Labels,
    row_weights: Array | None,
    prior: Prior,
    names: Sequence[str],
    class_names: Sequence[str],
) -> tuple[Problem, ...]:
    """Every reason why these rows do not determine the model; none means that the fit has one answer.

    values (n, d) as the terms give them, before standardisation; labels (n,) in 0 … classes − 1; row_weights (n,) or
    None; names of the d columns; class_names in order of the labels.
    """
    problems = [*_not_numbers(values, labels, row_weights, names, len(class_names)), *_prior_problems(prior, names)]
    if problems:
        return tuple(problems)
    used = np.ones(len(labels), dtype=bool) if row_weights is None else row_weights > 0
    if not used.all():
        values, labels = values[used], labels[used]
        row_weights = None if row_weights is None else row_weights[used]
    problems += _missing_classes(labels, class_names)
    if len(labels):
        problems += _constant_columns(values, names)
    if problems or math.inf not in prior.sds:  # a flat intercept alone needs no more than both classes
        return tuple(problems)
    sample = _sample(labels)
    if len(sample) < len(labels):  # where some rows have an answer, more rows cannot take it away
        some = None if row_weights is None else row_weights[sample]
        columns = standardise(values[sample], some, [True] * values.shape[1]).columns
        if not _dependent_columns(columns, prior, names) and _settles(columns, labels[sample], some, prior):
            return ()
    columns = standardise(values, row_weights, [True] * values.shape[1]).columns
    problems += _dependent_columns(columns, prior, names)
    if not problems and not _settles(columns, labels, row_weights, prior):
        problems += separation_problems(columns, labels, prior, names, class_names)
    return tuple(problems)


def _not_numbers(
    values: Array, labels: Labels, row_weights: Array | None, names: Sequence[str], classes: int
) -> list[Problem]:
    problems = []
    finite = np.isfinite(values)
    if not finite.all():
        for column in np.flatnonzero(~finite.all(axis=0)).tolist():
            rows = np.flatnonzero(~finite[:, column])
            problems.append(
                Problem(
                    f'rows: column "{names[column]}"',
                    f"NaN or infinity in {_count(len(rows), 'row')}, first in row {rows[0] + 1}",
                    "remove or repair what was recorded there",
                )
            )
    with np.errstate(invalid="ignore"):
        wrong = ~((labels >= 0) & (labels < classes) & (labels == np.floor(labels)))
    if wrong.any():
        problems.append(
            Problem(
                "rows: label",
                f"{_count(int(wrong.sum()), 'row')} without a class, first row {np.flatnonzero(wrong)[0] + 1}",
                f"give each row one of the {classes} classes",
            )
        )
    if row_weights is not None:
        wrong = ~((row_weights >= 0) & (row_weights < math.inf))
        if wrong.any():
            problems.append(
                Problem(
                    "rows: weight",
                    f"{_count(int(wrong.sum()), 'weight')} negative, infinite or NaN, first in row "
                    f"{np.flatnonzero(wrong)[0] + 1}",
                    "give each row a finite weight of 0 or more",
                )
            )
    return problems


def _prior_problems(prior: Prior, names: Sequence[str]) -> list[Problem]:
    found = [(f'prior: column "{name}"', sd) for name, sd in zip(names, prior.sds, strict=True)]
    found.append(("prior: intercept_sd", prior.intercept_sd))
    problems = [
        Problem(where, f"sd {sd:g} below {LEAST_PRIOR_SD:g}", f"use {LEAST_PRIOR_SD:g} or more, or leave the term out")
        for where, sd in found
        if not sd >= LEAST_PRIOR_SD
    ]
    problems += [
        Problem(f'prior: column "{name}"', f"mean {mean:g}", "give a finite mean")
        for name, mean in zip(names, prior.means, strict=True)
        if not math.isfinite(mean)
    ]
    return problems


def _missing_classes(labels: Labels, class_names: Sequence[str]) -> list[Problem]:
    counts = np.bincount(labels.astype(np.int64), minlength=len(class_names))
    return [
        Problem(f'rows: class "{name}"', "no row with a weight above 0", "add rows of this class, or leave it out")
        for name, count in zip(class_names, counts, strict=True)
        if count == 0
    ]


def _constant_columns(values: Array, names: Sequence[str]) -> list[Problem]:
    return [
        _constant(names[column], float(values[0, column]))
        for column in np.flatnonzero((values == values[0]).all(axis=0)).tolist()
    ]


def _constant(name: str, value: float) -> Problem:
    entry, of_level, level = name.partition("=")
    if of_level and value == 0:
        todo = f"remove it from the levels of {entry}, or hold out fewer rows"
        return Problem("rows", f'no fitted row has the level "{level}" of {entry}', todo)
    return Problem(f'rows: column "{name}"', f"the same value, {value:g}, in every row", "remove the column")


def _dependent_columns(columns: Array, prior: Prior, names: Sequence[str]) -> list[Problem]:
    """Columns that those before them make up, found in the flat columns' Gram matrix."""
    flat = np.flatnonzero(np.isinf(prior.sds))
    if not len(flat):
        return []
    weights = len(flat) + (prior.intercept_sd == math.inf)
    if len(columns) < weights:
        return [
            Problem(
                "rows",
                f"{_count(len(columns), 'row')} for {weights} weights under a flat prior",
                "give the terms a prior with a finite sd, or add rows",
            )
        ]
    chosen = columns[:, flat]
    gram = chosen.T @ chosen / len(columns)
    size = np.sqrt(np.diagonal(gram))
    size[size == 0.0] = 1.0
    gram = gram / size / size[:, np.newaxis]
    if lapack.dpstrf(gram, tol=_DEPENDENT, lower=1)[2] == len(flat):  # its rank, by Cholesky with pivots
        return []
    problems = []
    free: list[int] = []
    lower = np.zeros((0, 0))
    for place, column in enumerate(flat.tolist()):
        across = solve_triangular(lower, gram[free, place], lower=True)
        left = float(gram[place, place] - across @ across)
        if left > _DEPENDENT:
            lower = np.block([[lower, np.zeros((len(free), 1))], [across, np.sqrt(left)]])
            free.append(place)
            continue
        share = solve_triangular(lower, across, lower=True, trans="T")
        makers = [names[flat[free[index]]] for index in np.flatnonzero(np.abs(share) > _SAME).tolist()]
        told = f"repeats column {_quoted(makers)}" if len(makers) == 1 else f"a sum of multiples of {_quoted(makers)}"
        problems.append(
            Problem(
                f'rows: column "{names[column]}"',
                f"{told}, which a flat prior cannot tell apart",
                "remove it, or give these columns a prior with a finite sd",
            )
        )
    return problems


def _settles(columns: Array, labels: Labels, row_weights: Array | None, prior: Prior) -> bool:
    try:
        solve(columns, labels, row_weights, prior)
    except FitError:
        return False
    return True


def _sample(labels: Labels) -> NDArray[np.intp]:
    """At most `_SAMPLE_ROWS` rows of each class, drawn with a fixed seed; they decide nothing but the time taken."""
    draws = np.random.default_rng(0)
    parts = [np.flatnonzero(labels == index) for index in (0, 1)]
    return np.concatenate(
        [rows if len(rows) <= _SAMPLE_ROWS else draws.choice(rows, _SAMPLE_ROWS, replace=False) for rows in parts]
    )


def _quoted(names: Sequence[str]) -> str:
    return ", ".join(f'"{name}"' for name in names)


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
