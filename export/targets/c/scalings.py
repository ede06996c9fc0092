"""The scalings that were chosen for inputs without counts of their own, as macros: a reading in, its count out."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from export.targets.c import lexical
from runtime_min.integer_score import count_bits
from runtime_min.model import Input, SealedModel
from runtime_min.names import delivered_unit
from runtime_min.sealing import round_to

# A count's rounding in binary32 must cost nothing beside the half count that rounding to the nearest costs anyway.
SHARE_OF_A_COUNT = Fraction(1, 256)


@dataclass(frozen=True)
class Scaling:
    """`name` of the input; `words`: what is counted; `real`: the type to compute in.

    `value`: the count before rounding; `below`, `above`: the counts of readings that lie beyond all counts.
    """

    name: str
    words: str
    real: str
    value: str
    below: str
    above: str


def scalings(sealed: SealedModel) -> list[Scaling]:
    """One for each input whose counts sealing chose; their gain is a power of two."""
    return [_scaling(entry, sealed) for entry in sealed.inputs if entry.counts is not None and entry.counts.chosen]


def _scaling(entry: Input, sealed: SealedModel) -> Scaling:
    assert entry.counts is not None
    gain, offset = Fraction(entry.counts.gain), Fraction(entry.counts.offset)
    most = (1 << (count_bits(sealed) - 1)) - 1
    largest = max(abs(offset + gain * Fraction(limit)) for limit in (entry.low, entry.high))
    short = count_bits(sealed) == 16 and largest / 2**24 <= gain * SHARE_OF_A_COUNT
    kind = "binary32" if short and round_to("binary32", offset) == offset else "binary64"
    prefix = sealed.name.upper()
    real = f"{prefix}_CAST({lexical.REAL[kind]}, value)"
    sign = "-" if offset > 0 else "+"
    less = f"({real} {sign} {lexical.number(round_to(kind, abs(offset)), kind)})" if offset else real
    below, above = -most, most
    if entry.outside == "fault":  # a count that is within the limits must not stand for a reading that is not
        below, above = (most if entry.low == -most else -most), (-most if entry.high == most else most)
    if entry.outside == "fault" and (entry.low, entry.high) == (-most, most):
        below = above = -most - 1
    return Scaling(
        entry.name.upper(),
        f"{delivered_unit(entry)}",
        lexical.REAL[kind],
        f"{less} * {lexical.number(round_to(kind, 1 / gain), kind)}",
        lexical.integer(below, count_bits(sealed)),
        lexical.integer(above, count_bits(sealed)),
    )
