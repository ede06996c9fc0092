"""The error budget: how far a device's log-odds can be from the trained model's, item by item.

The trained log-odds of real inputs X is the exact real function

    T(X) = B + sum_j W_j (v_j - centre_j) / scale_j,         w_j = W_j / scale_j,

and with the device's own datums d (0 where there is none; the reference level for levels), T(X) = T(d) + sum_j w_j
(X_j - d_j). The device starts at its intercept b and, for each input in order, adds round(u_j round(x_j - d_j)), x_j
the rounded input and u_j its own weight. Telescoping from the trained sum to the computed one, every step moves the
result by at most one item:

    intercept   |b - T(d)|
    input       |w_j| * the largest |X_j - x_j|, over every real X_j that rounds into the device limits
    weight      |u_j - w_j| * the largest |x_j - d_j|            (levels: the largest difference of any level)
    datum       |u_j| * the largest rounding error of x_j - d_j
    product     the largest rounding error of u_j * round(x_j - d_j)
    sum         the largest rounding error of the partial sum

A rounding error is half a unit in the last place of the largest magnitude that the exact result can have (Higham 2002,
Accuracy and Stability of Numerical Algorithms, section 2.2), found by exact intervals of the *computed* values, and
nothing where the step is provably exact. All in rationals, and without the fold that sealing uses, so that a mistake
there shows here.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from decimal import ROUND_CEILING, Context, Decimal
from fractions import Fraction
from typing import NamedTuple

from export.exact import slopes, trained_log_odds
from export.interval import (
    ZERO,
    Interval,
    difference_rounding,
    half_unit,
    hull,
    product_rounding,
    sum_rounding,
)
from runtime_min import logistic_constants
from runtime_min.arithmetic import ROUND
from runtime_min.errors import Problem, SealError
from runtime_min.model import Input, SealedModel, Term, TrainedModel, in_range
from runtime_min.score import scores
from runtime_min.sealing import FORMATS, datum_of, seal_request, threshold_of

PROBABILITY_ERROR = {
    "binary32": Fraction(logistic_constants.BINARY32_PROBABILITY_ERROR),
    "binary64": Fraction(logistic_constants.BINARY64_PROBABILITY_ERROR),
}
"""Largest |device logistic(z) - logistic(z)| over every z of the arithmetic."""


@dataclass(frozen=True)
class BudgetItem:
    """One part of the bound. `kind`: intercept, input, weight, datum, product or sum; `input`: its name, if any."""

    what: str
    kind: str
    input: str | None
    bound: Fraction


@dataclass(frozen=True)
class Budget:
    """What the derivation proves of one sealed model.

    items: the parts that are not zero, in the order of the computation (more than two classes: of the class with the
    largest bound). log_odds: their sum, a bound on |device log-odds - trained log-odds| over every real input that
    rounds into the device limits. threshold: the largest |sealed threshold - exact threshold|. band: trained log-odds
    outside it are decided as the exact threshold decides them. probability: a bound on |device probability -
    logistic(trained log-odds)|. reach: the smallest and largest trained log-odds over the device limits. Ends of band
    and reach are rounded outward to binary64.
    """

    items: tuple[BudgetItem, ...]
    log_odds: Fraction
    threshold: Fraction
    band: tuple[float, float]
    probability: Fraction
    reach: tuple[float, float]


class Misses(NamedTuple):
    """How the reference scorer stands to the witness.

    rows: positions of witness rows that differ by more than the budget and the witness's own bound allow. compared:
    how many rows lie within the device limits. largest: the largest difference as a share of what is allowed.
    """

    rows: tuple[int, ...]
    compared: int
    largest: float


def datums(sealed: SealedModel) -> tuple[Fraction, ...]:
    """d: one number an input, 0 where the device subtracts nothing (levels: the reference level)."""
    return tuple(Fraction(term.datum or 0) for term in sealed.terms)


def input_rounding(arithmetic: str, entry: Input) -> Fraction:
    """The largest |X - x| over reals X that round to a number x within the device limits.

    Half a unit of the largest limit: where that is a power of two, the reals just above it count. Programs may read a
    real as binary64 first and round that to binary32 (a Python float does): the two roundings together are covered.
    """
    magnitude = Fraction(max(abs(entry.low), abs(entry.high)))
    first = half_unit("binary64", magnitude) if arithmetic != "binary64" else ZERO
    return half_unit(arithmetic, magnitude) + first


def derive(trained: TrainedModel, sealed: SealedModel) -> Budget:
    """The error budget of a sealed model against the trained one.

    Raises SealError where a step can exceed the arithmetic's largest number within the device limits.
    """
    by_class = [tuple(_items(trained, sealed, k)) for k in range(len(sealed.intercepts))]
    totals = [sum((item.bound for item in items), ZERO) for items in by_class]
    log_odds = max(totals)
    exact = threshold_of(sealed.about.request.decision)
    off = max(abs(Fraction(sealed.decision.low) - exact), abs(Fraction(sealed.decision.high) - exact))
    return Budget(
        items=tuple(item for item in by_class[totals.index(log_odds)] if item.bound),
        log_odds=log_odds,
        threshold=off,
        band=_outward(Interval(exact - log_odds - off, exact + log_odds + off)),
        probability=log_odds / 4 + PROBABILITY_ERROR[sealed.arithmetic],
        reach=_outward(_reach(trained, sealed)),
    )


def _items(trained: TrainedModel, sealed: SealedModel, k: int) -> Iterator[BudgetItem]:
    arithmetic = sealed.arithmetic
    intercept = Fraction(sealed.intercepts[k])
    yield BudgetItem(
        "intercept rounded", "intercept", None, abs(intercept - trained_log_odds(trained, datums(sealed))[k])
    )
    z = Interval(intercept, intercept)
    for term in sealed.terms:
        entry = sealed.inputs[term.of[0]]
        name = entry.name
        exact = slopes(trained, k, term.of[0], len(entry.levels))
        device = tuple(Fraction(weight) for weight in term.weights[k])
        if entry.levels:
            worst = max(abs(u - w) for u, w in zip(device, exact, strict=True))
            yield BudgetItem(f'weights of the levels of "{name}" rounded', "weight", name, worst)
            added = hull(list(device))
        else:
            yield from _value_items(sealed, term, exact[0], device[0])
            added = _product(sealed, term, device[0])
        total = z + added
        # Adding 0, or adding to 0, is exact.
        moved = any(device) and (z.low, z.high) != (ZERO, ZERO)
        error = sum_rounding(arithmetic, total) if moved else ZERO
        yield BudgetItem(f'sum after "{name}"', "sum", name, error)
        z = _within(total.rounded(arithmetic), f'sum after "{name}"', arithmetic)


def _value_items(sealed: SealedModel, term: Term, exact: Fraction, device: Fraction) -> Iterator[BudgetItem]:
    """The items of a number's product: everything of its term but the sum."""
    arithmetic = sealed.arithmetic
    entry = sealed.inputs[term.of[0]]
    name = entry.name
    limits = Interval(Fraction(entry.low), Fraction(entry.high))
    datum = Fraction(term.datum or 0)
    yield BudgetItem(
        f'input "{name}" rounded to {arithmetic}', "input", name, abs(exact) * input_rounding(arithmetic, entry)
    )
    yield BudgetItem(f'weight of "{name}" rounded', "weight", name, abs(device - exact) * limits.minus(datum).magnitude)
    if datum:
        error = difference_rounding(arithmetic, limits, datum)
        yield BudgetItem(f'subtracting the datum of "{name}"', "datum", name, abs(device) * error)
    factor = _difference(sealed, term)
    yield BudgetItem(
        f'product with the weight of "{name}"', "product", name, product_rounding(arithmetic, device, factor)
    )


