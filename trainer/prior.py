"""The prior of each column, and how strong the shared part of it is to be.

The plan gives mean and sd of a weight per spread (of the standardised weight, as the fit needs them) or per unit of its
input. W = w · scale, so both are multiplied by the column's scale, in rationals, and rounded once.

A strength is chosen by cross-validation: each fold of rows is left out in turn, the others are fitted with every
strength of a grid, and the strength with the lowest mean log loss over the rows left out is taken (Stone, Journal of
the Royal Statistical Society B 36 (1974)). Nothing of a fold reaches the fit that leaves it out: centres, scales and
what stands in for missing values are those of the rows that this fit has.

What the strengths of a fold share: its standardised columns, and its path. θ(s) is smooth in the log of the strength,

    dθ / d ln s = 2 H⁻¹ P (θ − m),   P the precisions that are shared, H the Hessian at θ(s),

so each fit starts where the last ones point to, from the strongest prior to the weakest, and one or two Newton steps
settle it. These losses are near enough to draw the curve and to rule most strengths out. They could differ in their
last bits with the order of the rows. So where more than one strength is within reach of the lowest loss, those few are
fitted anew with `solve`, whose weights have the same bits in any order; their losses are summed exactly, rounded to
`LOSS_STEP`, and the strongest of the lowest is taken.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from runtime_min.errors import FitError, Problem
from runtime_min.model import Choice, Strength, TrainedInput
from runtime_min.sealing import round_to
from trainer.approach import Solve
from trainer.design import Column, columns_of, design_matrix, typical_value, with_typical
from trainer.grid import WEIGHT_STEP
from trainer.objective import Objective, Prior, objective_of
from trainer.plan import PriorPlan
from trainer.solve import near_optimum, one_thread, solve
from trainer.standardise import standardise

Floats = npt.NDArray[np.float64]
Labels = npt.NDArray[np.int64]

FOLDS = 5

STRENGTHS = tuple(float(f"{0.01 * 10_000 ** (step / 29):.1e}") for step in range(30))
"""30 sds from 0.01 to 100, evenly spaced in their logarithm, to two digits, so that a plan can state any of them.

