"""The logistic function in pairs of doubles, from IEEE operations alone, so that no library's last bit can show.

exp x = 2^k (exp(r / 2^m))^(2^m),  r = x − k ln 2,  the inner exponential by its Taylor series (Horner).
"""

from __future__ import annotations

from decimal import Context
from fractions import Fraction
from math import factorial

import numpy as np
from numpy.typing import NDArray

from trainer.exact_sums import Pairs, add_pairs, multiply_pairs, two_product

Array = NDArray[np.float64]

_LARGEST = 600.0  # exp of it squared stays finite where products are split; expit(−600) = 1e-261 joins no sum
_HALVINGS = 8
_DEGREE = 9  # |r| / 2^8 < 0.00136: the first term left out is below 6e-36


def _pair(number: Fraction) -> tuple[float, float]:
    high = float(number)
    return high, float(number - Fraction(high))


_LN2 = _pair(Fraction(Context(prec=60).ln(2)))
_COEFFICIENTS = tuple(_pair(Fraction(1, factorial(power))) for power in range(_DEGREE, -1, -1))


def exp_pairs(x: Pairs) -> Pairs:
    """exp x for |x| <= 600, relative error below 1e-28 (2^8 times some 10 u², u = 2^-53)."""
    k = np.rint(x.high / _LN2[0])
    high, low = two_product(k, np.full_like(k, -_LN2[0]))
    r = add_pairs(x, Pairs(high, low - k * _LN2[1]))
    r = Pairs(np.ldexp(r.high, -_HALVINGS), np.ldexp(r.low, -_HALVINGS))
    total = _constant(_COEFFICIENTS[0], k)
    for coefficient in _COEFFICIENTS[1:]:
        total = add_pairs(multiply_pairs(total, r), _constant(coefficient, k))
    for _ in range(_HALVINGS):
        total = multiply_pairs(total, total)
    exponent = k.astype(np.int64)
    return Pairs(np.ldexp(total.high, exponent), np.ldexp(total.low, exponent))


def logistic_pairs(t: Pairs) -> Pairs:
    """1 / (1 + exp(−t)), relative error below 1e-28; t beyond ±600 counts as ±600."""
    inside = np.abs(t.high) <= _LARGEST
    growth = exp_pairs(Pairs(np.clip(-t.high, -_LARGEST, _LARGEST), np.where(inside, -t.low, 0.0)))
    below = add_pairs(Pairs(np.ones_like(growth.high), np.zeros_like(growth.high)), growth)
    quotient = 1.0 / below.high
    product = two_product(quotient, below.high)
    rest = ((1.0 - product.high) - product.low) - quotient * below.low
    return Pairs(quotient, rest / below.high)


def _constant(pair: tuple[float, float], like: Array) -> Pairs:
    return Pairs(np.full_like(like, pair[0]), np.full_like(like, pair[1]))