def _difference(sealed: SealedModel, term: Term) -> Interval:
    """round(x - d) over the device limits."""
    entry = sealed.inputs[term.of[0]]
    exact = Interval(Fraction(entry.low), Fraction(entry.high)).minus(Fraction(term.datum or 0))
    return _within(exact.rounded(sealed.arithmetic), f'subtracting the datum of "{entry.name}"', sealed.arithmetic)


def _product(sealed: SealedModel, term: Term, device: Fraction) -> Interval:
    """round(u round(x - d)) over the device limits."""
    name = sealed.inputs[term.of[0]].name
    exact = _difference(sealed, term).times(device)
    return _within(exact.rounded(sealed.arithmetic), f'product with the weight of "{name}"', sealed.arithmetic)


def _within(interval: Interval | None, place: str, arithmetic: str) -> Interval:
    if interval is None:
        found = f"can exceed the largest {arithmetic} number within the ranges"
        raise SealError(Problem(place, found, "narrow the ranges, rescale the inputs, or choose binary64"))
    return interval


def _reach(trained: TrainedModel, sealed: SealedModel) -> Interval:
    ends = []
    for k in range(len(sealed.intercepts)):
        origin = trained_log_odds(trained, [ZERO] * len(sealed.inputs))[k]
        total = Interval(origin, origin)
        for position, entry in enumerate(sealed.inputs):
            exact = slopes(trained, k, position, len(entry.levels))
            limits = Interval(Fraction(entry.low), Fraction(entry.high))
            total += hull(list(exact)) if entry.levels else limits.times(exact[0])
        ends += [total.low, total.high]
    return hull(ends)


