"""Sealing in integers: int16 or int32 weights, and an accumulator of twice the width in units of 2^-S.

    z = b + sum_j (u_j (n_j - d_j)) 2^(s_j)

n_j is a count, with v = offset + gain n; d_j the count in the middle of its limits; u_j has the arithmetic's width and
its own left shift s_j >= 0, the least that leaves room for it, so u_j 2^(s_j) is w_j gain_j 2^S to 15 (31) bits or to
the unit. The intercept, which absorbs offsets and data exactly, level weights and thresholds have the accumulator's
width.

S is the largest for which `proof` holds: more binary places cost no time on a device. It reaches as far as the
thresholds too: one that lies beyond all log-odds costs binary places, since cutting it off would change decisions.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from runtime_min.arithmetic import ACCUMULATOR_BITS, WEIGHT_BITS
from runtime_min.errors import Problem, SealError
from runtime_min.folding import (
    ExactScore,
    datum_of,
    delivered_limits,
    float_text,
    fold,
    prevalence_shift,
    thresholds_of,
    unit_map,
)
from runtime_min.model import About, Counts, Input, InputRequest, Request, SealedModel, Term, Thresholds, TrainedModel
from runtime_min.probability_table import probability_table
from runtime_min.proof import proof

LEAST_SHIFT = 3
"""The table stands a node at every quarter of a log-odds, at least two units apart."""

MOST_BITS = 32


def largest_shift(arithmetic: str) -> int:
    """The largest S: log-odds of 1 must fit the accumulator."""
    return ACCUMULATOR_BITS[arithmetic] - 2


def chosen_counts(low: Fraction, high: Fraction, bits: int) -> Counts:
    """Counts for a reading from low to high: the gain is the finest power of two with which it fits signed `bits`.

    The offset is 0, or where the range lies away from zero the datum of floating point. A datum farther from the
    midpoint than an eighth of half the width (a narrow range, far away) is replaced by a finer one.
    """
    offset, midpoint, eighth = datum_of(low, high) or Fraction(0), (low + high) / 2, (high - low) / 16
    if offset and abs(offset - midpoint) > eighth:
        unit = Fraction(2) ** (eighth.numerator.bit_length() - eighth.denominator.bit_length() - 1)
        offset = round(midpoint / unit) * unit
    most = 2 ** (bits - 1) - 1
    farthest = max(abs(low - offset), abs(high - offset))
    ratio = farthest / most
    exponent = ratio.numerator.bit_length() - ratio.denominator.bit_length() - 1  # 2^exponent < ratio
    while round(farthest / Fraction(2) ** exponent) > most:
        exponent += 1
    return Counts(bits, str(Fraction(2) ** exponent), str(offset), signed=True, chosen=True)


def seal_integers(trained: TrainedModel, request: Request, about: About) -> SealedModel:
    """Seal in int16 or int32. Raises SealError with every input that has no counts, or where nothing fits."""
    problems: list[Problem] = []
    inputs = tuple(
        _device_input(entry, typical.typical, request.arithmetic, problems)
        for entry, typical in zip(request.inputs, trained.inputs, strict=True)
    )
    if problems:
        raise SealError(problems)
    lines = [_line(trained, inputs, score) for score in fold(trained)]
    thresholds = thresholds_of(request.decision)
    for shift in range(largest_shift(request.arithmetic), LEAST_SHIFT - 1, -1):
        low, high = (_units(threshold, shift) for threshold in thresholds)
        sealed = SealedModel(
            name=request.model,
            arithmetic=request.arithmetic,
            classes=trained.classes,
            inputs=inputs,
            terms=_terms(inputs, lines, shift, WEIGHT_BITS[request.arithmetic]),
            intercepts=tuple(_units(line.intercept, shift) for line in lines),
            decision=Thresholds(low, high),
            exponential=None,
            about=about,
            accumulator_shift=shift,
            table=probability_table(shift),
        )
        if all(step.fits for step in proof(sealed)):
            return sealed
    raise SealError(_blame(inputs, lines, max(thresholds, key=abs), request.arithmetic))


def _line(trained: TrainedModel, inputs: tuple[Input, ...], score: ExactScore) -> ExactScore:
    """The exact log-odds of counts less their data: the intercept, and the weight of one count (levels: as it is)."""
    intercept = score.intercept + prevalence_shift(trained)
    weights = []
    for term, weight in zip(trained.terms, score.weights, strict=True):
        entry = inputs[term.of[0]]
        if not entry.levels:
            gain, offset = unit_map(entry)
            intercept += weight * (offset + gain * middle(entry))
            weight *= gain
        weights.append(weight)
    return ExactScore(intercept, tuple(weights))


def middle(entry: Input) -> int:
    """The datum of an input: the count in the middle of its limits, ties to even."""
    return round((Fraction(entry.low) + Fraction(entry.high)) / 2)


def _terms(inputs: tuple[Input, ...], lines: list[ExactScore], shift: int, bits: int) -> tuple[Term, ...]:
    terms = []
    column = 0
    for position, entry in enumerate(inputs):
        if entry.levels:
            end = column + len(entry.levels) - 1
            levels = tuple((0, *(_units(weight, shift) for weight in line.weights[column:end])) for line in lines)
            terms.append(Term("level", (position,), None, levels))
            column = end
            continue
        exact = [line.weights[column] * 2**shift for line in lines]
        left = max(_left_shift(weight, bits) for weight in exact)
        weights = tuple((round(weight / 2**left),) for weight in exact)
        terms.append(Term("value", (position,), middle(entry), weights, left))
        column += 1
    return tuple(terms)


def _left_shift(weight: Fraction, bits: int) -> int:
    """The least s >= 0 with which weight / 2^s, rounded, fits signed `bits`."""
    left: int = max(0, abs(round(weight)).bit_length() - (bits - 1))
    return left if round(abs(weight) / (1 << left)) < 1 << (bits - 1) else left + 1


def _units(value: Fraction, shift: int) -> int:
    return round(value * (1 << shift))


def _device_input(entry: InputRequest, typical: float | None, arithmetic: str, problems: list[Problem]) -> Input:
    place = f'input "{entry.name}"'
    sealed = Input(
        entry.name, entry.unit, entry.levels, 0, len(entry.levels) - 1, entry.outside, entry.missing, None, None, None
    )
    if entry.missing == "typical" and typical is None:
        problems.append(Problem(place, "has no typical value", "fit the model again"))
        return sealed
    if entry.levels:
        return sealed if entry.missing != "typical" else replace(sealed, typical=int(typical or 0))
    if entry.origin is not None:
        todo = "give counts, whose offset is an origin, or leave it out"
        problems.append(Problem(f"{place}: origin", f"found {entry.origin}, where the device counts", todo))
        return sealed
    counts = entry.counts
    if counts is None:
        counts = chosen_counts(Fraction(str(entry.low)), Fraction(str(entry.high)), WEIGHT_BITS[arithmetic])
    low, high = (int(end) for end in delivered_limits(replace(entry, counts=counts)))
    if max(-low, high) >= 2 ** (MOST_BITS - 1):
        found = f"found counts from {low} to {high}, beyond what a signed integer of {MOST_BITS} bits holds"
        problems.append(Problem(f"{place}: counts", found, "narrow the range, or drop the lowest bit of the count"))
    stand_in = None
    if entry.missing == "typical":
        gain, offset = unit_map(replace(entry, counts=counts))
        stand_in = min(max(round((Fraction(typical or 0) - offset) / gain), low), high)
    return replace(sealed, low=low, high=high, typical=stand_in, counts=counts)


def _blame(inputs: tuple[Input, ...], lines: list[ExactScore], threshold: Fraction, arithmetic: str) -> Problem:
    """What reaches farthest, since halving all the others would help less."""
    reach: dict[str, Fraction] = {"intercept": Fraction(0), "decision": abs(threshold)}
    for line in lines:
        reach["intercept"] = max(reach["intercept"], abs(line.intercept))
        column = 0
        for entry in inputs:
            place = f'input "{entry.name}"'
            count = max(1, len(entry.levels) - 1)
            weights = line.weights[column : column + count]
            steps = Fraction(1) if entry.levels else max(entry.high - middle(entry), middle(entry) - entry.low)
            reach[place] = max(reach.get(place, Fraction(0)), max(map(abs, weights)) * Fraction(steps))
            column += count
    place = max(reach, key=lambda key: reach[key])
    size = float_text(reach[place])
    bits = ACCUMULATOR_BITS[arithmetic]
    beyond = f"and {bits} bits hold {2 ** (bits - 1 - LEAST_SHIFT)} with {LEAST_SHIFT} binary places"
    if place == "decision":
        return Problem(place, f"found a threshold of {size}, {beyond}", "correct the costs or the threshold")
    if place == "intercept":
        return Problem(place, f"log-odds reach {size} in the middle of the ranges, {beyond}", "check ranges and rows")
    if any(place == f'input "{entry.name}"' and entry.levels for entry in inputs):
        return Problem(place, f"a level of it weighs {size}, {beyond}", "choose a stronger prior")
    found = f"its weight over half its range comes to log-odds of {size}, {beyond}"
    return Problem(place, found, "narrow its range, or choose a stronger prior")
