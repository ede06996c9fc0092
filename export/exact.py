"""The trained model's log-odds as the exact real function that they are, and what a device's numbers mean.

All in rationals. Trained log-odds are taken in the standardised form, B + sum_j W_j (v_j - centre_j) / scale_j, term by
term, and what a device delivers is turned into plan units here: without the fold that sealing uses, and without its map
of units, so that what is sealed can be held against this.
"""

from __future__ import annotations

from collections.abc import Sequence
from decimal import ROUND_HALF_EVEN, Context, Decimal
from fractions import Fraction

from runtime_min.model import Input, SealedModel, TrainedModel

ZERO = Fraction(0)


def plan_value(entry: Input, delivered: Fraction) -> Fraction:
    """The value in the input's unit, of a count, of a value less its origin, or of a value as it is."""
    if entry.counts is not None:
        return Fraction(entry.counts.offset) + Fraction(entry.counts.gain) * delivered
    return delivered if entry.origin is None else delivered + Fraction(entry.origin)


def delivered_value(entry: Input, value: Fraction) -> Fraction:
    """What `plan_value` turns into `value`: exact, so that of counts it need not be whole."""
    if entry.counts is not None:
        return (value - Fraction(entry.counts.offset)) / Fraction(entry.counts.gain)
    return value if entry.origin is None else value - Fraction(entry.origin)


def prevalence_shift(trained: TrainedModel) -> Fraction:
    """logit(prevalence) - logit(weighted share of the event), to 50 digits and more; 0 where none is stated."""
    if trained.prevalence is None:
        return ZERO
    field = Fraction(trained.prevalence)
    first, event = (Fraction(weight) for weight in trained.class_weights)
    odds = field * first / ((1 - field) * event)
    context = Context(prec=60, rounding=ROUND_HALF_EVEN)
    return Fraction(context.ln(Decimal(odds.numerator))) - Fraction(context.ln(Decimal(odds.denominator)))


def standardised(trained: TrainedModel, values: Sequence[Fraction]) -> list[Fraction]:
    """Each term's (v - centre) / scale, of values in plan units. Levels: 0, 1, … K - 1."""
    numbers = [
        values[term.of[0]] if term.level is None else Fraction(values[term.of[0]] == term.level)
        for term in trained.terms
    ]
    return [
        (number - Fraction(term.centre)) / Fraction(term.scale)
        for number, term in zip(numbers, trained.terms, strict=True)
    ]


def trained_log_odds(trained: TrainedModel, values: Sequence[Fraction]) -> tuple[Fraction, ...]:
    """Log-odds of values in plan units, one number a class after the first."""
    columns, shift = standardised(trained, values), prevalence_shift(trained)
    return tuple(
        Fraction(score.intercept)
        + shift
        + sum((Fraction(w) * column for w, column in zip(score.weights, columns, strict=True)), ZERO)
        for score in trained.scores
    )


def log_odds_of(trained: TrainedModel, sealed: SealedModel, delivered: Sequence[Fraction]) -> tuple[Fraction, ...]:
    """T(X): trained log-odds of what the device delivers, before it is rounded."""
    values = [plan_value(entry, number) for entry, number in zip(sealed.inputs, delivered, strict=True)]
    return trained_log_odds(trained, values)


def slopes(trained: TrainedModel, sealed: SealedModel, k: int, position: int) -> tuple[Fraction, ...]:
    """The trained weight of one input, for class k + 1, per unit of what the device delivers: one number.

    Of an input with levels, one number a level (0 for the reference).
    """
    entry = sealed.inputs[position]
    weights = [ZERO] * (len(entry.levels) or 1)
    for term, weight in zip(trained.terms, trained.scores[k].weights, strict=True):
        if term.of == (position,):
            weights[term.level or 0] += Fraction(weight) / Fraction(term.scale)
    gain = plan_value(entry, Fraction(1)) - plan_value(entry, ZERO)
    return tuple(weight * gain for weight in weights) if not entry.levels else tuple(weights)


def unit(sealed: SealedModel) -> Fraction:
    """What 1 in the device's log-odds means: 2^-S in integers, 1 in floating point."""
    return Fraction(1, 2 ** (sealed.accumulator_shift or 0))


def device_intercept(sealed: SealedModel, k: int) -> Fraction:
    """The device's own intercept, in log-odds."""
    return Fraction(sealed.intercepts[k]) * unit(sealed)


def device_weights(sealed: SealedModel, k: int, position: int) -> tuple[Fraction, ...]:
    """The device's own weight of one input per unit of what is delivered (levels: one a level), in log-odds."""
    term = sealed.terms[position]
    scale = unit(sealed) * 2 ** (term.shift or 0)
    return tuple(Fraction(weight) * scale for weight in term.weights[k])


def datums(sealed: SealedModel) -> tuple[Fraction, ...]:
    """d: one number an input, 0 where the device subtracts nothing (levels: the reference level)."""
    return tuple(Fraction(term.datum or 0) for term in sealed.terms)
