"""The fit held against its own optimality condition, recomputed from the raw rows.

Independent on purpose of everything in `trainer`: another reader of the files and another split (`raw_rows`),
long-double sums, and the gradient on columns standardised here by centres and scales that were found to be right. At
the optimum of

    sum_l ω_l log p(y_l | x_l, w) - 1/2 sum_j ((w_j - m_j) / s_j)^2

with the means and sds of the trained model's prior, whether they were given or chosen, the gradient is zero; the Newton
step d = H^-1 g from the stored weights is then how far they are from it.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
import numpy.typing as npt

from export.raw_rows import RawRows, Source, raw_rows
from export.results import wrong_results
from runtime_min.model import Request, TrainedModel

__all__ = ["AskedPrior", "AskedTerm", "Optimality", "Source", "recheck_fit"]

# What the stored weights may be from the optimum: their grid of 2^-30, and 1e-6 posterior sd for this computation.
GRID = 2.0**-30
POSTERIOR_SD_SHARE = 1e-6
# Centres and scales are stored to 40 significant bits of the scale, centres at least to their own last bit.
STANDARDISATION_SHARE = 2.0**-39
# Of the curve of log losses, what is lower by less is as low.
LOSS_STEP = 1e-11
# Of a covariance, relative to the two posterior sds: what two inversions may differ by.
COVARIANCE_SHARE = 1e-6
# Of the entries of a Hessian, relative: sums of many rows in double, here and in the fit.
ROUNDED_ENTRIES = 1e-14

LongDoubles = npt.NDArray[np.longdouble]


@dataclass(frozen=True)
class AskedTerm:
    """What the plan says of one weight's prior; an sd of None is flat. shared: the sd is that of all such weights."""

    name: str
    mean: Fraction = Fraction(0)
    sd: Fraction | None = None
    shared: bool = True
    per_unit: bool = False


@dataclass(frozen=True)
class AskedPrior:
    """What the plan says of the prior (method "fixed", with sd, or another, which chooses it) and of the prevalence."""

    method: str
    sd: Fraction | None
    intercept_sd: Fraction | None
    terms: tuple[AskedTerm, ...] = ()
    prevalence: Fraction | None = None


@dataclass(frozen=True)
class Optimality:
    """`problems`: one sentence a finding; empty where the stored fit is that of the rows.

    `step`: the largest Newton step, in posterior sd; `rows`: how many rows were fitted.
    """

    problems: tuple[str, ...]
    step: float
    rows: int


def recheck_fit(trained: TrainedModel, request: Request, source: Source, asked: AskedPrior | None = None) -> Optimality:
    """Recompute from the files: split, centres, scales, class sums, Newton step at the stored weights, results.

    asked: what the plan says of the prior and the field, held against what the trained model has; None to leave it.
    """
    rows = raw_rows(trained, request, source)
    fitted = ~rows.held_out
    values, labels, weights = rows.values[fitted], rows.labels[fitted], rows.weights[fitted]
    problems = [*_counts(trained, rows), *_choice(trained), *(_prior(trained, asked) if asked else ())]
    sums = tuple(math.fsum(weights[labels == k]) for k in range(len(trained.classes)))
    if sums != trained.class_weights:
        problems.append(f"the fitted rows weigh {sums} a class, the trained model says {trained.class_weights}")
    values = _with_typical(values, weights, request, trained, problems)
    columns = np.empty((len(values), len(trained.terms)), dtype=np.longdouble)
    for j, term in enumerate(trained.terms):
        column = values[:, term.of[0]].astype(np.longdouble)
        if term.form == "level":
            columns[:, j] = column == term.level
            continue
        centre, scale = _moments(column, weights)
        slack = STANDARDISATION_SHARE * scale
        if abs(centre - term.centre) <= max(slack, np.spacing(abs(term.centre))) and abs(scale - term.scale) <= slack:
            # What the weights are the optimum of: a centre far from 0 is rounded by more than the weights' grid.
            centre, scale = np.longdouble(term.centre), np.longdouble(term.scale)
        else:
            problems.append(
                f'"{term.name}" has mean {float(centre):.17g} and population sd {float(scale):.10g} over the fitted '
                f"rows, the trained model says {term.centre:.17g} and {term.scale:.10g}"
            )
        columns[:, j] = (column - centre) / scale
    step, off = _newton_step(trained, columns, labels, weights)
    problems += wrong_results(trained, rows)
    return Optimality((*problems, *off), step, len(values))


def _counts(trained: TrainedModel, rows: RawRows) -> Iterator[str]:
    fitted, held = int(np.sum(~rows.held_out)), int(np.sum(rows.held_out))
    stated = trained.rows
    for found, said, what in (
        (rows.total, stated.total, "read"),
        (rows.dropped, stated.dropped, "to be dropped for a missing value"),
        (fitted, stated.fitted, "to be fitted"),
        (held, stated.held_out, "to be held out"),
    ):
        if found != said:
            yield f"{found} rows are {what}, the trained model says {said}"
    if rows.sha256 != stated.sha256:
        yield "the rows are other bytes than those that the trained model names"


def _choice(trained: TrainedModel) -> Iterator[str]:
    """Where the prior's sd was chosen: it has the lowest log loss of its own curve."""
    choice = trained.choice
    if choice is None:
        return
    losses = {strength.sd: strength.log_loss for strength in choice.strengths}
    if not losses.get(choice.sd, math.inf) <= min(losses.values()) + LOSS_STEP:
        yield f"the prior's sd {choice.sd:g} has not the lowest log loss of those tried"
    if choice.sd not in trained.prior.sds:
        yield f"the prior's sd {choice.sd:g} was chosen and is that of no weight"


