"""Bounds of the exponential's and the logistic's error, derived for every argument with none tried.

The sequence is in derive_logistic.py. u = 2^-digits; hats mark computed values. Every rounding is at most half an ulp
of the largest magnitude that the value can have (Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed.,
sections 2.2 and 5.1). [-R, R] is cut into pieces of 2^-10 and each step is bounded on each piece, for r as computed:

1. Reduction. k * ln2_high is exact. t - k * ln2_high is exact: for k = 0 it is t; else |t| > 1/4, both are multiples of
   2^-(digits+1) and the difference is below 1/2. So |r^ - (t - k ln 2)| <= delta, from rounding k * ln2_low, from
   ln2_low itself, and from the last subtraction; delta = 0 for k = 0.
2. Polynomial. |P(r) - exp(r)|: P less the Taylor polynomial of degree 25 is expanded about the middle of the piece in
   integers; the sizes of all its terms are added, and the tail.
3. Horner. E_n = 0; E_j = E_(j+1) |r| + half ulp of the product + half ulp of the sum.
4. |e^ - exp(t)| <= 2^k F with F = E_0 + |P - exp| + exp(r) (exp(delta) - 1).
5. d^ = fl(1 + e^) = 1 + e^ + theta, |theta| <= half ulp and <= e^ (1 is a number). With e = exp(t):
   |1/d^ - 1/(1+e)| <= (2^k F + theta) / (d^ (1+e));   e^/d^ - e/(1+e) = ((e^ - e) - e theta) / (d^ (1+e)).
   The division rounds once more. An ulp is that of the larger of exact and computed result, so this last rounding is
   half of one.

k runs from 0 to -(digits + 15); below, theta <= e^ < u 2^-14, and the error in ulps is that of the last k run, to a
relative u 2^-13, inside SLACK. Beyond the floor the device gives 1 or 0, off by exp(floor) at most.
"""

import math
from dataclasses import dataclass
from fractions import Fraction

import mpmath

PIECE = 2.0**-10
TAYLOR = 25
SCALE = 200  # bits after the point of the Taylor coefficients

LAST_K = 16  # k stops short of -(digits + this)

SLACK = 1.0 + 1e-9
"""The bounds are sums, products and quotients of non-negative binary64 numbers, some hundred operations each, each off
by at most 2^-53 of its result, and math.exp by 1 ulp: this covers all of them ten thousand times over."""


@dataclass(frozen=True)
class Constants:
    """What the device carries, and the type it carries it in."""

    digits: int
    least_normal: int
    inv_ln2: float
    ln2_high: float
    ln2_low: float
    floor: float
    coefficients: tuple[float, ...]
    largest_remainder: float


@dataclass(frozen=True)
class Bounds:
    """Logistic: ulps for (z >= 0, z < 0), and absolute over all z; exponential: ulps."""

    ulps: tuple[float, float]
    absolute: float
    exponential_ulps: float


@dataclass(frozen=True)
class Piece:
    """r in [low, high]: p is off by `at_zero` for k = 0, by `below` for k < 0."""

    low: float
    high: float
    at_zero: float
    below: float


def ulp(x: float, digits: int) -> float:
    """Distance between neighbours in the binade of x."""
    return math.ldexp(1.0, math.frexp(x)[1] - digits)


def half_ulp(x: float, digits: int) -> float:
    """The largest error of rounding a value of magnitude at most x; up to 2^e that is the binade below 2^e."""
    fraction, exponent = math.frexp(x)
    return math.ldexp(0.5, exponent - digits - (fraction == 0.5))


def derive(c: Constants) -> tuple[Bounds, float]:
    """The bounds, and that of |P(r) / exp(r) - 1| in units of u."""
    delta = reduction(c)
    edge = math.ceil(c.largest_remainder / PIECE)
    pieces, worst_polynomial = [], 0.0
    for i in range(-edge, edge):
        low, high = i * PIECE, (i + 1) * PIECE
        off = polynomial_error(c, 2 * i + 1)
        worst_polynomial = max(worst_polynomial, off * SLACK / math.exp(low))
        at_zero = (horner_error(c, low, high) + off) * SLACK
        pieces.append(Piece(low, high, at_zero, (at_zero + math.exp(high) * delta * (1 + delta)) * SLACK))
    exponential = max(p.below / ulp(math.exp(p.low) / SLACK, c.digits) for p in pieces)
    every_k = range(0, -LAST_K - c.digits, -1)
    parts = [logistic_error(c, k, p) for k in every_k for p in pieces if k < 0 or p.high <= 0.0]  # k = 0: r = t <= 0
    above, below, absolute = (max(column) * SLACK for column in zip(*parts, strict=True))
    absolute = max(absolute, math.exp(c.floor) * SLACK)
    return Bounds((above, below), absolute, exponential), worst_polynomial * 2.0**c.digits


