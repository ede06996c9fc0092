"""The reference scorer held against what training itself said of the witness rows."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from fractions import Fraction
from typing import NamedTuple

from export.budget import Budget
from export.exact import ZERO, delivered_value, prevalence_shift, slopes, standardised, unit
from runtime_min.model import INTEGERS, Input, SealedModel, TrainedModel, Witness, in_range
from runtime_min.score import scores
from runtime_min.sealing import round_to


class Misses(NamedTuple):
    """How the reference scorer stands to the witness.

    rows: positions of witness rows that differ by more than the budget and the witness's own bound allow. compared:
    how many rows lie within the device limits. largest: the largest difference as a share of what is allowed.
    """

    rows: tuple[int, ...]
    compared: int
    largest: float


def witness_misses(trained: TrainedModel, sealed: SealedModel, budget: Budget) -> Misses:
    """|reference - witness| may be the budget and the witness's own bound, of every row within the device limits.

    A witness row is in plan units: what the device delivers of it is found exactly, then rounded once. Counts that the
    plan gives are coarser than the witness, by design: the witness is moved to the value of the count, along the
    trained weights. A bound of its own that is wider than a sum in binary64 can need counts for no more than that.
    """
    rows, compared, largest = [], 0, 0.0
    for position, row in enumerate(trained.witness):
        if not (found := _delivered(sealed, row)):
            continue
        exact, inputs = found
        compared += 1
        for k, (device, said, bound) in enumerate(zip(scores(sealed, inputs), row.log_odds, row.bounds, strict=True)):
            meant = Fraction(said) + _to_counts(trained, sealed, k, exact, inputs)
            allowed = budget.log_odds + min(Fraction(bound), _widest(trained, k, row))
            difference = abs(Fraction(device) * unit(sealed) - meant)
            if difference:
                largest = max(largest, float(difference / allowed) if allowed else math.inf)
            if not difference <= allowed and position not in rows:
                rows.append(position)
    return Misses(tuple(rows), compared, largest)


def witness_rows(trained: TrainedModel, sealed: SealedModel) -> Iterator[tuple[float, ...]]:
    """What the device has of each witness row that lies within its limits."""
    for row in trained.witness:
        if found := _delivered(sealed, row):
            yield found[1]


def _delivered(sealed: SealedModel, row: Witness) -> tuple[list[Fraction], tuple[float, ...]] | None:
    """(what is delivered of a row, exactly; what the device has of it), or None where that is out of its limits."""
    if not all(map(math.isfinite, row.inputs)):
        return None
    exact = [delivered_value(entry, Fraction(v)) for entry, v in zip(sealed.inputs, row.inputs, strict=True)]
    inputs = tuple(_carried(sealed, entry, number) for entry, number in zip(sealed.inputs, exact, strict=True))
    return (exact, inputs) if all(map(math.isfinite, inputs)) and in_range(sealed, inputs) else None


def _carried(sealed: SealedModel, entry: Input, exact: Fraction) -> float:
    """What the device has of an exact number: the nearest count, level or number of the arithmetic."""
    if entry.counts is not None or sealed.arithmetic in INTEGERS:
        return round(exact)
    return round_to(sealed.arithmetic, exact)


def _widest(trained: TrainedModel, k: int, row: Witness) -> Fraction:
    """(m + 6) 2^-52 (|B| + |d| + sum |W_j q_j|), and what may underflow: above any running bound of m terms.

    Each of m partial sums, the first of them rounded twice, errs by 2^-53 of at most that sum, and each term by 3.01
    times 2^-53 of itself (Higham 2002, Accuracy and Stability of Numerical Algorithms, section 3.3).
    """
    score, columns = trained.scores[k], standardised(trained, [Fraction(value) for value in row.inputs])
    size = abs(Fraction(score.intercept)) + abs(prevalence_shift(trained))
    size += sum((abs(Fraction(w) * column) for w, column in zip(score.weights, columns, strict=True)), ZERO)
    underflow = (len(columns) + sum((abs(Fraction(w)) for w in score.weights), ZERO)) * Fraction(1, 2**1070)
    return (len(columns) + 6) * Fraction(1, 2**52) * size + underflow


def _to_counts(
    trained: TrainedModel, sealed: SealedModel, k: int, exact: Sequence[Fraction], inputs: Sequence[float]
) -> Fraction:
    """How far the trained log-odds move from the exact numbers to the plan's counts next to them."""
    return sum(
        (
            slopes(trained, sealed, k, at)[0] * (Fraction(inputs[at]) - exact[at])
            for at, entry in enumerate(sealed.inputs)
            if entry.counts is not None and not entry.counts.chosen
        ),
        ZERO,
    )
