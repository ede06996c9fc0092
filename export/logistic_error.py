"""How far a device's logistic function can be from the exact one.

Floating point: proven beside the constants. Integers: the table gives q(a), a = |z| in units of 2^-S, and every
argument counts, in this way. q never falls and takes at most 16,385 values; between two places where it changes it is
constant while the exact logistic function rises, so that on such a plateau the error is largest at one of its ends. The
ends of every plateau, and what lies beyond the last node, are therefore all that can matter of 2^31 or 2^63 arguments.
Each is evaluated in binary64, the worst of them to 50 digits.
"""

from __future__ import annotations

from collections.abc import Iterator
from decimal import Context, Decimal
from fractions import Fraction
from functools import lru_cache

import numpy as np

from runtime_min import logistic_constants
from runtime_min.model import SealedModel, Table

PROBABILITY_ERROR = {
    "binary32": Fraction(logistic_constants.BINARY32_PROBABILITY_ERROR),
    "binary64": Fraction(logistic_constants.BINARY64_PROBABILITY_ERROR),
}
"""Largest |device logistic(z) - logistic(z)| over every z of the arithmetic."""

ONE = 2**15
BINARY64_SLACK = 1e-12
"""More than what the binary64 evaluation can be off; arguments this near to the worst are looked at in 50 digits."""


def probability_error(sealed: SealedModel) -> Fraction:
    """Largest |device logistic(z) - logistic(z)| over every log-odds z that the device can have."""
    if sealed.table is None:
        return PROBABILITY_ERROR[sealed.arithmetic]
    return table_error(sealed.table, sealed.accumulator_shift or 0)


@lru_cache(maxsize=64)
def table_error(table: Table, shift: int) -> Fraction:
    """Largest |q(a) / 2^15 - logistic(a / 2^shift)| over every whole a, 0 included; of -a it is the same."""
    ends = sorted({pair for plateau in _plateaux(table) for pair in plateau})
    a = np.array([at / 2**shift for at, _ in ends])
    q = np.array([value for _, value in ends]) / ONE
    off = np.abs(q - 1 / (1 + np.exp(-a)))
    near = np.flatnonzero(off >= off.max() - BINARY64_SLACK)
    worst = max(_error(*ends[position], shift) for position in near)
    # Beyond the last node the exact function rises to 1.
    return max(worst, 1 - Fraction(table.nodes[-1], ONE))


def _plateaux(table: Table) -> Iterator[tuple[tuple[int, int], tuple[int, int]]]:
    """(first argument, q), (last argument, q) of every run of arguments between two nodes with the same q.

    q = low + ((rise * f + 2^(h - 1)) >> h) is low + v from f = ceil((v 2^h - 2^(h - 1)) / rise) on; f belongs to the
    2^drop arguments from f 2^drop on.
    """
    width = 1 << table.step
    half = width >> 1
    for position, (low, high) in enumerate(zip(table.nodes, table.nodes[1:], strict=False)):
        start, rise = position * width, high - low
        firsts = [0, *(-(-(v * width - half) // rise) for v in range(1, rise + 1))]
        for v, first in enumerate(firsts):
            last = (firsts[v + 1] if v < rise else width) - 1
            if first <= last:
                ends = (start + first) << table.drop, ((start + last + 1) << table.drop) - 1
                yield (ends[0], low + v), (ends[1], low + v)
    beyond = (len(table.nodes) - 1) * width << table.drop
    yield (beyond, table.nodes[-1]), (beyond, table.nodes[-1])


def _error(a: int, q: int, shift: int) -> Fraction:
    """To 50 digits, rounded up."""
    context = Context(prec=50)
    z = context.divide(Decimal(-a), Decimal(2**shift))
    exact = context.divide(Decimal(1), context.add(Decimal(1), context.exp(z)))
    return abs(Fraction(q, ONE) - Fraction(exact)) + Fraction(1, 10**40)
