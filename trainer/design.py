"""Inputs -> terms -> design matrix.

A number is one column, the value itself. An input with K levels is K - 1 indicator columns: that of level k is 1 where
the level is k and 0 elsewhere, k = 1 … K - 1; level 0 is the reference and has no column.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from runtime_min.model import TrainedInput
from trainer.standardise import class_sums

Floats = npt.NDArray[np.float64]

_SUMMABLE = 2.0**900  # of numbers up to this no sum overflows, in any order
_SMALLEST = 2.0**-100  # a row weight from which a product that underflows is nothing beside the mean


@dataclass(frozen=True)
class Column:
    """One column of the design matrix before it is standardised; the fields are those of `TrainedTerm`."""

    name: str
    form: str
    of: tuple[int, ...]
    level: int | None


def columns_of(inputs: Sequence[TrainedInput]) -> tuple[Column, ...]:
    """The columns in the order of the inputs, levels in the order of their input."""
    columns: list[Column] = []
    for position, entry in enumerate(inputs):
        if not entry.levels:
            columns.append(Column(entry.name, "value", (position,), None))
        for level in range(1, len(entry.levels)):
            columns.append(Column(f"{entry.name}={entry.levels[level]}", "level", (position,), level))
    return tuple(columns)


def design_matrix(columns: Sequence[Column], values: Floats) -> Floats:
    """values (n, inputs), a level as its index and nothing missing -> (n, columns); numbers alone are not copied."""
    if all(column.form == "value" for column in columns):
        return values
    matrix = np.empty((len(values), len(columns)))
    for position, column in enumerate(columns):
        measured = values[:, column.of[0]]
        matrix[:, position] = measured if column.form == "value" else measured == column.level
    return matrix


def typical_value(values: Floats, level_count: int, row_weights: Floats | None = None) -> float | None:
    """What stands in for a missing value of one input, from its fitted rows (n,), NaN where missing; None without any.

    row_weights (n,) > 0, or None. A number: the weighted mean, from sums that are rounded once, so that the order of
    the rows changes no bit. Levels: the index of the one with the most weight, of several with as much the lowest.
    """
    present = ~np.isnan(values)
    values = values[present]
    if not len(values):
        return None
    weights = None if row_weights is None else row_weights[present]
    if level_count:
        return float(np.argmax(class_sums(values.astype(np.int64), weights, level_count)))
    return _mean(values, weights)


def _mean(values: Floats, weights: Floats | None) -> float:
    total = float(len(values)) if weights is None else math.fsum(weights)
    with np.errstate(over="ignore"):
        products = values if weights is None else values * weights
        if float(np.abs(products).max()) <= _SUMMABLE and (weights is None or weights.min() >= _SMALLEST):
            return math.fsum(products) / total
    exact = [Fraction(1)] * len(values) if weights is None else list(map(Fraction, weights.tolist()))
    return float(sum(w * Fraction(v) for w, v in zip(exact, values.tolist(), strict=True)) / sum(exact))


def with_typical(values: Floats, typical: Sequence[float | None]) -> Floats:
    """values (n, inputs) with every NaN replaced by the typical value of its input; not copied where there is none."""
    missing = np.isnan(values)
    if not missing.any():
        return values
    stand_ins = np.array([math.nan if value is None else value for value in typical])
    return np.where(missing, stand_ins, values)
