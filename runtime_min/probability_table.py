"""The table of the logistic function for integers, at sealing: nodes at every quarter of a log-odds, from 0 to 8.

Between two nodes a chord lies below the curve, which is concave from 0 on, by at most h² max|σ''| / 8 = 7.6e-4 for
h = 1/4. Raising every node by half of what its neighbouring chords lack halves that; node 0 stays at exactly 1/2. So 33
entries, 66 bytes, keep within `TABLE_ERROR`, where nodes on the curve would need twice as many. Beyond 8 less than
3.4e-4 is missing from 1, and the last node stands in the middle of it.
"""

from __future__ import annotations

from decimal import Context, Decimal
from fractions import Fraction
from functools import cache

from runtime_min.model import Table

TABLE_ERROR = Fraction(1, 2048)
"""The largest error of a probability, 4.9e-4: smaller than a field rate that a few thousand rows can tell from 0."""

ONE = 2**15  # the unit of a probability is 2^-15, so that 1/2 and 1 are exact
NODES_PER_LOG_ODDS_BITS = 2
LAST = 8
# The fraction between two nodes has 16 bits at most: its product with a difference of nodes, below 2^12, fits 32 bits
# with room to spare, and on a part of 8 or 16 bits the two halves of a word are the fraction and the node.
LARGEST_STEP = 16


def probability_table(accumulator_shift: int) -> Table:
    """The table for log-odds in units of 2^-accumulator_shift, which is 3 or more: one node a 2^(drop + step) units."""
    spacing = accumulator_shift - NODES_PER_LOG_ODDS_BITS
    step = min(spacing, LARGEST_STEP)
    return Table(drop=spacing - step, step=step, nodes=_nodes())


@cache
def _nodes() -> tuple[int, ...]:
    context = Context(prec=40)

    def logistic(halves: int) -> Fraction:
        """The logistic function at so many halves of a spacing, to 40 digits."""
        argument = context.divide(Decimal(-halves), Decimal(2 * 2**NODES_PER_LOG_ODDS_BITS))
        return Fraction(context.divide(Decimal(1), context.add(Decimal(1), context.exp(argument))))

    count = LAST * 2**NODES_PER_LOG_ODDS_BITS
    curve = [logistic(2 * i) for i in range(count + 1)]
    lack = [logistic(2 * i + 1) - (curve[i] + curve[i + 1]) / 2 for i in range(count)]
    raised = [curve[i] + max(lack[i - 1], lack[i]) / 2 for i in range(1, count)]
    exact = [Fraction(1, 2), *raised, (curve[count] + 1) / 2]
    return tuple(round(ONE * value) for value in exact)
