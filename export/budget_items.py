"""What every arithmetic's budget has: items, and the part of the error that is a linear function of the inputs."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from export.exact import ZERO, datums, device_intercept, device_weights, log_odds_of, slopes
from export.interval import Interval, half_unit, hull
from runtime_min.model import INTEGERS, Input, SealedModel, TrainedModel
from runtime_min.sealing import FORMATS


@dataclass(frozen=True)
class BudgetItem:
    """One part of the bound. `kind`: mid-range, weight, input, datum, product or sum; `input`: its name, if any."""

    what: str
    kind: str
    input: str | None
    bound: Fraction


def limits_of(entry: Input) -> Interval:
    """The device limits of what an input delivers."""
    return Interval(Fraction(entry.low), Fraction(entry.high))


def input_rounding(arithmetic: str, entry: Input) -> Fraction:
    """The largest |X - x| over reals X that round to a number x within the device limits.

    Reals: half a unit of the largest limit; where that is a power of two, the reals just above it count. Programs may
    read a real as binary64 first and round that to binary32 (a Python float does): the two roundings together are
    covered. Counts of the plan are whole numbers, rounded only where a float cannot hold them. Where the tool chose
    the counts, a real lies up to half a count from one.
    """
    if arithmetic in INTEGERS:
        return Fraction(1, 2) if entry.counts is not None and entry.counts.chosen else ZERO
    magnitude = Fraction(max(abs(entry.low), abs(entry.high)))
    if entry.counts is not None and magnitude < 2 ** FORMATS[arithmetic][0]:
        return ZERO
    first = half_unit("binary64", magnitude) if arithmetic != "binary64" else ZERO
    return half_unit(arithmetic, magnitude) + first


def weight_errors(trained: TrainedModel, sealed: SealedModel, k: int) -> list[Interval]:
    """For each input the interval of (u_j - w_j) (x_j - d_j); of levels, of their weights' differences."""
    errors = []
    for position, (entry, datum) in enumerate(zip(sealed.inputs, datums(sealed), strict=True)):
        exact, device = slopes(trained, sealed, k, position), device_weights(sealed, k, position)
        off = [u - w for u, w in zip(device, exact, strict=True)]
        errors.append(hull(off) if entry.levels else limits_of(entry).minus(datum).times(off[0]))
    return errors


def mid_range_item(trained: TrainedModel, sealed: SealedModel, k: int) -> BudgetItem:
    """What rounding intercept and weights moves where every input stands mid-range (levels: midway of them)."""
    start = device_intercept(sealed, k) - log_odds_of(trained, sealed, datums(sealed))[k]
    middles = sum((error.middle for error in weight_errors(trained, sealed, k)), ZERO)
    return BudgetItem("intercept and weights rounded, at mid-range", "mid-range", None, abs(start + middles))


def weight_item(entry: Input, error: Interval) -> BudgetItem:
    """What rounding a weight moves, from mid-range to either limit."""
    what = f'weights of the levels of "{entry.name}"' if entry.levels else f'weight of "{entry.name}"'
    return BudgetItem(f"{what} rounded", "weight", entry.name, error.radius)
