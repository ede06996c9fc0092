"""The fit held against its own optimality condition, recomputed from the raw rows.

Independent on purpose of everything in `trainer`: another reader of the CSV, another split, long-double sums, and the
gradient on columns standardised here. At the optimum of

    sum_l log p(y_l | x_l, w) - 1/2 sum_j ((w_j - m_j) / s_j)^2

the gradient is zero; the Newton step d = H^-1 g from the stored weights is then how far they are from it.
"""

from __future__ import annotations

import csv
import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import numpy as np

from runtime_min.canonical import canonical
from runtime_min.model import Request, TrainedModel

# What the stored weights may be from the optimum: their grid of 2^-30, and 1e-6 posterior sd for this computation.
GRID = 2.0**-30
POSTERIOR_SD_SHARE = 1e-6
# Centres and scales are stored to 40 significant bits of the scale.
STANDARDISATION_SHARE = 2.0**-39


@dataclass(frozen=True)
class Source:
    """Where the rows are and how the plan splits them."""

    file: Path
    label: str
    held_out: Fraction
    seed: int


@dataclass(frozen=True)
class Optimality:
    """`problems`: one sentence a finding; empty where the stored fit is that of the rows.

    `step`: the largest Newton step, in posterior sd; `rows`: how many rows were fitted.
    """

    problems: tuple[str, ...]
    step: float
    rows: int


def recheck_fit(trained: TrainedModel, request: Request, source: Source) -> Optimality:
    """Recompute from the CSV: the split, centres, scales, class sums, and the Newton step at the stored weights."""
    values, labels, digests = _raw_rows(trained, request, source)
    fitted = ~_held_out(digests, source.held_out)
    values, labels = values[fitted], labels[fitted]
    problems = []
    if len(values) != trained.rows.fitted:
        problems.append(f"{len(values)} rows are to be fitted, the trained model says {trained.rows.fitted}")
    counts = tuple(float(np.sum(labels == k)) for k in range(len(trained.classes)))
    if counts != trained.class_weights:
        problems.append(f"the fitted rows hold {counts} rows a class, the trained model says {trained.class_weights}")
    values = _with_typical(values, request, trained, problems)
    columns = np.empty((len(values), len(trained.terms)), dtype=np.longdouble)
    for j, term in enumerate(trained.terms):
        column = values[:, term.of[0]].astype(np.longdouble)
        if term.form == "level":
            columns[:, j] = column == term.level
            continue
        centre = column.mean()
        scale = np.sqrt(((column - centre) ** 2).mean())
        slack = STANDARDISATION_SHARE * scale
        if not (abs(centre - term.centre) <= slack and abs(scale - term.scale) <= slack):
            problems.append(
                f'"{term.name}" has mean {float(centre):.10g} and population sd {float(scale):.10g} over the fitted '
                f"rows, the trained model says {term.centre:.10g} and {term.scale:.10g}"
            )
        columns[:, j] = (column - centre) / scale
    step, off = _newton_step(trained, columns, labels)
    return Optimality((*problems, *off), step, len(values))


def _newton_step(trained: TrainedModel, columns: np.ndarray, labels: np.ndarray) -> tuple[float, list[str]]:
    weights = np.array([trained.intercept, *trained.weights], dtype=np.longdouble)
    design = np.hstack([np.ones((len(columns), 1), dtype=np.longdouble), columns])
    z = design @ weights
    tail = np.exp(-np.abs(z))  # stable on both sides: 1 / (1 + tail) is the probability of the sign of z
    wrong = np.where((z >= 0) == (labels == 1), tail, np.longdouble(1)) / (1 + tail)
    residual = np.where(labels == 1, wrong, -wrong)
    sds = [trained.prior.intercept_sd, *trained.prior.sds]
    precision = np.array([0.0 if sd is None else 1.0 / sd**2 for sd in sds])
    means = np.array([0.0, *trained.prior.means])
    gradient = design.T @ residual - precision * (weights - means)
    curvature = tail / (1 + tail) ** 2
    hessian = (design.T @ (design * curvature[:, None])).astype(float) + np.diag(precision)
    step = np.linalg.solve(hessian, gradient.astype(float))
    spread = np.sqrt(np.diag(np.linalg.inv(hessian)))
    names = ["the intercept", *(f'the weight of "{term.name}"' for term in trained.terms)]
    problems = [
        f"{names[j]} is {abs(step[j]):.2g} from the optimum of these rows ({abs(step[j]) / spread[j]:.2g} posterior sd)"
        for j in range(len(step))
        if not abs(step[j]) <= GRID + POSTERIOR_SD_SHARE * spread[j]
    ]
    return float(np.max(np.abs(step) / spread)), problems


def _raw_rows(
    trained: TrainedModel, request: Request, source: Source
) -> tuple[np.ndarray, np.ndarray, list[bytes]]:
    """Values (n, inputs), class indices (n,) and digests of the rows that the plan keeps, in file order."""
    kept: list[list[float]] = []
    labels: list[int] = []
    digests: list[bytes] = []
    with source.file.open(encoding="utf-8-sig", newline="") as file:
        for row in csv.DictReader(file, strict=True):
            values = [_value(row[entry.column], entry.levels) for entry in request.inputs]
            absent = [entry.missing for entry, value in zip(request.inputs, values, strict=True) if value != value]
            if "fault" in absent:
                continue
            parsed = [
                None if value != value else row[entry.column] if entry.levels else value
                for entry, value in zip(request.inputs, values, strict=True)
            ]
            key = canonical([source.seed, row[source.label], *parsed, 1])
            digests.append(hashlib.sha256(key.encode()).digest())
            for position, entry in enumerate(request.inputs):
                if entry.outside == "clamp" and entry.low is not None and entry.high is not None:
                    low, high = float(Fraction(entry.low)), float(Fraction(entry.high))
                    values[position] = min(max(values[position], low), high)
            kept.append(values)
            labels.append(trained.classes.index(row[source.label]))
    return np.array(kept), np.array(labels), digests


def _value(field: str, levels: Sequence[str]) -> float:
    if field == "":
        return float("nan")
    return float(levels.index(field)) if levels else float(field)


def _held_out(digests: Sequence[bytes], share: Fraction) -> np.ndarray:
    """The rows whose SHA-256 comes first: as near to round(share n) as equal rows, which stay together, allow."""
    held = np.zeros(len(digests), dtype=bool)
    if not share:
        return held
    ordered = sorted(digests)
    ends = [at for at in range(1, len(ordered)) if ordered[at] != ordered[at - 1]]
    wanted = round(share * len(ordered))
    count = min(ends, key=lambda end: (abs(end - wanted), end))
    first = set(ordered[:count])
    return np.array([digest in first for digest in digests])


def _with_typical(values: np.ndarray, request: Request, trained: TrainedModel, problems: list[str]) -> np.ndarray:
    """Put the typical value where one is missing; it must be the fitted rows' mean, or their commonest level."""
    values = values.copy()
    for position, entry in enumerate(request.inputs):
        absent = np.isnan(values[:, position])
        if not absent.any():
            continue
        typical = trained.inputs[position].typical
        present = values[~absent, position]
        mean = float(np.argmax(np.bincount(present.astype(int)))) if entry.levels else float(np.mean(present))
        if typical is None or not abs(typical - mean) <= 1e-9 * max(abs(mean), float(np.std(present))):
            problems.append(f'"{entry.name}" has the typical value {mean:.10g}, the trained model says {typical}')
        values[absent, position] = mean
    return values
