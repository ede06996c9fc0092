"""Integers: the proof, from the ranges, that no step of a device overflows, as figures.

Each input lies within its limits once its policies were applied, and inputs vary freely; so the extremes of each step
are reached. The least number of a type is left out of what fits: it means missing, or a fault, and has no magnitude.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import cast

from runtime_min.arithmetic import ACCUMULATOR_BITS, WEIGHT_BITS
from runtime_min.integer_score import count_bits
from runtime_min.model import SealedModel, Table


@dataclass(frozen=True)
class Step:
    """What is computed, for which input ("" for none), the extremes that it reaches, and the bits that hold it."""

    what: str
    of: str
    lowest: int
    highest: int
    bits: int

    @property
    def largest(self) -> int:
        """The largest magnitude."""
        return max(-self.lowest, self.highest)

    @property
    def fits(self) -> bool:
        """Whether a signed integer of so many bits holds it, its least number left out."""
        return self.largest < 1 << (self.bits - 1)


def proof(sealed: SealedModel) -> tuple[Step, ...]:
    """Every step of a device in integers, in the order of the computation."""
    return tuple(_steps(sealed))


def _steps(sealed: SealedModel) -> Iterator[Step]:
    counts, accumulator = count_bits(sealed), ACCUMULATOR_BITS[sealed.arithmetic]
    for entry in sealed.inputs:
        yield Step("count", entry.name, _int(entry.low), _int(entry.high), counts)
    for k, intercept in enumerate(sealed.intercepts):
        lowest = highest = _int(intercept)
        yield Step("intercept", "", lowest, highest, accumulator)
        for term in sealed.terms:
            entry = sealed.inputs[term.of[0]]
            weights = [_int(weight) for weight in term.weights[k]]
            if term.form == "level":
                least, most = min(weights), max(weights)
                yield Step("weight of a level", entry.name, least, most, accumulator)
            else:
                datum, weight = _int(term.datum), weights[0]
                yield Step("datum", entry.name, datum, datum, counts)
                yield Step("weight", entry.name, weight, weight, WEIGHT_BITS[sealed.arithmetic])
                ends = _int(entry.low) - datum, _int(entry.high) - datum
                yield Step("count - datum", entry.name, *ends, counts)
                least, most = sorted(weight * end for end in ends)
                yield Step("product", entry.name, least, most, accumulator)
                power = 2 ** _int(term.shift)
                least, most = least * power, most * power
                yield Step("shifted product", entry.name, least, most, accumulator)
            lowest, highest = lowest + least, highest + most
            yield Step("sum", entry.name, lowest, highest, accumulator)
    for threshold in (sealed.decision.low, sealed.decision.high):
        yield Step("threshold", "", _int(threshold), _int(threshold), accumulator)
    table = cast(Table, sealed.table)
    slopes = [after - before for before, after in zip(table.nodes, table.nodes[1:], strict=False)]
    half = 2 ** (table.step - 1)
    yield Step("between two nodes", "", half, max(slopes) * (2**table.step - 1) + half, 32)


def _int(number: float | None) -> int:
    """In integers every number is an int; the data classes allow a float too."""
    return cast(int, number)