def _outward(interval: Interval) -> tuple[float, float]:
    low, high = float(interval.low), float(interval.high)
    return (
        low if Fraction(low) <= interval.low else math.nextafter(low, -math.inf),
        high if Fraction(high) >= interval.high else math.nextafter(high, math.inf),
    )


def advise(trained: TrainedModel, sealed: SealedModel, budget: Budget, tolerance: Fraction) -> Problem:
    """Why a budget is larger than the tolerance, and what would fit: another arithmetic, an origin, a tolerance."""
    costliest = max(budget.items, key=lambda item: item.bound)
    found = (
        f"{_text(budget.log_odds)} in log-odds is more than the tolerance {_text(tolerance)}, and the costliest item "
        f"is {costliest.what}, {_text(costliest.bound)}"
    )
    options = [*_other_arithmetics(trained, sealed, tolerance), *_origins(sealed, budget, tolerance)]
    options.append(f"raise the tolerance to {_text(budget.log_odds)}")
    return Problem("error budget", found, ", or ".join(options))


def _other_arithmetics(trained: TrainedModel, sealed: SealedModel, tolerance: Fraction) -> Iterator[str]:
    request = sealed.about.request
    for arithmetic in FORMATS:
        if arithmetic == sealed.arithmetic:
            continue
        try:
            bound = derive(trained, seal_request(trained, replace(request, arithmetic=arithmetic))).log_odds
        except SealError:
            continue
        if bound <= tolerance:
            yield f"choose {arithmetic} (its bound is {_text(bound)})"


def _origins(sealed: SealedModel, budget: Budget, tolerance: Fraction) -> Iterator[str]:
    """Constants that the device could subtract before a value becomes a float, so that its rounding costs less."""
    total, chosen = budget.log_odds, []
    inputs = {entry.name: entry for entry in sealed.inputs}
    for item in sorted(budget.items, key=lambda item: -item.bound):
        if total <= tolerance or item.kind != "input" or item.input is None:
            continue
        entry = inputs[item.input]
        origin = datum_of(Fraction(entry.low), Fraction(entry.high))
        if origin is None:
            continue
        near = replace(entry, low=float(entry.low - origin), high=float(entry.high - origin))
        share = input_rounding(sealed.arithmetic, near) / input_rounding(sealed.arithmetic, entry)
        total -= item.bound * (1 - share)
        unit = f" {entry.unit}" if entry.unit else ""
        chosen.append(f'{float(origin):g}{unit} from "{entry.name}"')
    if chosen and total <= tolerance:
        constants, bound = " and ".join(chosen), _text(total)
        yield f"have the device subtract {constants} before the value becomes a float (the bound is then {bound})"


def _text(value: Fraction) -> str:
    """Three digits, rounded up."""
    context = Context(prec=3, rounding=ROUND_CEILING)
    return f"{float(context.divide(Decimal(value.numerator), Decimal(value.denominator))):.3g}"


def witness_misses(trained: TrainedModel, sealed: SealedModel, budget: Budget) -> Misses:
    """Hold the reference scorer against what training itself said of the witness rows.

    A row counts where its inputs, rounded, lie within the device limits; |reference - witness| may be the budget and
    the witness's own bound.
    """
    rounded = ROUND[sealed.arithmetic]
    rows, compared, largest = [], 0, 0.0
    for position, row in enumerate(trained.witness):
        inputs = tuple(rounded(value) for value in row.inputs)
        if not all(map(math.isfinite, inputs)) or not in_range(sealed, inputs):
            continue
        compared += 1
        for device, said, bound in zip(scores(sealed, inputs), row.log_odds, row.bounds, strict=True):
            allowed = budget.log_odds + Fraction(bound)
            difference = abs(Fraction(device) - Fraction(said))
            if difference:
                largest = max(largest, float(difference / allowed) if allowed else math.inf)
            if not difference <= allowed and position not in rows:
                rows.append(position)
    return Misses(tuple(rows), compared, largest)
