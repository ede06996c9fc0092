"""Exact intervals, and how far one rounding can move a number.

Ends are Fractions. Rounding to nearest is monotone, so the interval of a rounded result is that of its rounded ends.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

from runtime_min.sealing import FORMATS, round_to

ZERO = Fraction(0)


@dataclass(frozen=True)
class Interval:
    """All numbers from `low` to `high`."""

    low: Fraction
    high: Fraction

    @property
    def magnitude(self) -> Fraction:
        """The largest magnitude in the interval."""
        return max(abs(self.low), abs(self.high))

    def __add__(self, other: Interval) -> Interval:
        return Interval(self.low + other.low, self.high + other.high)

    @property
    def middle(self) -> Fraction:
        """The number half-way between the ends."""
        return (self.low + self.high) / 2

    @property
    def radius(self) -> Fraction:
        """Half the distance of the ends."""
        return (self.high - self.low) / 2

    def minus(self, constant: Fraction) -> Interval:
        """Every number less a constant."""
        return Interval(self.low - constant, self.high - constant)

    def times(self, factor: Fraction) -> Interval:
        """Every number times a factor."""
        ends = (self.low * factor, self.high * factor)
        return Interval(min(ends), max(ends))

    def rounded(self, arithmetic: str) -> Interval | None:
        """The interval of the rounded numbers; None where one can overflow."""
        ends = (round_to(arithmetic, self.low), round_to(arithmetic, self.high))
        return Interval(Fraction(ends[0]), Fraction(ends[1])) if all(map(math.isfinite, ends)) else None


def hull(numbers: list[Fraction]) -> Interval:
    """The smallest interval with all of the numbers."""
    return Interval(min(numbers), max(numbers))


def exponent_of(magnitude: Fraction) -> int:
    """e with 2^e <= magnitude < 2^(e + 1); magnitude > 0."""
    exponent = magnitude.numerator.bit_length() - magnitude.denominator.bit_length()
    return exponent - 1 if magnitude < Fraction(2) ** exponent else exponent


def half_unit(arithmetic: str, magnitude: Fraction) -> Fraction:
    """Half a unit in the last place of a number of this magnitude, subnormal numbers included; of 0 it is 0."""
    digits, lowest, _ = FORMATS[arithmetic]
    if magnitude == 0:
        return ZERO
    return Fraction(2) ** (max(exponent_of(magnitude) - digits + 1, lowest) - 1)


def rounding(arithmetic: str, exact: Interval) -> Fraction:
    """The largest |rounded(v) - v| over v in the interval.

    A power of two is a number of the arithmetic itself: where it is the largest magnitude, only the numbers below it
    are rounded, and their unit is half as large.
    """
    magnitude = exact.magnitude
    return half_unit(arithmetic, magnitude * Fraction(3, 4) if _is_power_of_two(magnitude) else magnitude)


def sum_rounding(arithmetic: str, exact: Interval) -> Fraction:
    """The largest rounding error of a sum or difference of two numbers of the arithmetic that lies in the interval.

    Both are multiples of the smallest subnormal number, so a sum below twice the smallest normal number is exact.
    """
    digits, lowest, _ = FORMATS[arithmetic]
    return ZERO if exact.magnitude <= Fraction(2) ** (lowest + digits) else rounding(arithmetic, exact)


def product_rounding(arithmetic: str, factor: Fraction, values: Interval) -> Fraction:
    """The largest rounding error of factor * v for numbers v of the arithmetic.

    Times a power of two it is exact, but for what falls below the smallest subnormal number.
    """
    _, lowest, _ = FORMATS[arithmetic]
    error = rounding(arithmetic, values.times(factor))
    if not _is_power_of_two(abs(factor)):
        return error
    return min(error, ZERO if abs(factor) >= 1 else Fraction(2) ** (lowest - 1))


def difference_rounding(arithmetic: str, values: Interval, constant: Fraction, whole: bool = False) -> Fraction:
    """The largest rounding error of v - constant for numbers v of the arithmetic, both numbers of the arithmetic.

    whole: v is a whole number. Exact where constant / 2 <= v <= 2 constant (Sterbenz 1974, Floating-Point Computation,
    theorem 4.3.1). The rest lies below and above; each side is exact where the difference spans no more units of its
    own grid than the significand can hold.
    """
    digits, lowest, _ = FORMATS[arithmetic]
    near = Interval(constant / 2, constant * 2) if constant > 0 else Interval(constant * 2, constant / 2)
    worst = ZERO
    for side in (
        Interval(values.low, min(values.high, near.low)),
        Interval(max(values.low, near.high), values.high),
    ):
        if side.low > side.high:
            continue
        smallest = ZERO if side.low <= 0 <= side.high else min(abs(side.low), abs(side.high))
        unit = 2 * half_unit(arithmetic, smallest) or Fraction(2) ** lowest
        unit = min(max(unit, Fraction(int(whole))), _grid(constant))
        difference = side.minus(constant)
        if difference.magnitude > unit * 2**digits:
            worst = max(worst, sum_rounding(arithmetic, difference))
    return worst


def _is_power_of_two(number: Fraction) -> bool:
    return number > 0 and all(part & (part - 1) == 0 for part in number.as_integer_ratio())


def _grid(number: Fraction) -> Fraction:
    """The largest power of two of which a dyadic number (not 0) is a multiple."""
    return Fraction(number.numerator & -number.numerator, number.denominator)
