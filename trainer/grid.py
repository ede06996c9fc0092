"""Numbers rounded to a coarse grid, so that last bits of a sum cannot show: centres, scales, weights.

A scale keeps 40 significant bits. A centre is the nearest multiple of the scale's last bit, or of its own last bit in
binary64 where that is coarser. A weight is a multiple of 2^-30. Ties go to the even multiple.
"""

from __future__ import annotations

import math
from fractions import Fraction

SCALE_BITS = 40
WEIGHT_STEP = 2.0**-30


def floor_log2(number: Fraction) -> int:
    """The e with 2^e <= number < 2^(e + 1), for number > 0."""
    exponent = number.numerator.bit_length() - number.denominator.bit_length()
    return exponent if Fraction(2) ** exponent <= number else exponent - 1


def round_to_step(number: Fraction, exponent: int) -> Fraction:
    """The nearest multiple of 2^exponent, ties to the even multiple."""
    step = Fraction(2) ** exponent
    return round(number / step) * step


def round_scale(variance: Fraction) -> tuple[float, int]:
    """sqrt(variance) to 40 significant bits, rounded once; and the exponent of its last bit. variance > 0."""
    last_bit = floor_log2(variance) // 2 - (SCALE_BITS - 1)
    scaled = variance / Fraction(4) ** last_bit
    below = math.isqrt(scaled.numerator // scaled.denominator)
    twice_midpoint = 2 * below + 1
    over = 4 * scaled - twice_midpoint * twice_midpoint
    multiple = below + (1 if over > 0 or (over == 0 and below % 2) else 0)
    return math.ldexp(float(multiple), last_bit), last_bit


def round_centre(mean: Fraction, scale_last_bit: int) -> float:
    """The nearest multiple of the coarser of the scale's last bit and the mean's own in binary64."""
    if mean == 0:
        return 0.0
    return float(round_to_step(mean, max(scale_last_bit, floor_log2(abs(mean)) - 52))) + 0.0
