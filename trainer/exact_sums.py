"""Sums that do not depend on the order of their terms: with a bound, in pairs of doubles, and exact.

Three strengths, cheapest first:

* `tree_sum` adds in a fixed tree of blocks of 16, so that a term passes few additions and the bound is small;
* `pair_sum` adds pairs (high, low) of doubles; the low part holds what the high part rounds away;
* `exact_moments` adds whole numbers and forgets nothing.

`two_sum`: Knuth, The Art of Computer Programming 2, theorem 4.2.2 B. `two_product`: Dekker, Numerische Mathematik 18
(1971), with Veltkamp's splitting. Both are exact where nothing overflows or underflows.
"""

from __future__ import annotations

from fractions import Fraction
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

UNIT_ROUNDOFF = 2.0**-53
TREE_BLOCK = 16  # rows that one level of the tree adds; a term passes 15 additions a level
_SPLITTER = 2.0**27 + 1.0  # Veltkamp's constant for 53 bits


class Pairs(NamedTuple):
    """Numbers as unevaluated sums high + low, |low| at most about half a unit in the last place of high."""

    high: Array
    low: Array


def tree_sum(terms: Array, axis: int = 0) -> Array:
    """Sum over an axis whose length is a power of two; any 16 partial sums of a level are added together.

    Each term passes `tree_additions`, k, at most, so the error is at most γ(k) Σ|terms|, γ(k) = k u / (1 − k u)
    (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., section 4.2). The order within a block is free.
    """
    before, after = terms.shape[:axis], terms.shape[axis + 1 :]
    for block in _tree_blocks(terms.shape[axis]):
        terms = terms.reshape(*before, block, -1).sum(axis=axis)
    return terms.reshape(before + after)


def tree_additions(length: int) -> int:
    """Additions that a term passes, at most, in `tree_sum` over `length` terms (a power of two)."""
    return sum(block - 1 for block in _tree_blocks(length))


def _tree_blocks(length: int) -> list[int]:
    """Partial sums in a block, level by level."""
    blocks = []
    while length > 1:
        blocks.append(min(TREE_BLOCK, length))
        length //= blocks[-1]
    return blocks


def power_of_two_above(count: int) -> int:
    """The least power of two that is at least `count`."""
    return 1 << max(count - 1, 0).bit_length()


def two_sum(a: Array, b: Array) -> Pairs:
    """a + b exactly, as rounded sum and its error."""
    total = a + b
    part = total - a
    return Pairs(total, (a - (total - part)) + (b - part))


def two_product(a: Array, b: Array) -> Pairs:
    """a · b exactly, as rounded product and its error."""
    product = a * b
    a_high = _SPLITTER * a
    a_high = a_high - (a_high - a)
    b_high = _SPLITTER * b
    b_high = b_high - (b_high - b)
    a_low, b_low = a - a_high, b - b_high
    return Pairs(product, a_low * b_low - (((product - a_high * b_high) - a_low * b_high) - a_high * b_low))


def add_pairs(a: Pairs, b: Pairs) -> Pairs:
    """a + b; the error is below 8 u² (|a| + |b|)."""
    high, low = two_sum(a.high, b.high)
    low = low + (a.low + b.low)
    total = high + low
    return Pairs(total, low - (total - high))


def multiply_pairs(a: Pairs, b: Pairs) -> Pairs:
    """a · b, to a relative error below 8 u²."""
    high, low = two_product(a.high, b.high)
    low = low + (a.high * b.low + a.low * b.high)
    total = high + low
    return Pairs(total, low - (total - high))


def pair_sum(terms: Pairs) -> Pairs:
    """Sum over the first axis by halving; the error is below 8 u² (levels) Σ|terms|."""
    high, low = terms
    while len(high) > 1:
        half = len(high) // 2
        total = add_pairs(Pairs(high[:half], low[:half]), Pairs(high[half : 2 * half], low[half : 2 * half]))
        if len(high) % 2:
            total = Pairs(np.concatenate((total.high, high[-1:])), np.concatenate((total.low, low[-1:])))
        high, low = total
    return Pairs(high[0], low[0])


def square_pairs(a: Pairs) -> Pairs:
    """a², to a relative error below 6 u²."""
    high, low = two_product(a.high, a.high)
    return Pairs(high, low + 2.0 * a.high * a.low)


def scale_pairs(a: Pairs, factors: Array) -> Pairs:
    """a · factors, to a relative error below 4 u²."""
    high, low = two_product(a.high, factors)
    return Pairs(high, low + a.low * factors)


def exact_moments(values: Array, row_weights: Array | None) -> tuple[Fraction, Fraction]:
    """Mean Σωv / Σω and population variance Σωv² / Σω − mean² of one column, in whole numbers: nothing is rounded."""
    whole, exponent = _whole_numbers(values)
    weights = [1] * len(whole) if row_weights is None else _whole_numbers(row_weights)[0]
    terms = [weight * value for weight, value in zip(weights, whole, strict=True)]
    total = sum(weights)
    mean = Fraction(sum(terms), total)
    square = Fraction(sum(term * value for term, value in zip(terms, whole, strict=True)), total)
    step = Fraction(2) ** exponent
    return mean * step, (square - mean * mean) * step * step


def _whole_numbers(values: Array) -> tuple[list[int], int]:
    """Integers and one exponent e with values = integers · 2^e."""
    mantissas, exponents = np.frexp(values)
    digits = np.ldexp(mantissas, 53).astype(np.int64)
    used = digits != 0
    if not used.any():
        return [0] * len(values), 0
    lowest = int(exponents[used].min())
    shifts = np.where(used, exponents - lowest, 0)
    return [digit << shift for digit, shift in zip(digits.tolist(), shifts.tolist(), strict=True)], lowest - 53
