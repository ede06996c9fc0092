"""The error budget: how far a device's log-odds can be from the trained model's, item by item.

The trained log-odds of real inputs X, in what the device delivers (a value, a value less its origin, a count), is the
exact real function

    T(X) = T(d) + sum_j w_j (X_j - d_j)

with the device's own datums d (0 where there is none; the reference level for levels). The device starts at its
intercept b and, for each input in order, adds u_j (x_j - d_j), x_j the rounded input and u_j its own weight, with
whatever rounding its arithmetic does on the way. Telescoping from the trained sum to the computed one, every step moves
the result by at most one item:

    mid-range   |b - T(d) + sum_j m_j|, m_j the middle of the interval of (u_j - w_j) (x_j - d_j) over the device limits
    weight      half the width of that interval                  (levels: of the interval of the levels' differences)
    input       |w_j| * the largest |X_j - x_j|, over every real X_j that rounds into the device limits
    datum, product, sum      the largest rounding error of each operation (`budget_floats`); none in integers

The first two are one linear function of the inputs, so that its signs count: |sum of intervals| is at most the size of
the sum of their middles and the sum of their half widths. All in rationals, and without the fold that sealing uses, so
that a mistake there shows here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

from export.budget_floats import float_items
from export.budget_integers import integer_items
from export.budget_items import BudgetItem, limits_of
from export.exact import ZERO, log_odds_of, slopes, unit
from export.interval import Interval, hull
from export.logistic_error import probability_error
from runtime_min.model import INTEGERS, SealedModel, TrainedModel
from runtime_min.sealing import thresholds_of

__all__ = ["Budget", "BudgetItem", "derive"]


@dataclass(frozen=True)
class Budget:
    """What the derivation proves of one sealed model.

    items: the parts that are not zero, in the order of the computation (more than two classes: of the class with the
    largest bound). log_odds: their sum, a bound on |device log-odds - trained log-odds| over every real input that
    rounds into the device limits. threshold: the largest |sealed threshold - exact threshold|. bands: one for each
    threshold; trained log-odds outside them are decided as the exact thresholds decide them. probability: a bound on
    |device probability - logistic(trained log-odds)|. reach: the smallest and largest trained log-odds over the device
    limits. Ends of bands and reach are rounded outward to binary64.
    """

    items: tuple[BudgetItem, ...]
    log_odds: Fraction
    threshold: Fraction
    bands: tuple[tuple[float, float], ...]
    probability: Fraction
    reach: tuple[float, float]


def derive(trained: TrainedModel, sealed: SealedModel) -> Budget:
    """The error budget of a sealed model against the trained one.

    Raises SealError where a step can exceed the arithmetic's largest number within the device limits.
    """
    items_of = integer_items if sealed.arithmetic in INTEGERS else float_items
    by_class = [tuple(items_of(trained, sealed, k)) for k in range(len(sealed.intercepts))]
    totals = [sum((item.bound for item in items), ZERO) for items in by_class]
    log_odds = max(totals)
    exact = thresholds_of(sealed.about.request.decision)
    device = [Fraction(number) * unit(sealed) for number in (sealed.decision.low, sealed.decision.high)]
    off: dict[Fraction, Fraction] = {}
    for one, other in zip(exact, device, strict=True):
        off[one] = max(abs(other - one), off.get(one, ZERO))
    return Budget(
        items=tuple(item for item in by_class[totals.index(log_odds)] if item.bound),
        log_odds=log_odds,
        threshold=max(off.values()),
        bands=tuple(_outward(Interval(at - log_odds - wide, at + log_odds + wide)) for at, wide in off.items()),
        probability=log_odds / 4 + probability_error(sealed),
        reach=_outward(_reach(trained, sealed)),
    )


def _reach(trained: TrainedModel, sealed: SealedModel) -> Interval:
    ends = []
    for k in range(len(sealed.intercepts)):
        start = log_odds_of(trained, sealed, [ZERO] * len(sealed.inputs))[k]
        total = Interval(start, start)
        for position, entry in enumerate(sealed.inputs):
            exact = slopes(trained, sealed, k, position)
            total += hull(list(exact)) if entry.levels else limits_of(entry).times(exact[0])
        ends += [total.low, total.high]
    return hull(ends)


def _outward(interval: Interval) -> tuple[float, float]:
    low, high = float(interval.low), float(interval.high)
    return (
        low if Fraction(low) <= interval.low else math.nextafter(low, -math.inf),
        high if Fraction(high) >= interval.high else math.nextafter(high, math.inf),
    )
