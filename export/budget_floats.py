"""The items of an error budget in floating point: z = round(z + round(u * round(x - d))), input by input.

A rounding error is half a unit in the last place of the largest magnitude that the exact result can have (Higham 2002,
Accuracy and Stability of Numerical Algorithms, section 2.2), found by exact intervals of the *computed* values, and
nothing where the step is provably exact:

    datum       |u_j| * the largest rounding error of x_j - d_j
    product     the largest rounding error of u_j * round(x_j - d_j)
    sum         the largest rounding error of the partial sum
"""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction

from export.budget_items import BudgetItem, input_rounding, limits_of, mid_range_item, weight_errors, weight_item
from export.exact import ZERO, datums, device_intercept, device_weights, slopes
from export.interval import Interval, difference_rounding, hull, product_rounding, sum_rounding
from runtime_min.errors import Problem, SealError
from runtime_min.model import SealedModel, TrainedModel


def float_items(trained: TrainedModel, sealed: SealedModel, k: int) -> Iterator[BudgetItem]:
    """All items of class k + 1, in the order of the computation, those of no size included.

    Raises SealError where a step can exceed the arithmetic's largest number within the device limits.
    """
    arithmetic = sealed.arithmetic
    yield mid_range_item(trained, sealed, k)
    intercept = device_intercept(sealed, k)
    z = Interval(intercept, intercept)
    for position, (entry, error) in enumerate(zip(sealed.inputs, weight_errors(trained, sealed, k), strict=True)):
        device = device_weights(sealed, k, position)
        if entry.levels:
            added = hull(list(device))
        else:
            slope = abs(slopes(trained, sealed, k, position)[0])
            rounded = slope * input_rounding(arithmetic, entry)
            yield BudgetItem(f'input "{entry.name}" rounded to {arithmetic}', "input", entry.name, rounded)
        yield weight_item(entry, error)
        if not entry.levels:
            yield from _product_items(sealed, position, device[0])
            added = _product(sealed, position, device[0])
        total = z + added
        # Adding 0, or adding to 0, is exact.
        moved = any(device) and (z.low, z.high) != (ZERO, ZERO)
        what = f'sum after "{entry.name}"'
        yield BudgetItem(what, "sum", entry.name, sum_rounding(arithmetic, total) if moved else ZERO)
        z = _within(total.rounded(arithmetic), what, arithmetic)


def _product_items(sealed: SealedModel, position: int, device: Fraction) -> Iterator[BudgetItem]:
    entry, datum = sealed.inputs[position], datums(sealed)[position]
    name = entry.name
    if datum:
        error = difference_rounding(sealed.arithmetic, limits_of(entry), datum, entry.counts is not None)
        yield BudgetItem(f'subtracting the datum of "{name}"', "datum", name, abs(device) * error)
    error = product_rounding(sealed.arithmetic, device, _difference(sealed, position))
    yield BudgetItem(f'product with the weight of "{name}"', "product", name, error)


def _difference(sealed: SealedModel, position: int) -> Interval:
    """round(x - d) over the device limits."""
    entry = sealed.inputs[position]
    exact = limits_of(entry).minus(datums(sealed)[position])
    return _within(exact.rounded(sealed.arithmetic), f'subtracting the datum of "{entry.name}"', sealed.arithmetic)


def _product(sealed: SealedModel, position: int, device: Fraction) -> Interval:
    """round(u round(x - d)) over the device limits."""
    exact = _difference(sealed, position).times(device)
    what = f'product with the weight of "{sealed.inputs[position].name}"'
    return _within(exact.rounded(sealed.arithmetic), what, sealed.arithmetic)


def _within(interval: Interval | None, place: str, arithmetic: str) -> Interval:
    if interval is None:
        found = f"can exceed the largest {arithmetic} number within the ranges"
        raise SealError(Problem(place, found, "narrow the ranges, rescale the inputs, or choose binary64"))
    return interval
