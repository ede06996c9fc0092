"""binary64 and binary32: what one step does on each.

Every function here runs under MicroPython too: no dataclasses, typing, fractions; names of constants come from the
sealed model that is passed in, so that a later version of this file cannot change the bits of an old model.

In binary32 each operation is done in binary64 and rounded to binary32: since 53 >= 2 * 24 + 2, that is the correctly
rounded binary32 result for +, -, *, / (Figueroa 1995, When is double rounding innocuous?).
"""

import struct
from math import ldexp

from runtime_min.logistic_constants import BINARY32, BINARY64

NAN = float("nan")
INFINITY = float("inf")

CONSTANTS = {"binary32": BINARY32, "binary64": BINARY64}


def round_binary64(x):  # type: ignore[no-untyped-def]
    """Python's float is binary64: nothing to round."""
    return x


def round_binary32(x):  # type: ignore[no-untyped-def]
    """The binary32 number nearest to the binary64 x, ties to even; too large becomes infinity."""
    try:
        return struct.unpack("<f", struct.pack("<f", x))[0]
    except OverflowError:
        return INFINITY if x > 0.0 else -INFINITY


ROUND = {"binary64": round_binary64, "binary32": round_binary32}


def exponential(t, constants, rounded):  # type: ignore[no-untyped-def]
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


def logistic(z, constants, rounded):  # type: ignore[no-untyped-def]
    """1 / (1 + exp(-z)), never from a large exponential: e = exp(-|z|); 1 / (1 + e) for z >= 0, e / (1 + e) below.

    The same function stands in every template on purpose: they are the things compared.
    """
    e = exponential(-abs(z), constants, rounded)
    return rounded((1.0 if z >= 0.0 else e) / rounded(1.0 + e))


def raw_bits(x, arithmetic):  # type: ignore[no-untyped-def]
    """The bits of x as an unsigned integer; every NaN gives the quiet NaN 0x7FC00000 (0x7FF8000000000000)."""
    if arithmetic == "binary32":
        return 0x7FC00000 if x != x else struct.unpack("<I", struct.pack("<f", x))[0]
    return 0x7FF8000000000000 if x != x else struct.unpack("<Q", struct.pack("<d", x))[0]


def from_bits(bits, arithmetic):  # type: ignore[no-untyped-def]
    """The number whose bits are given."""
    if arithmetic == "binary32":
        return struct.unpack("<f", struct.pack("<I", bits))[0]
    return struct.unpack("<d", struct.pack("<Q", bits))[0]
