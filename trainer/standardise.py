"""Centres, scales and standardised columns, the same bits in every row order.

    centre = Σω v / Σω,   scale² = Σω v² / Σω − centre²,   column = fl(fl(v − centre) / scale)

The sums are taken about a pivot p near the mean, so that a large offset costs nothing: with d = v − p,
mean = p + Σω d / Σω and variance = Σω d² / Σω − (Σω d / Σω)². Centre and scale are then rounded (`grid`). What is
rounded must not depend on the order in which the rows came, so each number is accepted only where the error bound of
its sum leaves one possible result. Three rounds: plain doubles for all columns, pairs of doubles for the few columns
left, whole numbers for what is still in doubt (a true tie, extreme magnitudes).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from trainer.exact_sums import (
    UNIT_ROUNDOFF,
    Pairs,
    exact_moments,
    pair_sum,
    power_of_two_above,
    scale_pairs,
    square_pairs,
    tree_additions,
    tree_sum,
    two_sum,
)
from trainer.grid import SCALE_BITS, round_centre, round_scale
from trainer.objective import WIDE

Array = NDArray[np.float64]
Labels = NDArray[np.integer]
Bools = NDArray[np.bool_]

_BLOCK_ROWS = 2048  # rows that are centred and summed while they are in the cache; a power of two
_PIVOT_ROWS = 32  # rows whose mean serves as pivot; any choice gives the same result
_MIDDLE_MULTIPLE = 0.75 * 2.0**SCALE_BITS  # of those that a scale can be of its last bit
_BOTH_WAYS = np.array(((-2.0,), (2.0,)))
_LEAST_VARIANCE = 2.0**-700  # above it no underflow in a square reaches the error bound
_WEIGHT_LIMITS = (2.0**-100, 2.0**100)  # row weights within these keep products clear of under- and overflow
_PAIR_ERROR = Fraction(1, 2**90)  # above 8 u² (40 levels) + 6 u², u = 2^-53: a sum in pairs, relative to Σ|terms|


@dataclass(frozen=True)
class Standardised:
    """Centres and scales (d of each) and columns (n, d) float64; an indicator column has centre 0 and scale 1."""

    centres: tuple[float, ...]
    scales: tuple[float, ...]
    columns: Array


def standardise(
    values: Array, row_weights: Array | None, numeric: Sequence[bool], *, block_rows: int = _BLOCK_ROWS
) -> Standardised:
    """Standardise the numeric columns of `values` (n, d); `row_weights` (n,) >= 0; indicators stay as they are.

    Finite values and at least one positive weight are required; `judge` says so in words. A constant column gets
    scale 1 and becomes 0; `judge` refuses it. `block_rows` is a power of two and changes no bit.
    """
    values = np.asarray(values, dtype=np.float64, order="C")
    to_scale = np.asarray(numeric, dtype=bool)
    if to_scale.all():
        centres, scales = _centres_and_scales(values, row_weights, block_rows)
    else:
        centres, scales = np.zeros(len(to_scale)), np.ones(len(to_scale))
        if to_scale.any():
            centres[to_scale], scales[to_scale] = _centres_and_scales(values[:, to_scale], row_weights, block_rows)
    return Standardised(tuple(centres.tolist()), tuple(scales.tolist()), _columns(values, centres, scales))


def class_sums(labels: Labels, row_weights: Array | None, classes: int) -> tuple[float, ...]:
    """Σω of each class, each the exact sum rounded once (`math.fsum`); labels (n,) in 0 … classes − 1."""
    if row_weights is None:
        return tuple(float(count) for count in np.bincount(labels, minlength=classes)[:classes])
    return tuple(math.fsum(row_weights[labels == index].tolist()) for index in range(classes))


def _columns(values: Array, centres: Array, scales: Array) -> Array:
    """Laid out as the fit reads them: the numbers of a column side by side where there are few columns."""
    if len(centres) < WIDE:
        by_column = np.subtract(values.T, centres[:, np.newaxis], order="C")
        by_column /= scales[:, np.newaxis]
        return by_column.T
    columns = np.empty_like(values, order="C")
    rows = min(_BLOCK_ROWS, len(values))
    tiled_centres, tiled_scales = np.tile(centres, (rows, 1)), np.tile(scales, (rows, 1))  # one long loop, not n short
    for start in range(0, len(values), _BLOCK_ROWS):
        block = columns[start : start + _BLOCK_ROWS]
        np.subtract(values[start : start + _BLOCK_ROWS], tiled_centres[: len(block)], out=block)
        np.divide(block, tiled_scales[: len(block)], out=block)
    return columns


def _centres_and_scales(values: Array, row_weights: Array | None, block_rows: int) -> tuple[Array, Array]:
    if row_weights is not None and not (row_weights > 0).all():
        values, row_weights = values[row_weights > 0], row_weights[row_weights > 0]
    with np.errstate(all="ignore"):  # an overflow leaves no finite bound, so its column goes to the next round
        centres, scales, sure = _in_doubles(values, row_weights, block_rows)
        for column in np.flatnonzero(~sure):
            one = np.ascontiguousarray(values[:, column])
            pair = _in_pairs(one, row_weights)
            centres[column], scales[column] = _in_whole_numbers(one, row_weights) if pair is None else pair
    return centres, scales


def _in_doubles(values: Array, row_weights: Array | None, block_rows: int) -> tuple[Array, Array, Bools]:
    """Rounded centres and scales of all columns, and where the error bound leaves no other result.

    With γ = γ(k), k roundings on a term's way, and ρ² = Σω d² / Σω: the shift Σω d / Σω is known within γ ρ, since
    Σω|d| <= ρ Σω (Cauchy and Schwarz), and the variance within γ (ρ + |shift|)².
    """
    some = values[:: max(1, len(values) // _PIVOT_ROWS)]
    pivot = some.sum(axis=0) / len(some)
    sums, additions = _sums_about(pivot, values, row_weights, block_rows)
    sums /= float(len(values)) if row_weights is None else math.fsum(row_weights.tolist())
    shift, square = sums
    roundings = (additions + 8) * UNIT_ROUNDOFF
    gamma = 1.01 * roundings / (1.0 - roundings)
    spread = np.sqrt(square)
    variance = square - shift * shift
    scale = np.sqrt(variance)
    reach = spread + np.abs(shift)
    scale_error = gamma * (reach * reach / variance) + 4.0 * UNIT_ROUNDOFF  # relative

    mantissa, exponent = np.frexp(scale)
    exponent -= SCALE_BITS
    multiple = np.ldexp(mantissa, SCALE_BITS)
    nearest = np.rint(multiple)
    doubt = multiple * scale_error
    sure = np.abs(multiple - nearest) + doubt < 0.5
    sure &= np.abs(multiple - _MIDDLE_MULTIPLE) + doubt < _MIDDLE_MULTIPLE - 2.0 ** (SCALE_BITS - 1)
    sure &= variance >= _LEAST_VARIANCE

    last_bit = np.ldexp(1.0, exponent)
    mean, mean_rest = two_sum(pivot, shift)
    mean_error = gamma * spread
    ends = np.abs(np.abs(mean) + _BOTH_WAYS * mean_error)  # where the lower one is beyond 0, its step is not larger
    steps = np.maximum(np.spacing(ends), last_bit)
    sure &= steps[0] == steps[1]
    step = steps[1]
    multiple, rest = mean / step, mean_rest / step
    whole = np.rint(multiple)
    rest += multiple - whole
    over = np.rint(rest)
    sure &= np.abs(rest - over) + mean_error / step + 2.0**-40 < 0.5
    if not _tame(row_weights):
        sure[:] = False
    return (whole + over) * step + 0.0, np.ldexp(nearest, exponent), sure


def _sums_about(pivot: Array, values: Array, row_weights: Array | None, block_rows: int) -> tuple[Array, int]:
    """Σω d and Σω d² of each column, d = v − pivot, in a fixed tree, (2, d); and the additions on a term's way."""
    rows, width = values.shape
    block_rows = min(block_rows, power_of_two_above(rows))
    blocks = -(-rows // block_rows)
    sums = np.zeros((2, power_of_two_above(blocks), width))
    room = np.empty((2, block_rows, width))
    first, second = room
    pivots = np.tile(pivot, (block_rows, 1))  # one long loop, not many short ones
    for index in range(blocks):
        block = values[index * block_rows : (index + 1) * block_rows]
        used = len(block)
        room[:, used:] = 0.0
        if row_weights is None:
            np.subtract(block, pivots[:used], out=first[:used])
            np.multiply(first, first, out=second)
        else:
            weights = row_weights[index * block_rows : index * block_rows + used, np.newaxis]
            np.subtract(block, pivots[:used], out=second[:used])
            np.multiply(second[:used], weights, out=first[:used])
            second *= first
        sums[:, index] = tree_sum(room, axis=1)
    return tree_sum(sums, axis=1), tree_additions(block_rows) + tree_additions(sums.shape[1])


def _in_pairs(values: Array, row_weights: Array | None) -> tuple[float, float] | None:
    """Centre and scale of one column from sums in pairs of doubles; None where they leave more than one result."""
    pivot = float(values[:: max(1, len(values) // _PIVOT_ROWS)].mean())
    deviations = two_sum(values, np.full_like(values, -pivot))
    terms, squares, total = deviations, square_pairs(deviations), Fraction(len(values))
    if row_weights is not None:
        terms, squares = scale_pairs(terms, row_weights), scale_pairs(squares, row_weights)
        total = _fraction(pair_sum(Pairs(row_weights, np.zeros_like(row_weights))))
    both = pair_sum(Pairs(np.column_stack((terms.high, squares.high)), np.column_stack((terms.low, squares.low))))
    sums = [Pairs(both.high[index], both.low[index]) for index in (0, 1)]
    if not _tame(row_weights) or not all(
        math.isfinite(part) for pair in sums for part in (float(pair.high), float(pair.low))
    ):
        return None
    shift, square = (_fraction(pair) / total for pair in sums)
    variance = square - shift * shift
    spread = Fraction(math.sqrt(square)) * 2  # a generous ρ
    doubt = 4 * _PAIR_ERROR * (spread + abs(shift)) ** 2
    if not variance - doubt > Fraction(_LEAST_VARIANCE):
        return None
    low, high = round_scale(variance - doubt), round_scale(variance + doubt)
    mean, mean_doubt = Fraction(pivot) + shift, 4 * _PAIR_ERROR * spread
    centre = round_centre(mean - mean_doubt, low[1])
    if low != high or centre != round_centre(mean + mean_doubt, low[1]):
        return None
    return centre, low[0]


def _in_whole_numbers(values: Array, row_weights: Array | None) -> tuple[float, float]:
    """Centre and scale of one column without any error; scale 1 where it is constant or as good as that."""
    mean, variance = exact_moments(values, row_weights)
    if variance == 0:
        return float(mean) + 0.0, 1.0
    scale, last_bit = round_scale(variance)
    if scale == 0.0:
        return float(mean) + 0.0, 1.0
    return round_centre(mean, last_bit), scale


def _tame(row_weights: Array | None) -> bool:
    """Whether products with the row weights stay clear of underflow and overflow."""
    least, most = (1.0, 1.0) if row_weights is None else (float(row_weights.min()), float(row_weights.max()))
    return _WEIGHT_LIMITS[0] <= least and most <= _WEIGHT_LIMITS[1]


def _fraction(pair: Pairs) -> Fraction:
    return Fraction(float(pair.high)) + Fraction(float(pair.low))
