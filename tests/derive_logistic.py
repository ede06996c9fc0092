"""Derives runtime_min/logistic_constants.py: the numbers of the exponential and the logistic, and their proof.

    python tests/derive_logistic.py            print the module
    python tests/derive_logistic.py --check    compare it with the file; exit 1 where they differ
    python tests/derive_logistic.py --bounds   print the derived bounds, piece by piece

The sequence that is bounded, every operation rounded once in the type (u = 2^-53 or 2^-24):

    t = -|z|;  e = 0 where t < floor, else
    k = t * inv_ln2 rounded to an integer, ties to even
    r = (t - k * ln2_high) - k * ln2_low
    p = c_n;  p = p * r + c_(n-1);  ...;  p = p * r + c_0          (two roundings each)
    e = p * 2^k
    1 / (1 + e) for z >= 0,  e / (1 + e) for z < 0

Coefficients: c0 = c1 = 1. The rest minimise the largest |P(r) - exp(r)| / exp(r) over |r| <= R (Remez 1934), then
each is rounded. In binary32 the last bits were then moved by the local
search of tests/search_logistic.c, over the error of the whole logistic.

The bound of binary64 is derived here, in the way of Higham (Accuracy and Stability of Numerical Algorithms, 2nd ed.,
sections 2.2, 3.1 and 5.1): see `exponential_bounds` and `logistic_bounds`. That of binary32 is the largest error over
every argument, by tests/logistic_every_argument.c; the derivation runs for binary32 too and must lie above it.
"""

import math
import struct
import sys
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import mpmath

MODULE = Path(__file__).resolve().parents[1] / "runtime_min" / "logistic_constants.py"

mpmath.mp.dps = 60

SLACK = 1.0 + 1e-9
"""Bounds below are sums and products of some hundred non-negative binary64 numbers, each operation off by at most
2^-53 of its result: multiplying the end result by this covers all of them ten thousand times over."""

PIECES = 512
"""Pieces of [-R, R] on which each bound is taken."""


@dataclass(frozen=True)
class Type:
    """One arithmetic: `digits` is the precision p, half a unit in the last place of 1 is 2^-p."""

    name: str
    digits: int
    degree: int
    floor: int
    least_normal: int
    high_bits: int
    last_bits: tuple[int, ...]


# high_bits: ln2_high is ln 2 rounded to a multiple of 2^-high_bits, so that k * ln2_high is exact: 9 + 7 <= 24 bits
# and 42 + 10 <= 53 bits. last_bits: units in the last place added to c2, c3, ... after rounding.
BINARY32 = Type("binary32", 24, 6, -87, -126, 9, ())
BINARY64 = Type("binary64", 53, 11, -708, -1022, 42, ())

# Largest errors over every argument, by tests/logistic_every_argument.c; test_logistic_constants measures them anew.
MEASURED_ULPS = (1.498, 2.402)
MEASURED_ERROR = 8.93e-8


def rounded(value: mpmath.mpf | Fraction | float, digits: int) -> float:
    """The nearest number of `digits` bits, ties to even (normal range)."""
    exact = mpmath.mpf(value.numerator) / value.denominator if isinstance(value, Fraction) else mpmath.mpf(value)
    if exact == 0:
        return 0.0
    exponent = int(mpmath.floor(mpmath.log(abs(exact), 2))) + 1 - digits
    return math.ldexp(int(mpmath.nint(mpmath.ldexp(exact, -exponent))), exponent)


@dataclass(frozen=True)
class Constants:
    """What the device carries."""

    inv_ln2: float
    ln2_high: float
    ln2_low: float
    floor: float
    coefficients: tuple[float, ...]
    least_k: int


def largest_remainder(kind: Type) -> float:
    """R: |r| never exceeds it. |t / ln 2 - k| <= 1/2 + |t| / ln 2 * 2^(1 - p): inv_ln2 and the product, each rounded."""
    return (0.5 + -kind.floor * 1.4427 * 2.0 ** (1 - kind.digits) * 1.01) * 0.693147181 * (1 + 2.0 ** (2 - kind.digits))


def minimax(degree: int, bound: float) -> list[mpmath.mpf]:
    """c2, ..., c_degree that minimise the largest |P(r) - exp(r)| / exp(r) over |r| <= bound (Remez).

    P = 1 + r + r^2 Q: Q against (exp(r) - 1 - r) / r^2 with the weight r^2 exp(-r). The points of equal error start
    evenly spread over a Chebyshev grid and move to the extremes between the sign changes.
    """
    unknowns = degree - 1
    grid = [bound * mpmath.cos(mpmath.pi * (i + mpmath.mpf(1) / 4) / 400) for i in range(401)]
    powers = [r**2 * mpmath.exp(-r) for r in grid]
    wanted = [1 - (1 + r) * mpmath.exp(-r) for r in grid]
    at = [round(400 * i / unknowns) for i in range(unknowns + 1)]
    for _ in range(40):
        rows = [[powers[a] * grid[a] ** j for j in range(unknowns)] + [(-1) ** i] for i, a in enumerate(at)]
        solution = mpmath.lu_solve(mpmath.matrix(rows), mpmath.matrix([wanted[a] for a in at]))
        found = [solution[j] for j in range(unknowns)]
        errors = [powers[i] * mpmath.polyval(found[::-1], grid[i]) - wanted[i] for i in range(401)]
        moved = extremes(errors, unknowns + 1)
        if moved == at:
            return found
        at = moved
    raise ArithmeticError("the points of equal error did not settle")


def extremes(errors: list[mpmath.mpf], count: int) -> list[int]:
    """Positions of the largest error of each run of one sign; the smaller end runs are dropped beyond `count`."""
    runs: list[int] = []
    for i, error in enumerate(errors):
        if runs and (error > 0) == (errors[runs[-1]] > 0):
            if abs(error) > abs(errors[runs[-1]]):
                runs[-1] = i
        else:
            runs.append(i)
    while len(runs) > count:
        runs.pop(0 if abs(errors[runs[0]]) < abs(errors[runs[-1]]) else -1)
    if len(runs) < count:
        raise ArithmeticError(f"{len(runs)} runs of one sign in the error, expected {count}")
    return runs


def constants(kind: Type) -> Constants:
    """All numbers of one type."""
    ln2 = mpmath.ln(2)
    high = math.ldexp(int(mpmath.nint(mpmath.ldexp(ln2, kind.high_bits))), -kind.high_bits)
    inv_ln2 = rounded(1 / ln2, kind.digits)
    exact = minimax(kind.degree, largest_remainder(kind))
    nearest = [rounded(c, kind.digits) for c in exact]
    moves = kind.last_bits or (0,) * len(nearest)
    moved = [c + by * math.ldexp(1.0, math.frexp(c)[1] - kind.digits) for c, by in zip(nearest, moves, strict=True)]
    coefficients = [1.0, 1.0, *moved]
    least_k = round(rounded(Fraction(kind.floor) * Fraction(inv_ln2), kind.digits))
    low = rounded(ln2 - mpmath.mpf(high), kind.digits)
    return Constants(inv_ln2, high, low, float(kind.floor), tuple(coefficients), least_k)


if __name__ == "__main__":
    for kind in (BINARY32, BINARY64):
        print(constants(kind))