def reduction(c: Constants) -> float:
    """delta of step 1, after checking what it and the scaling by 2^k rest on."""
    least_k = math.floor(c.floor / math.log(2.0))
    high_bits = Fraction(c.ln2_high).denominator.bit_length() - 1
    low_part = -least_k * abs(c.ln2_low)
    ln2_error = abs(mpmath.ln(2) - mpmath.mpf(c.ln2_high) - mpmath.mpf(c.ln2_low))
    delta = half_ulp(low_part, c.digits) + float(-least_k * ln2_error) + half_ulp(c.largest_remainder, c.digits)
    turns = -c.floor / math.log(2.0)  # |k| <= turns + 0.501, by the bound R on r
    beyond = c.floor - c.least_normal * math.log(2.0)  # least r with k = least_normal
    claims = {
        "|r| <= R": delta <= 4.0 * 2.0**-c.digits,
        "k * ln2_high is exact": -least_k * Fraction(c.ln2_high) * 2**high_bits < 2**c.digits,
        "t - k * ln2_high is exact": high_bits <= c.digits + 1 and c.largest_remainder + low_part + delta < 0.5,
        "2^k is normal": turns + 0.501 < 1 - c.least_normal,
        # p > 1/2 is enough above k = least_normal; that k comes only with r > 0, where p >= 1.
        "p * 2^k is normal": turns + 0.501 < -c.least_normal or beyond > 0.01,
    }
    for claim, holds in claims.items():
        if not holds:
            raise ArithmeticError(f"not so: {claim}")
    return delta * SLACK


def polynomial_error(c: Constants, middle: int) -> float:
    """Bound of |P(r) - exp(r)| for r within PIECE / 2 of middle * PIECE / 2 (step 2).

    In x = r / (PIECE / 2) the coefficients times 2^SCALE, times a common power of two, are integers; 1/j! is cut to a
    multiple of 2^-SCALE, which moves the sum by less than 2^(1 - SCALE).
    """
    step = int(math.log2(2.0 / PIECE))
    row = []
    for j in range(TAYLOR + 1):
        own = Fraction(c.coefficients[j]) if j < len(c.coefficients) else Fraction(0)
        scaled = own * 2**SCALE
        if scaled.denominator != 1:
            raise ArithmeticError(f"c{j} is not a multiple of 2^-{SCALE}")
        row.append((int(scaled) - 2**SCALE // math.factorial(j)) << step * (TAYLOR - j))
    for done in range(TAYLOR):  # Taylor shift by `middle`: repeated synthetic division
        for j in range(TAYLOR - 1, done - 1, -1):
            row[j] += middle * row[j + 1]
    total = Fraction(sum(abs(entry) for entry in row), 2 ** (SCALE + step * TAYLOR))
    tail = math.exp(0.5) * 0.5 ** (TAYLOR + 1) / math.factorial(TAYLOR + 1)
    return float(total) + 2.0 ** (1 - SCALE) + tail


def horner_error(c: Constants, low: float, high: float) -> float:
    """E_0 of step 3, on the way checking that every partial sum is positive, as computed too."""
    size = max(-low, high)
    least = most = c.coefficients[-1]
    error = 0.0
    for position in range(len(c.coefficients) - 2, -1, -1):
        product = half_ulp((most + error) * size * SLACK, c.digits)
        ends = [r * p for r in (low, high) for p in (least, most)]
        least = (c.coefficients[position] + min(ends)) / SLACK
        most = (c.coefficients[position] + max(ends)) * SLACK
        error = error * size + product
        if not least > 2.0 * error:
            raise ArithmeticError(f"the partial sum at c{position} may be {least}, expected a positive one")
        reached = (most + error) * SLACK
        if high <= 0.0:  # the product is not positive, so the sum is at most the coefficient
            reached = min(reached, c.coefficients[position])
        error += half_ulp(reached, c.digits)
    return error


def logistic_error(c: Constants, k: int, piece: Piece) -> tuple[float, float, float]:
    """Step 5 on one piece: ulps of 1/(1+e), ulps of e/(1+e), the larger absolute error of the two."""
    power = math.ldexp(1.0, k)
    off = power * (piece.at_zero if k == 0 else piece.below)
    least, most = power * math.exp(piece.low) / SLACK - off, power * math.exp(piece.high) * SLACK + off
    theta = min(half_ulp(min(1.0 + most, 2.0), c.digits), most)  # e^ <= 1: p <= 1 for k = 0, below 3/4 for k < 0
    product = (1.0 + least - off - theta) * (1.0 + least) / SLACK
    above = (off + theta) / product
    below = (off + most * theta) / product
    above_ulps = above / math.ldexp(1.0, -c.digits) + 0.5
    below_ulps = below / ulp(least / (1.0 + least) / SLACK, c.digits) + 0.5
    largest_below = most / (1.0 + most) * SLACK + below
    absolute = max(above + math.ldexp(0.5, -c.digits), below + half_ulp(largest_below, c.digits))
    return above_ulps, below_ulps, absolute
