"""The items of an error budget in integers.

The accumulator is exact, z = b + sum_j u_j 2^s_j (n_j - d_j), so that only the numbers themselves are off: weights,
intercept and levels by their rounding, and inputs by half a count where the tool chose the counts. Counts that the plan
gives are what the device has: no item. Datums are whole and shifts are exact.
"""

from __future__ import annotations

from collections.abc import Iterator

from export.budget_items import BudgetItem, input_rounding, mid_range_item, weight_errors, weight_item
from export.exact import slopes
from runtime_min.model import SealedModel, TrainedModel


def integer_items(trained: TrainedModel, sealed: SealedModel, k: int) -> Iterator[BudgetItem]:
    """All items of class k + 1, in the order of the computation, those of no size included."""
    yield mid_range_item(trained, sealed, k)
    for position, (entry, error) in enumerate(zip(sealed.inputs, weight_errors(trained, sealed, k), strict=True)):
        if not entry.levels:
            half = abs(slopes(trained, sealed, k, position)[0]) * input_rounding(sealed.arithmetic, entry)
            yield BudgetItem(f'input "{entry.name}" as a whole count', "input", entry.name, half)
        yield weight_item(entry, error)