At 0.01 one spread of an input changes the odds by about a hundredth, which is no model; at 100 by e^100, which no data
with an optimum ask for. Neighbours are 1.37 times apart: well within the precision with which a curve has a minimum.
"""

LOSS_STEP = 1e-12
"""Mean log losses are compared in these steps: differences below say nothing."""

_SETTLED = 1e-4  # a Newton step that changes no log-odds by more leaves errors of its square, 1e-8
_LOSS_ERROR = 1e-7  # of a mean loss: ten times that, since rows left out may lie farther out; seen: below 1e-9


@dataclass(frozen=True)
class ColumnPrior:
    """The prior of one column's weight. sd: None is flat; `shared`: the sd is that of all such columns, and None here.

    per_unit: mean and sd are of the weight per unit of the input, not of the standardised weight.
    """

    mean: Fraction = Fraction(0)
    sd: Fraction | None = None
    shared: bool = True
    per_unit: bool = False


@dataclass(frozen=True)
class PriorRule:
    """The priors of all columns, in their order, and of the intercept; an sd of None is flat."""

    columns: tuple[ColumnPrior, ...]
    intercept_sd: Fraction | None = None

    def on(self, scales: Sequence[float], sd: Fraction | None) -> Prior:
        """In standardised terms, for columns of these scales; sd: the shared one, None is flat."""
        factors = [
            Fraction(scale) if column.per_unit else Fraction(1)
            for column, scale in zip(self.columns, scales, strict=True)
        ]
        sds = [sd if column.shared else column.sd for column in self.columns]
        return Prior(
            tuple(_binary64(column.mean * factor) for column, factor in zip(self.columns, factors, strict=True)),
            tuple(math.inf if s is None else _binary64(s * factor) for s, factor in zip(sds, factors, strict=True)),
            math.inf if self.intercept_sd is None else _binary64(self.intercept_sd),
        )

    @property
    def is_shared(self) -> bool:
        return any(column.shared for column in self.columns)


def rule_of(plan: PriorPlan, columns: Sequence[Column]) -> PriorRule:
    """What the plan says of each column; a term without an entry of its own has mean 0 and the shared sd."""
    own = {
        term.name: ColumnPrior(term.mean, term.sd, term.method == "shared", term.per == "unit") for term in plan.terms
    }
    return PriorRule(tuple(own.get(column.name, ColumnPrior()) for column in columns), plan.intercept_sd)


def choose_sd(
    inputs: Sequence[TrainedInput],
    values: Floats,
    labels: Labels,
    row_weights: Floats | None,
    fold: Labels,
    rule: PriorRule,
    strengths: Sequence[float] = STRENGTHS,
) -> Choice:
    """The shared sd with the lowest mean log loss on the rows left out, weighted, and the whole curve.

    inputs: names and levels. values (n, inputs) of the rows to fit, NaN where one is missing; labels (n,) 0 or 1;
    row_weights (n,) > 0 or None; fold (n,): the fold of each row, 0 … K − 1, K >= 2; strengths grow.

    The standard error is that of a ratio of sums over K folds (Cochran, Sampling Techniques, 3rd ed. (1977), 6.4):
    sqrt(K / (K − 1) Σ_f (Ω_f / Ω)² (mean_f − mean)²), Ω_f the weight of the fold's rows.

    Raises FitError where the rows outside a fold do not determine a model.
    """
    rows = _Rows(tuple(inputs), values, labels, row_weights, fold)
    count = int(fold.max()) + 1
    _refuse_missing_classes(rows, count)
    with one_thread():
        paths = [_along_strengths(part, rule, strengths) for part in _parts(rows, count)]
        sums = np.array([path.losses for path in paths])  # (folds, strengths)
        weights = np.array([path.weight for path in paths])
        mean = sums.sum(axis=0) / weights.sum()
        doubt = 2.0 * (_LOSS_ERROR + 0.5 * WEIGHT_STEP * max(path.reach for path in paths))
        near = np.flatnonzero(mean <= mean.min() + doubt).tolist()
        best = near[0]
        if len(near) > 1:
            again = [
                [_exact_losses(part, rule, strengths[at], path.thetas[at]) for at in near]
                for part, path in zip(_parts(rows, count), paths, strict=True)
            ]
            sums[:, near] = [[math.fsum(losses) for losses in of_fold] for of_fold in again]
            total = math.fsum(np.ones(len(labels)) if row_weights is None else row_weights)
            exact = [math.fsum(np.concatenate([of_fold[k] for of_fold in again])) / total for k in range(len(near))]
            mean[near] = exact
            best = near[int(np.argmin(np.rint(np.array(exact) / LOSS_STEP)))]  # of several, the first: the strongest
    shares = weights / weights.sum()
    spread = (shares[:, np.newaxis] * (sums / weights[:, np.newaxis] - mean)) ** 2
    errors = np.sqrt(count / (count - 1) * spread.sum(axis=0))
    curve = zip(strengths, mean.tolist(), errors.tolist(), strict=True)
    return Choice("cross-validation", count, strengths[best], tuple(Strength(*point) for point in curve))


class _Rows(NamedTuple):
    inputs: tuple[TrainedInput, ...]
    values: Floats
    labels: Labels
    row_weights: Floats | None
    fold: Labels


class _Part(NamedTuple):
    """One fold: standardised columns, labels and weights of the rows that are fitted and of those left out."""

    number: int
    columns: Floats
    labels: Labels
    row_weights: Floats | None
    scales: tuple[float, ...]
    left: Floats
    left_labels: Labels
    left_weights: Floats


class _Path(NamedTuple):
    """Along the strengths: θ, Σω log loss of the rows left out; Σω of these, and their mean of 1 + Σ|x_j|."""

    thetas: list[Floats]
    losses: Floats
    weight: float
    reach: float


def _parts(rows: _Rows, count: int) -> Iterator[_Part]:
    columns = columns_of(rows.inputs)
    numeric = [column.form == "value" for column in columns]
    for index in range(count):
        out = rows.fold == index
        weights = None if rows.row_weights is None else rows.row_weights[~out]
        fitted = rows.values[~out]
        # An input that none of these rows has is constant to the fit, whatever stands in: it learns no weight.
        typical = [
            typical_value(column, len(entry.levels), weights) or 0.0
            for entry, column in zip(rows.inputs, fitted.T, strict=True)
        ]
        standardised = standardise(design_matrix(columns, with_typical(fitted, typical)), weights, numeric)
        left = design_matrix(columns, with_typical(rows.values[out], typical))
        yield _Part(
            index,
            standardised.columns,
            rows.labels[~out],
            weights,
            standardised.scales,
            (left - np.array(standardised.centres)) / np.array(standardised.scales),
            rows.labels[out],
            np.ones(len(left)) if rows.row_weights is None else rows.row_weights[out],
        )


def _along_strengths(part: _Part, rule: PriorRule, strengths: Sequence[float]) -> _Path:
    shared = np.array([False, *(column.shared for column in rule.columns)])
    objective = objective_of(part.columns, part.labels, part.row_weights, rule.on(part.scales, Fraction(1)))
    theta = objective.means.copy()
    slope = before = np.zeros(len(theta))
    thetas: list[Floats] = []
    for at, sd in enumerate(strengths):
        precisions = np.where(shared, sd**-2.0, objective.precisions)
        found = _settled(objective._replace(precisions=precisions), (theta, *thetas[-1:], 0.0 * theta))
        if found is None:
            raise FitError(_undetermined(part.number))
        thetas.append(found[0])
        if at + 1 < len(strengths):
            ahead = math.log(strengths[at + 1] / sd)
            before, slope = slope, 2.0 * found[1](np.where(shared, precisions * (found[0] - objective.means), 0.0))
            bend = slope - before if at else 0.0
            theta = found[0] + ahead * (slope + 0.5 * bend)
    z = part.left @ np.array(thetas)[:, 1:].T + np.array(thetas)[:, 0]
    losses = part.left_weights @ _log_losses(z, part.left_labels[:, np.newaxis])
    weight = float(part.left_weights.sum())
    reach = float(part.left_weights @ (1.0 + np.abs(part.left).sum(axis=1))) / weight
    return _Path(thetas, losses, weight, reach)


def _settled(objective: Objective, starts: Sequence[Floats]) -> tuple[Floats, Solve] | None:
    """`near_optimum` from the first start that leads to one: far out every row's curvature can vanish in binary64."""
    return next(filter(None, (near_optimum(objective, start, _SETTLED) for start in starts)), None)


