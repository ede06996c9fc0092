"""binary64 and binary32: what one step does on each; int16 and int32: how wide their numbers are.

Every function here runs under MicroPython too: no dataclasses, typing, fractions; names of constants come from the
sealed model that is passed in, so that a later version of this file cannot change the bits of an old model.

In binary32 each operation is done in binary64 and rounded to binary32: since 53 >= 2 * 24 + 2, that is the correctly
rounded binary32 result for +, -, *, / (Figueroa 1995, When is double rounding innocuous?).
"""

import struct
from math import ldexp

from runtime_min.logistic_constants import BINARY32, BINARY64

TYPE_CHECKING = False  # a type checker reads it as True; MicroPython has no typing to import it from
if TYPE_CHECKING:
    from collections.abc import Callable
    from typing import Any

    from runtime_min.model import Exponential

    Rounding = Callable[[float], float]

NAN = float("nan")
INFINITY = float("inf")

CONSTANTS: "dict[str, dict[str, Any]]" = {"binary32": BINARY32, "binary64": BINARY64}


# Of int16 and int32: each weight, and log-odds with everything that is added to them or compared with them.
WEIGHT_BITS = {"int16": 16, "int32": 32}
ACCUMULATOR_BITS = {"int16": 32, "int32": 64}


def round_binary64(x: float) -> float:
    """Python's float is binary64: nothing to round."""
    return x


def round_binary32(x: float) -> float:
    """The binary32 number nearest to the binary64 x, ties to even; too large becomes infinity."""
    try:
        return float(struct.unpack("<f", struct.pack("<f", x))[0])
    except OverflowError:
        return INFINITY if x > 0.0 else -INFINITY


ROUND: "dict[str, Rounding]" = {"binary64": round_binary64, "binary32": round_binary32}


def exponential(t: float, constants: "Exponential", rounded: "Rounding") -> float:
    """exp(t) for t <= 0: Cody and Waite's argument reduction, then a polynomial by Horner's rule.

    k = t / ln 2 rounded to an integer, ties to even; r = (t - k * ln2_high) - k * ln2_low; exp(t) = 2^k p(r).
    The product k * ln2_high and the scaling by 2^k are exact.
    """
    if t < constants.floor:
        return 0.0
    k = round(rounded(t * constants.inv_ln2))
    r = rounded(rounded(t - rounded(k * constants.ln2_high)) - rounded(k * constants.ln2_low))
    coefficients = constants.coefficients
    p = coefficients[-1]
    for position in range(len(coefficients) - 2, -1, -1):
        p = rounded(rounded(p * r) + coefficients[position])
    return ldexp(p, k)


def logistic(z: float, constants: "Exponential", rounded: "Rounding") -> float:
    """1 / (1 + exp(-z)), never from a large exponential: e = exp(-|z|); 1 / (1 + e) for z >= 0, e / (1 + e) below.

    The same function stands in every template on purpose: they are the things compared.
    """
    e = exponential(-abs(z), constants, rounded)
    return rounded((1.0 if z >= 0.0 else e) / rounded(1.0 + e))


def raw_bits(x: float, arithmetic: str) -> int:
    """The bits of x as an unsigned integer; every NaN gives the quiet NaN 0x7FC00000 (0x7FF8000000000000).

    In integers x is an int, and its bits are the two's complement in the accumulator's width.
    """
    if arithmetic in ACCUMULATOR_BITS:
        return int(x) & ((1 << ACCUMULATOR_BITS[arithmetic]) - 1)
    if arithmetic == "binary32":
        return 0x7FC00000 if x != x else int(struct.unpack("<I", struct.pack("<f", x))[0])
    return 0x7FF8000000000000 if x != x else int(struct.unpack("<Q", struct.pack("<d", x))[0])


def from_bits(bits: int, arithmetic: str) -> float:
    """The number whose bits are given; in integers an int."""
    if arithmetic in ACCUMULATOR_BITS:
        half = 1 << (ACCUMULATOR_BITS[arithmetic] - 1)
        return bits - 2 * half if bits >= half else bits
    if arithmetic == "binary32":
        return float(struct.unpack("<f", struct.pack("<I", bits))[0])
    return float(struct.unpack("<d", struct.pack("<Q", bits))[0])
