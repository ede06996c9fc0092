"""From rows that were read, or from arrays, to a trained model: design, judge, standardise, solve, witness, results."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
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
from trainer.design import columns_of, design_matrix, typical_value, with_typical
from trainer.judge import judge
from trainer.objective import Prior
from trainer.operate import held_out_results
from trainer.plan import InputPlan, Plan
from trainer.solve import solve
from trainer.split import held_out_rows
from trainer.standardise import class_sums, standardise
from trainer.table import Rows
from trainer.witness import log_odds_with_bounds, witness_of

Floats = npt.NDArray[np.float64]
Labels = npt.NDArray[np.int64]


def fit_plan(plan: Plan, rows: Rows) -> TrainedModel:
    """Fit what the plan asks for on the rows that it does not hold out.

    Centres, scales, typical values and weights come from the fitted rows alone; the results are of the held-out rows
    alone. Raises RowsError where the rows cannot be split, FitError with all that keeps them from determining a model.
    """
    if plan.prior.method != "fixed" or plan.prior.terms or plan.decision.prevalence is not None:
        found = "asks for more than a number under sd, which is not there yet"
        raise FitError(Problem("[prior]", found, "write sd = 1.0, or another number, or inf"))
    out = held_out_rows(rows, plan.rows.held_out, plan.rows.seed)
    fitted = rows.values[~out]
    inputs = tuple(
        TrainedInput(entry.name, entry.unit, entry.levels, typical_value(column, len(entry.levels)))
        for entry, column in zip(rows.inputs, fitted.T, strict=True)
    )
    typical = [entry.typical for entry in inputs]
    if empty := [entry.name for entry in inputs if entry.typical is None]:
        found, todo = f"found no value in any of the {len(fitted)} fitted rows", "remove the input"
        raise FitError(Problem(f'[[input]] "{name}"', found, todo) for name in empty)
    columns = columns_of(inputs)
    sd = _float_sd(plan.prior.sd)
    trained = _fit(
        inputs,
        rows.classes,
        with_typical(fitted, typical),
        rows.labels[~out],
        None if rows.weights is None else rows.weights[~out],
        Prior((0.0,) * len(columns), (sd,) * len(columns), _float_sd(plan.prior.intercept_sd)),
        [_limits(entry) for entry in rows.inputs],
        FittedRows(rows.total, rows.dropped, len(fitted), int(out.sum()), rows.sha256),
    )
    if not out.any():
        return trained
    log_odds, _ = log_odds_with_bounds(trained.terms, trained.scores[0], with_typical(rows.values[out], typical))
    base_rate = trained.class_weights[1] / math.fsum(trained.class_weights)
    return replace(trained, held_out=held_out_results(log_odds, rows.labels[out], base_rate))


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
    trained = _fit(
        tuple(TrainedInput(name, "", (), None) for name in read.names),
        read.classes,
        read.values,
        read.labels,
        read.row_weights,
        Prior((0.0,) * len(read.names), read.sds, read.intercept_sd),
        read.limits,
        FittedRows(read.total, 0, len(read.values), 0, None),
    )
    means = tuple(TrainedInput(term.name, "", (), term.centre) for term in trained.terms)
    return replace(trained, inputs=means)


def _fit(
    inputs: tuple[TrainedInput, ...],
    classes: tuple[str, ...],
    values: Floats,
    labels: Labels,
    row_weights: Floats | None,
    prior: Prior,
    limits: Sequence[tuple[float, float]],
    counts: FittedRows,
) -> TrainedModel:
    problems = [
        Problem(f'input "{entry.name}"', f"found numbers as large as {max(map(abs, ends)):g}", "take a larger unit")
        for entry, ends in zip(inputs, limits, strict=True)
        if max(map(abs, ends)) > LARGEST
    ]
    if problems:
        raise FitError(problems)
    columns = columns_of(inputs)
    matrix = design_matrix(columns, values)
    judged = prior
    if math.inf not in prior.sds and math.isinf(prior.intercept_sd):
        # With a finite sd of every weight, two classes that have rows determine a flat intercept: judge need not try.
        judged = replace(prior, intercept_sd=1.0)
    reasons = judge(matrix, labels, row_weights, judged, [column.name for column in columns], classes)
    if reasons:
        raise FitError(reasons)
    standardised = standardise(matrix, row_weights, [column.form == "value" for column in columns])
    solution = solve(standardised.columns, labels, row_weights, prior)
    terms = tuple(
        TrainedTerm(column.name, column.form, column.of, column.level, centre, scale)
        for column, centre, scale in zip(columns, standardised.centres, standardised.scales, strict=True)
    )
    scores = (Score(solution.intercept, solution.weights),)
    return TrainedModel(
        inputs=inputs,
        classes=classes,
        class_weights=class_sums(labels, row_weights, len(classes)),
        terms=terms,
        scores=scores,
        prior=TrainedPrior(prior.means, tuple(_stored_sd(sd) for sd in prior.sds), _stored_sd(prior.intercept_sd)),
        covariance=solution.covariance,
        certificate=Certificate(solution.gradient, solution.newton_decrement, solution.distance),
        rows=counts,
        held_out=None,
        witness=witness_of(inputs, terms, scores, limits),
    )


def _float_sd(sd: Fraction | None) -> float:
    return math.inf if sd is None else float(sd)


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