def _exact_losses(part: _Part, rule: PriorRule, sd: float, theta: Floats) -> Floats:
    """ω log loss of each row left out, with the same bits in any order of the rows: the fit's weights are on the grid,
    and a row's log-odds are summed term by term."""
    prior = rule.on(part.scales, Fraction(sd))
    solution = solve(part.columns, part.labels, part.row_weights, prior, theta)
    z = np.full(len(part.left), solution.intercept)
    for column, weight in zip(part.left.T, solution.weights, strict=True):
        z += column * weight
    return part.left_weights * _log_losses(z, part.left_labels)


def _log_losses(z: Floats, labels: Labels) -> Floats:
    """log(1 + exp t), t = −z for the event and z for the other class."""
    t = np.where(labels == 1, -z, z)
    result: Floats = np.maximum(t, 0.0) + np.log1p(np.exp(-np.abs(t)))
    return result


_TODO = "write a number for sd"


def _refuse_missing_classes(rows: _Rows, count: int) -> None:
    for index in range(count):
        if len(np.unique(rows.labels[rows.fold != index])) < 2:
            found = f"found rows of one class only outside fold {index + 1} of {count}"
            raise FitError(Problem("[prior]: sd", found, f"{_TODO}, or give more groups or rows of both classes"))


def _undetermined(index: int) -> Problem:
    found = f"found no optimum for the rows outside fold {index + 1}: some weights have a flat prior"
    return Problem("[prior]: sd", found, f"{_TODO}, or give every term a prior with a finite sd")


def _binary64(number: Fraction) -> float:
    return round_to("binary64", number)