def _prior(trained: TrainedModel, asked: AskedPrior) -> Iterator[str]:
    """The prior's means and sds, of standardised weights: those per unit of an input are times its scale."""
    own = {term.name: term for term in asked.terms}
    shared = asked.sd
    if asked.method != "fixed" and trained.choice is not None:
        shared = Fraction(str(trained.choice.sd))
    for term, mean, sd in zip(trained.terms, trained.prior.means, trained.prior.sds, strict=True):
        entry = own.get(term.name, AskedTerm(term.name))
        factor = Fraction(term.scale) if entry.per_unit else Fraction(1)
        wanted = shared if entry.shared else entry.sd
        if (float(entry.mean * factor), None if wanted is None else float(wanted * factor)) != (mean, sd):
            yield f'the prior of "{term.name}" is not the one that the plan asks for'
    if (None if asked.intercept_sd is None else float(asked.intercept_sd)) != trained.prior.intercept_sd:
        yield "the prior of the intercept is not the one that the plan asks for"
    if asked.prevalence != (None if trained.prevalence is None else Fraction(trained.prevalence)):
        yield f"the plan states the prevalence {asked.prevalence}, the trained model {trained.prevalence}"


def _moments(column: LongDoubles, weights: npt.NDArray[np.float64]) -> tuple[np.longdouble, np.longdouble]:
    """Weighted mean and population sd; the mean again about itself, so that a large offset costs nothing."""
    total = weights.astype(np.longdouble).sum()
    centre = (weights * column).sum() / total
    centre += (weights * (column - centre)).sum() / total
    return centre, np.sqrt((weights * (column - centre) ** 2).sum() / total)


def _newton_step(
    trained: TrainedModel, columns: LongDoubles, labels: npt.NDArray[np.int64], row_weights: npt.NDArray[np.float64]
) -> tuple[float, list[str]]:
    weights = np.array([trained.intercept, *trained.weights], dtype=np.longdouble)
    design = np.hstack([np.ones((len(columns), 1), dtype=np.longdouble), columns])
    z = design @ weights
    tail = np.exp(-np.abs(z))  # stable on both sides: 1 / (1 + tail) is the probability of the sign of z
    wrong = np.where((z >= 0) == (labels == 1), tail, np.longdouble(1)) / (1 + tail)
    residual = row_weights * np.where(labels == 1, wrong, -wrong)
    sds = [trained.prior.intercept_sd, *trained.prior.sds]
    precision = np.array([0.0 if sd is None else 1.0 / sd**2 for sd in sds])
    means = np.array([0.0, *trained.prior.means])
    gradient = design.T @ residual - precision * (weights - means)
    curvature = row_weights * tail / (1 + tail) ** 2
    hessian = (design.T @ (design * curvature[:, None])).astype(float) + np.diag(precision)
    covariance, doubt = _inverse(hessian)
    step = covariance @ gradient.astype(float)
    spread = np.sqrt(np.diag(covariance))
    names = ["the intercept", *(f'the weight of "{term.name}"' for term in trained.terms)]
    problems = [
        f"{names[j]} is {abs(step[j]):.2g} from the optimum of these rows ({abs(step[j]) / spread[j]:.2g} posterior sd)"
        for j in range(len(step))
        if not abs(step[j]) <= GRID + POSTERIOR_SD_SHARE * spread[j]
    ]
    off = np.abs(np.array(trained.covariance) - covariance) / np.outer(spread, spread)
    moved = math.expm1(GRID * float(np.max(np.abs(design).sum(axis=1))))  # from the optimum to weights on the grid
    if not np.max(off) <= COVARIANCE_SHARE + doubt + moved:
        problems.append("the covariance of the weights is not that of their posterior on these rows")
    return float(np.max(np.abs(step) / spread)), problems


def _inverse(hessian: npt.NDArray[np.float64]) -> tuple[npt.NDArray[np.float64], float]:
    """The inverse, its rows and columns scaled to a unit diagonal on the way; and what rounding does to it, relatively.

    Entries with errors of some 1e-16 give an inverse with errors of that times the condition number (Higham 2002,
    Accuracy and Stability of Numerical Algorithms, section 7.2): much where one row weighs 1e12 times the others.
    """
    scaling = 1.0 / np.sqrt(np.diag(hessian))
    scaled = hessian * np.outer(scaling, scaling)
    inverse: npt.NDArray[np.float64] = np.linalg.inv(scaled) * np.outer(scaling, scaling)
    return inverse, float(np.linalg.cond(scaled)) * ROUNDED_ENTRIES


def _with_typical(
    values: npt.NDArray[np.float64],
    weights: npt.NDArray[np.float64],
    request: Request,
    trained: TrainedModel,
    problems: list[str],
) -> npt.NDArray[Any]:
    """Put the typical value where one is missing; it must be the fitted rows' mean, or their commonest level."""
    values = values.copy()
    for position, entry in enumerate(request.inputs):
        absent = np.isnan(values[:, position])
        present, heavy = values[~absent, position], weights[~absent]
        if entry.levels:
            sums = np.bincount(present.astype(int), heavy, len(entry.levels))
            mean, spread = float(np.argmax(sums >= sums.max() * (1 - 1e-12))), 0.0
        else:
            centre, scale = _moments(present.astype(np.longdouble), heavy)
            mean, spread = float(centre), float(scale)
        typical = trained.inputs[position].typical
        if typical is None or not abs(typical - mean) <= 1e-9 * max(abs(mean), spread):
            problems.append(f'"{entry.name}" has the typical value {mean:.10g}, the trained model says {typical}')
        values[absent, position] = mean
    return values
