"""The exact numbers behind a sealed model, in rationals: nothing here is rounded, but for logarithms at 60 digits.

For class k + 1 against class 0, with the trained model's weights W, centres c and scales s:

    w_j = W_j / s_j        b = B - sum_j w_j c_j        (the fold)

What the device delivers may be x with v = offset + gain x (a count, or the value less an origin): w then becomes
gain w, and b becomes b + w offset. A stated prevalence shifts b (Saerens, Latinne and Decaestecker 2002; King and Zeng
2001).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Context, Decimal
from fractions import Fraction

from runtime_min.errors import Problem, SealError
from runtime_min.model import INTEGERS, DecisionRequest, Input, InputRequest, TrainedModel
from runtime_min.validity_sealed import count_limits

# (digits of the significand, exponent of the smallest subnormal, exponent above the largest number)
FORMATS = {"binary64": (53, -1074, 1024), "binary32": (24, -149, 128)}
DATUM_BITS = 8


@dataclass(frozen=True)
class ExactScore:
    """Intercept and one weight a term, per unit of the term: exact rationals."""

    intercept: Fraction
    weights: tuple[Fraction, ...]


def fold(trained: TrainedModel) -> tuple[ExactScore, ...]:
    """Absorb standardisation into the weights, exactly: one score a class after the first."""
    result = []
    for score in trained.scores:
        weights = tuple(
            Fraction(weight) / Fraction(term.scale) for weight, term in zip(score.weights, trained.terms, strict=True)
        )
        shift = sum((w * Fraction(term.centre) for w, term in zip(weights, trained.terms, strict=True)), Fraction(0))
        result.append(ExactScore(Fraction(score.intercept) - shift, weights))
    return tuple(result)


def round_to(arithmetic: str, value: Fraction) -> float:
    """`value` rounded once to the nearest number of the arithmetic, ties to even; infinity where it is too large."""
    digits, lowest, limit = FORMATS[arithmetic]
    if value == 0:
        return 0.0
    magnitude = abs(value)
    exponent = magnitude.numerator.bit_length() - magnitude.denominator.bit_length()
    if magnitude < Fraction(2) ** exponent:
        exponent -= 1  # now 2^exponent <= magnitude < 2^(exponent + 1)
    unit = max(exponent - digits + 1, lowest)
    units = round(magnitude / Fraction(2) ** unit)
    if units.bit_length() + unit > limit:
        return math.inf if value > 0 else -math.inf
    return math.copysign(math.ldexp(units, unit), value) if units else 0.0


def log_of_quotient(numerator: Fraction, denominator: Fraction) -> Fraction:
    """ln(numerator / denominator) to 60 digits: the logarithms of the quotient's terms, subtracted."""
    quotient = numerator / denominator
    context = Context(prec=60, rounding=ROUND_HALF_EVEN)
    difference = context.subtract(context.ln(Decimal(quotient.numerator)), context.ln(Decimal(quotient.denominator)))
    return Fraction(difference)


def threshold_of(decision: DecisionRequest) -> Fraction:
    """The threshold in log-odds, exact or to 60 digits: ln(cost_false_alarm / cost_miss) (Elkan 2001)."""
    if decision.threshold is not None:
        return Fraction(decision.threshold)
    if decision.cost_false_alarm is None or decision.cost_miss is None:
        raise SealError(Problem("decision", "found neither costs nor a threshold", "give one of them"))
    return log_of_quotient(Fraction(decision.cost_false_alarm), Fraction(decision.cost_miss))


def thresholds_of(decision: DecisionRequest) -> tuple[Fraction, Fraction]:
    """The lower and the upper threshold: `no_call` below and above the threshold."""
    threshold, half_width = threshold_of(decision), Fraction(decision.no_call or 0)
    return threshold - half_width, threshold + half_width


def unit_map(entry: Input | InputRequest) -> tuple[Fraction, Fraction]:
    """(gain, offset): the value in the input's unit is offset + gain * what the device delivers."""
    if entry.counts is not None:
        return Fraction(entry.counts.gain), Fraction(entry.counts.offset)
    return Fraction(1), Fraction(entry.origin or 0)


def prevalence_shift(trained: TrainedModel) -> Fraction:
    """logit(prevalence) - logit(weighted share of the event among the fitted rows), to 60 digits; 0 without one."""
    if trained.prevalence is None:
        return Fraction(0)
    field = Fraction(trained.prevalence)
    first, event = (Fraction(weight) for weight in trained.class_weights)
    return log_of_quotient(field, 1 - field) - log_of_quotient(event, first)


def delivered_limits(entry: InputRequest) -> tuple[Fraction, Fraction]:
    """The exact limits of what the device delivers; of counts, the whole numbers inside the range and the bits.

    Counts that sealing chose stand for readings rounded to the nearest count, and so do their limits: a reading on a
    limit is within it.
    """
    gain, offset = unit_map(entry)
    ends = sorted((Fraction(str(end)) - offset) / gain for end in (entry.low, entry.high))
    if entry.counts is None:
        return ends[0], ends[1]
    if entry.counts.chosen:
        return Fraction(round(ends[0])), Fraction(round(ends[1]))
    least, most = count_limits(entry.counts)
    return Fraction(max(math.ceil(ends[0]), least)), Fraction(min(math.floor(ends[1]), most))


def delivered(entry: Input, value: Fraction, arithmetic: str) -> float:
    """What the device delivers for a value in the input's unit: value - origin rounded once, or the nearest count.

    Ties go to even. A count may lie beyond the limits and the bits; the policies deal with it as with any other.
    """
    gain, offset = unit_map(entry)
    exact = (value - offset) / gain
    if arithmetic in INTEGERS:
        return round(exact)
    return round_to(arithmetic, exact if entry.counts is None else Fraction(round(exact)))


def datum_of(low: Fraction, high: Fraction) -> Fraction | None:
    """The midpoint to 8 significant bits where it is farther from 0 than half the width; else None."""
    midpoint, half_width = (low + high) / 2, (high - low) / 2
    if not abs(midpoint) > half_width:
        return None
    exponent = abs(midpoint.numerator).bit_length() - midpoint.denominator.bit_length()
    if abs(midpoint) < Fraction(2) ** exponent:
        exponent -= 1
    unit = Fraction(2) ** (exponent - DATUM_BITS + 1)
    return round(midpoint / unit) * unit


def float_text(value: Fraction) -> str:
    """`value` to six digits, for a message; works beyond the range of a float."""
    context = Context(prec=6, Emax=10**9, Emin=-(10**9))
    quotient = context.divide(Decimal(value.numerator), Decimal(value.denominator))
    return f"{quotient.normalize(context) if abs(quotient.adjusted()) > 5 else quotient:g}"
