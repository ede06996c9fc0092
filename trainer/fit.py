"""From rows that were read, or from arrays, to a trained model: design, judge, prior, solve, witness, results."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from runtime_min.errors import FitError, Problem
from runtime_min.model import (
    Certificate,
    FittedRows,
    Score,
    TrainedInput,
    TrainedModel,
    TrainedPrior,
    TrainedTerm,
)
from runtime_min.sealing import round_to
from trainer.arrays import LARGEST, read_arrays
from trainer.design import Column, columns_of, design_matrix, typical_value, with_typical
from trainer.judge import judge
from trainer.operate import held_out_results
from trainer.plan import InputPlan, Plan
from trainer.prior import FOLDS, ColumnPrior, PriorRule, choose_sd, rule_of
from trainer.solve import solve
from trainer.split import folds, held_out_rows
from trainer.standardise import Standardised, class_sums, standardise
from trainer.table import Rows
from trainer.witness import log_odds_with_bounds, real_rows, shift_to_field, witness_of

Floats = npt.NDArray[np.float64]
Labels = npt.NDArray[np.int64]


@dataclass(frozen=True)
class _Data:
    """What is fitted: values (n, inputs) without a missing one, labels (n,), row_weights (n,) > 0 or None.

    limits: (low, high) of each input, for the witness. real (m, inputs): rows that it may show, or None.
    """

    inputs: tuple[TrainedInput, ...]
    classes: tuple[str, ...]
    values: Floats
    labels: Labels
    row_weights: Floats | None
    limits: Sequence[tuple[float, float]]
    counts: FittedRows
    prevalence: Fraction | None = None
    real: Floats | None = None

    @property
    def columns(self) -> tuple[Column, ...]:
        return columns_of(self.inputs)


def fit_plan(plan: Plan, rows: Rows) -> TrainedModel:
    """Fit what the plan asks for on the rows that it does not hold out.

    Centres, scales, typical values, the prior's strength and weights come from the fitted rows alone; the results are
    of the held-out rows alone. Raises RowsError where the rows cannot be split, FitError with all that keeps them from
    determining a model.
    """
    out = held_out_rows(rows, plan.rows.held_out, plan.rows.seed)
    data = _to_fit(plan, rows, out)
    rule = rule_of(plan.prior, data.columns)
    standardised = _standardised(data, rule, Fraction(1) if plan.prior.method != "fixed" else plan.prior.sd)
    sd, choice = plan.prior.sd, None
    if plan.prior.method == "cross-validation" and rule.is_shared:
        fold = folds(rows, ~out, FOLDS, plan.rows.seed)
        choice = choose_sd(data.inputs, rows.values[~out], data.labels, data.row_weights, fold, rule)
        sd = Fraction(str(choice.sd))
    trained = replace(_fit(data, standardised, rule, sd), choice=choice)
    if not out.any():
        return trained
    values = with_typical(rows.values[out], [entry.typical for entry in trained.inputs])
    log_odds, _ = log_odds_with_bounds(trained.terms, trained.scores[0], values)
    base_rate = trained.class_weights[1] / math.fsum(trained.class_weights)
    weights = None if rows.weights is None else rows.weights[out]
    return replace(trained, held_out=held_out_results(log_odds, rows.labels[out], base_rate, weights))


def fit_map(
    X: npt.ArrayLike,
    y: npt.ArrayLike,
    sd: float | Sequence[float] = 1.0,
    names: Sequence[str] | None = None,
    row_weights: npt.ArrayLike | None = None,
    intercept_sd: float = math.inf,
) -> TrainedModel:
    """The MAP logistic model of two classes from arrays; every row is fitted, none is held out.

    maximise  sum_l ω_l log p(y_l | x_l)  -  1/2 sum_j (w_j / sd_j)^2  -  1/2 (b / intercept_sd)^2

    over the intercept b and the weights w on standardised columns (weighted mean 0, population sd 1).

    X: (n, d) numbers, each column in a unit of your own. y: (n,) of two different values (bools, integers, texts);
    sorted, the last is the event. sd: of the Gaussian prior on each weight, one number or d of them; math.inf is flat.
    names: d input names; by default the columns' of a data frame, else x0, x1, … row_weights: (n,) >= 0; a row of
    weight 0 is left out.

    Raises RowsError with every problem of the arrays (and of the other arguments, if any), FitError with every problem
    of the other arguments alone, or with all that keeps the rows from determining a model.
    """
    read = read_arrays(X, y, sd, names, row_weights, intercept_sd)
    data = _Data(
        tuple(TrainedInput(name, "", (), None) for name in read.names),
        read.classes,
        read.values,
        read.labels,
        read.row_weights,
        read.limits,
        FittedRows(read.total, 0, len(read.values), 0, None),
    )
    own = tuple(ColumnPrior(sd=_exact_sd(own_sd), shared=False) for own_sd in read.sds)
    rule = PriorRule(own, _exact_sd(read.intercept_sd))
    trained = _fit(data, _standardised(data, rule, None), rule, None)
    means = tuple(TrainedInput(term.name, "", (), term.centre) for term in trained.terms)
    return replace(trained, inputs=means)


def _to_fit(plan: Plan, rows: Rows, out: npt.NDArray[np.bool_]) -> _Data:
    fitted, weights = rows.values[~out], None if rows.weights is None else rows.weights[~out]
    inputs = tuple(
        TrainedInput(entry.name, entry.unit, entry.levels, typical_value(column, len(entry.levels), weights))
        for entry, column in zip(rows.inputs, fitted.T, strict=True)
    )
    if empty := [entry.name for entry in inputs if entry.typical is None]:
        found, todo = f"found no value in any of the {len(fitted)} fitted rows", "remove the input"
        raise FitError(Problem(f'[[input]] "{name}"', found, todo) for name in empty)
    typical = [entry.typical for entry in inputs]
    shown = real_rows(rows.keys, np.flatnonzero(~out)) if plan.real_rows else None
    return _Data(
        inputs,
        rows.classes,
        with_typical(fitted, typical),
        rows.labels[~out],
        weights,
        [_limits(entry) for entry in rows.inputs],
        FittedRows(rows.total, rows.dropped, len(fitted), int(out.sum()), rows.sha256),
        plan.decision.prevalence,
        None if shown is None else with_typical(rows.values[shown], typical),
    )


def _standardised(data: _Data, rule: PriorRule, sd: Fraction | None) -> Standardised:
    """Raises FitError with every reason why the rows do not determine a model; sd: shared, any finite one is alike."""
    problems = [
        Problem(f'input "{entry.name}"', f"found numbers as large as {max(map(abs, ends)):g}", "take a larger unit")
        for entry, ends in zip(data.inputs, data.limits, strict=True)
        if max(map(abs, ends)) > LARGEST
    ]
    if problems:
        raise FitError(problems)
    matrix = design_matrix(data.columns, data.values)
    standardised = standardise(matrix, data.row_weights, [column.form == "value" for column in data.columns])
    names = [column.name for column in data.columns]
    prior = rule.on(standardised.scales, sd)
    if reasons := judge(matrix, data.labels, data.row_weights, prior, names, data.classes):
        raise FitError(reasons)
    return standardised


def _fit(data: _Data, standardised: Standardised, rule: PriorRule, sd: Fraction | None) -> TrainedModel:
    prior = rule.on(standardised.scales, sd)
    solution = solve(standardised.columns, data.labels, data.row_weights, prior)
    terms = tuple(
        TrainedTerm(column.name, column.form, column.of, column.level, centre, scale)
        for column, centre, scale in zip(data.columns, standardised.centres, standardised.scales, strict=True)
    )
    scores = (Score(solution.intercept, solution.weights),)
    class_weights = class_sums(data.labels, data.row_weights, len(data.classes))
    shift = shift_to_field(data.prevalence, class_weights)
    return TrainedModel(
        inputs=data.inputs,
        classes=data.classes,
        class_weights=class_weights,
        terms=terms,
        scores=scores,
        prior=TrainedPrior(prior.means, tuple(_stored_sd(sd) for sd in prior.sds), _stored_sd(prior.intercept_sd)),
        covariance=solution.covariance,
        certificate=Certificate(solution.gradient, solution.newton_decrement, solution.distance),
        rows=data.counts,
        held_out=None,
        witness=witness_of(data.inputs, terms, scores, data.limits, shift, data.real),
        prevalence=None if data.prevalence is None else str(data.prevalence),
    )


def _exact_sd(sd: float) -> Fraction | None:
    return None if math.isinf(sd) else Fraction(sd)


def _stored_sd(sd: float) -> float | None:
    return None if math.isinf(sd) else sd


def _limits(entry: InputPlan) -> tuple[float, float]:
    if entry.levels:
        return 0.0, len(entry.levels) - 1.0
    if entry.low is None or entry.high is None:
        raise ValueError(f"the range of {entry.name} was not read from the rows")
    return _inside(entry.low, math.inf), _inside(entry.high, -math.inf)


def _inside(limit: Fraction, inwards: float) -> float:
    """The limit in binary64; the next number inwards where rounding it on to binary32 would leave the device's range.

    1.00000005960464477539063 is such a limit: its binary64 lies halfway between two binary32 numbers.
    """
    number = float(limit)
    twice, once = round_to("binary32", Fraction(number)), round_to("binary32", limit)
    return number if twice == once else math.nextafter(number, inwards)
