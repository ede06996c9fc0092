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

Floats = npt.NDArray[np.float64]

_SUMMABLE = 2.0**900  # of numbers up to this no sum overflows, in any order


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


def typical_value(values: Floats, level_count: int) -> float | None:
    """What stands in for a missing value of one input, from its fitted rows (n,), NaN where missing; None without any.

    A number: the mean, from a sum that is rounded once, so that the order of the rows changes no bit. Levels: the index
    of the commonest, of several as common the lowest.
    """
    present = values[~np.isnan(values)]
    if not len(present):
        return None
    if level_count:
        return float(np.bincount(present.astype(np.int64), minlength=level_count).argmax())
    if float(np.abs(present).max()) > _SUMMABLE:
        return float(sum(map(Fraction, present.tolist())) / len(present))
    return math.fsum(present) / len(present)


def with_typical(values: Floats, typical: Sequence[float | None]) -> Floats:
    """values (n, inputs) with every NaN replaced by the typical value of its input; not copied where there is none."""
    missing = np.isnan(values)
    if not missing.any():
        return values
    stand_ins = np.array([math.nan if value is None else value for value in typical])
    return np.where(missing, stand_ins, values)
