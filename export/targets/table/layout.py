"""The table's layout: which number lies where, in which bytes. Header, HEX file and HANDOFF.md all follow from it.

    8 bytes      the model id, its sixteen hex digits read as bytes
    then         every coefficient in the order in which the device uses it, each of the same width
    at the end   CRC-32/ISO-HDLC of all bytes before it, in a word of that width

In floating point the width is that of the arithmetic, in integers that of the accumulator. All numbers are in the
byte order that the plan asks for.
"""

from __future__ import annotations

import binascii
import re
from dataclasses import dataclass
from typing import Literal

from runtime_min.arithmetic import raw_bits
from runtime_min.model import Placement, SealedModel
from runtime_min.names import delivered_unit

ID_BYTES = 8
WIDTH = {"binary32": 4, "binary64": 8, "int16": 4, "int32": 8}
DEFAULT = Placement(0, "little")


@dataclass(frozen=True)
class Entry:
    """One number: its name in the structure, what it is, its unit, its offset in bytes, its value and its bytes."""

    name: str
    what: str
    unit: str
    offset: int
    value: float
    data: bytes


@dataclass(frozen=True)
class Layout:
    """The whole table. `data`: all its bytes; `crc`: the check word at their end."""

    entries: tuple[Entry, ...]
    placement: Placement
    width: int
    crc: int
    data: bytes


def layout(sealed: SealedModel) -> Layout:
    """The table of a sealed model."""
    placement = sealed.about.request.table or DEFAULT
    width = WIDTH[sealed.arithmetic]
    order: Literal["little", "big"] = "little" if placement.byte_order == "little" else "big"
    entries = []
    data = bytes.fromhex(sealed.model_id)
    for name, what, unit, value in _numbers(sealed):
        word = raw_bits(value, sealed.arithmetic).to_bytes(width, order)
        entries.append(Entry(name, what, unit, len(data), value, word))
        data += word
    crc = binascii.crc32(data)
    return Layout(tuple(entries), placement, width, crc, data + crc.to_bytes(width, order))


def _numbers(sealed: SealedModel) -> list[tuple[str, str, str, float]]:
    """(name, what it is, unit, number), input by input, then what is of the whole model."""
    log_odds = "log-odds" if sealed.accumulator_shift is None else f"log-odds / 2^{sealed.accumulator_shift}"
    numbers: list[tuple[str, str, str, float]] = [("intercept", "intercept", log_odds, sealed.intercepts[0])]
    for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
        unit = delivered_unit(entry)
        if entry.levels:
            for level, weight in enumerate(term.weights[0]):
                what = f'weight of {entry.name} level {level}, "{entry.levels[level]}"'
                numbers.append((f"weight_{entry.name}_{level}", what, log_odds, weight))
        else:
            if term.datum is not None:
                numbers.append((f"datum_{entry.name}", f"datum of {entry.name}, subtracted first", unit, term.datum))
            per = f"{log_odds} per {unit}" if unit else f"{log_odds} per unit"
            numbers.append((f"weight_{entry.name}", f"weight of {entry.name}", per, term.weights[0][0]))
            if term.shift is not None:
                what = f"left shift of the product of {entry.name}"
                numbers.append((f"shift_{entry.name}", what, "bits", term.shift))
        numbers.append((f"low_{entry.name}", f"lower limit of {entry.name}", unit, entry.low))
        numbers.append((f"high_{entry.name}", f"upper limit of {entry.name}", unit, entry.high))
        if entry.typical is not None:
            what = f"what stands in where {entry.name} is missing"
            numbers.append((f"typical_{entry.name}", what, unit, entry.typical))
    numbers.append(("threshold_low", "lower threshold", log_odds, sealed.decision.low))
    numbers.append(("threshold_high", "upper threshold", log_odds, sealed.decision.high))
    return _distinct(numbers)


def _distinct(numbers: list[tuple[str, str, str, float]]) -> list[tuple[str, str, str, float]]:
    """Names of inputs can make two names one (a level 1 of "x" and an input "x_1"): the later one gets a trailing n."""
    taken: set[str] = set()
    result = []
    for name, what, unit, value in numbers:
        while name in taken:
            name = re.sub(r"(_n\d*)?$", lambda found: f"_n{len(found[0])}", name, count=1)
        taken.add(name)
        result.append((name, what, unit, value))
    return result
