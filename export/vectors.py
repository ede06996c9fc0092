"""Which inputs the artefacts are tried on, and the exact outputs expected of every one of them.

The rows are invented: random ones, corners of the ranges, rows next to and exactly on the threshold, and every kind of
fault. They follow from the sealed model alone (the generator is seeded with its id), so that a check can make them
again. Only where the plan allows real rows, those of the witness come after them, rounded as the device rounds them.
"""

from __future__ import annotations

import binascii
import itertools
import math
import random
from collections.abc import Iterator, Sequence
from fractions import Fraction

import numpy as np

from export.targets import Output, SelfTest, Vector
from export.witness import witness_rows
from runtime_min import arithmetic, score
from runtime_min.integer_score import missing_count
from runtime_min.model import INTEGERS, Input, SealedModel, TrainedModel
from runtime_min.validity import device_numbers

RANDOM_ROWS = 300
CORNER_ROWS = 64
THRESHOLD_ROWS = 40
ON_THRESHOLD_TRIES = 400
SELF_TEST_ROWS = 12

Row = tuple[float, ...]


def expected(sealed: SealedModel, inputs: Sequence[float]) -> Output:
    """What the reference scorer says of one row, as raw bits."""
    fault, log_odds, probability, decision = score.outputs(sealed, inputs)
    return Output(
        fault,
        tuple(arithmetic.raw_bits(z, sealed.arithmetic) for z in log_odds),
        tuple(arithmetic.raw_bits(p, sealed.arithmetic) for p in probability),
        decision,
    )


def table_crc(sealed: SealedModel) -> int:
    """CRC-32 (ISO-HDLC) over the bits of every device number, least significant byte first.

    In int16 each takes 4 bytes and in int32 8, the accumulator's width, in two's complement.
    """
    width = 4 if sealed.arithmetic in ("binary32", "int16") else 8
    data = b"".join(
        arithmetic.raw_bits(number, sealed.arithmetic).to_bytes(width, "little") for _, number in device_numbers(sealed)
    )
    return binascii.crc32(data)


def make_vectors(sealed: SealedModel, trained: TrainedModel | None = None) -> tuple[Vector, ...]:
    """All vectors of a release, in a fixed order; trained: its witness holds the real rows that the plan allows."""
    rng = random.Random(sealed.model_id)
    kinds: list[tuple[str, Iterator[Row]]] = [
        ("random", (random_row(sealed, rng) for _ in range(RANDOM_ROWS))),
        ("corner", _corners(sealed, rng)),
        ("threshold", _next_to_threshold(sealed, rng)),
        ("policy", _policy_rows(sealed, rng)),
    ]
    if trained is not None and sealed.about.request.real_rows:
        kinds.append(("witness", witness_rows(trained, sealed)))
    return tuple(Vector(kind, row, expected(sealed, row)) for kind, rows in kinds for row in rows)


def self_test_of(sealed: SealedModel, vectors: Sequence[Vector]) -> SelfTest:
    """A few vectors of each kind, and the tables' CRC."""
    chosen: list[Vector] = []
    seen: list[str | None] = []
    by_kind = [[v for v in vectors if v.kind == kind] for kind in ("random", "corner", "threshold", "policy")]
    for rank in range(SELF_TEST_ROWS):
        for group in by_kind:
            row = repr(group[-1 - rank].inputs) if rank < len(group) else None  # as text: a NaN is no NaN's equal
            if row not in (None, *seen) and len(chosen) < SELF_TEST_ROWS:
                seen.append(row)
                chosen.append(group[-1 - rank])
    return SelfTest(tuple(chosen), table_crc(sealed))


def random_row(sealed: SealedModel, rng: random.Random) -> Row:
    """One row, uniform over the ranges, of numbers of the arithmetic."""
    if sealed.arithmetic in INTEGERS:
        return tuple(rng.randint(int(entry.low), int(entry.high)) for entry in sealed.inputs)
    rounded = arithmetic.ROUND[sealed.arithmetic]
    return tuple(
        float(rng.randint(int(entry.low), int(entry.high)))
        if entry.levels or entry.counts
        else min(max(rounded(entry.low + (entry.high - entry.low) * rng.random()), entry.low), entry.high)
        for entry in sealed.inputs
    )


def next_to(value: float, towards: float, kind: str) -> float:
    """The neighbour of `value` in the arithmetic, towards `towards`."""
    if kind in INTEGERS:
        return int(value) + (towards > value) - (towards < value)
    if kind == "binary32":
        return float(np.nextafter(np.float32(value), np.float32(towards)))
    return math.nextafter(value, towards)


def _corners(sealed: SealedModel, rng: random.Random) -> Iterator[Row]:
    limits = [(entry.low, entry.high) for entry in sealed.inputs]
    if 2 ** len(limits) <= CORNER_ROWS:
        yield from itertools.product(*limits)
        return
    yield tuple(low for low, _ in limits)
    yield tuple(high for _, high in limits)
    for _ in range(CORNER_ROWS - 2):
        yield tuple(rng.choice(pair) for pair in limits)


def _next_to_threshold(sealed: SealedModel, rng: random.Random) -> Iterator[Row]:
    """Rows on either side of a threshold, one step of one input apart, and rows whose log-odds are the threshold."""
    found: list[Row] = []
    exact: list[Row] = []
    numeric = [position for position, entry in enumerate(sealed.inputs) if not entry.levels]
    limits = {sealed.decision.low, sealed.decision.high}
    for _ in range(ON_THRESHOLD_TRIES):
        if (len(found) >= THRESHOLD_ROWS and len(exact) >= THRESHOLD_ROWS // 4) or not numeric:
            break
        threshold = rng.choice(sorted(limits))
        pair = _bracket(sealed, list(random_row(sealed, rng)), rng.choice(numeric), threshold)
        if pair is None:
            continue
        if len(found) < THRESHOLD_ROWS:
            found += pair
        exact += [row for row in pair if score.log_odds(sealed, row) == threshold]
    if sealed.arithmetic in INTEGERS and len(numeric) > 1:
        exact += [row for _ in range(ON_THRESHOLD_TRIES) if (row := _exactly_on(sealed, rng, numeric)) is not None]
    yield from found
    yield from exact[: THRESHOLD_ROWS // 4]


def _bracket(sealed: SealedModel, row: list[float], position: int, threshold: float) -> tuple[Row, Row] | None:
    """Bisect one input until two neighbouring numbers stand on either side of the threshold."""
    entry = sealed.inputs[position]

    def middle_of(below: float, above: float) -> float:
        if sealed.arithmetic in INTEGERS:
            return (int(below) + int(above)) // 2
        return arithmetic.ROUND[sealed.arithmetic](below + (above - below) / 2)

    def at(value: float) -> Row:
        return (*row[:position], value, *row[position + 1 :])

    below, above = entry.low, entry.high
    if score.log_odds(sealed, at(below)) > score.log_odds(sealed, at(above)):
        below, above = above, below
    if not score.log_odds(sealed, at(below)) < threshold <= score.log_odds(sealed, at(above)):
        return None
    while next_to(below, above, sealed.arithmetic) != above:
        middle = middle_of(below, above)
        if middle in (below, above):
            middle = next_to(below, above, sealed.arithmetic)
        if score.log_odds(sealed, at(middle)) < threshold:
            below = middle
        else:
            above = middle
    return at(below), at(above)


def _exactly_on(sealed: SealedModel, rng: random.Random, numeric: Sequence[int]) -> Row | None:
    """A random row, two of whose counts are moved so that the log-odds are a threshold exactly, where that can be.

    With p and q the steps of the log-odds for one count of each, a p + c q = r is solved in whole numbers: a is known
    modulo q / gcd(p, q), and both counts must stay within their limits.
    """
    row = [int(value) for value in random_row(sealed, rng)]
    first, second = rng.sample(list(numeric), 2)
    p, q = (int(sealed.terms[at].weights[0][0]) << (sealed.terms[at].shift or 0) for at in (first, second))
    threshold = rng.choice([int(sealed.decision.low), int(sealed.decision.high)])
    rest = threshold - int(score.log_odds(sealed, row))
    common = math.gcd(p, q)
    if not p or not q or rest % common:
        return None
    p, q, rest = p // common, q // common, rest // common
    ends = [int(end) - row[second] for end in (sealed.inputs[second].low, sealed.inputs[second].high)]
    bounds = sorted(Fraction(rest - end * q, p) for end in ends)
    least = max(math.ceil(bounds[0]), int(sealed.inputs[first].low) - row[first])
    most = min(math.floor(bounds[1]), int(sealed.inputs[first].high) - row[first])
    start = rest * pow(p, -1, abs(q)) if abs(q) > 1 else 0
    move = least + (start - least) % abs(q)
    if move > most:
        return None
    row[first] += move
    row[second] += (rest - move * p) // q
    return tuple(row)


def _policy_rows(sealed: SealedModel, rng: random.Random) -> Iterator[Row]:
    """For every input: missing, infinite, on and one step beyond each limit, no level; then several at once."""
    kind = sealed.arithmetic
    for position, entry in enumerate(sealed.inputs):
        for value in _odd_counts(sealed, entry) if kind in INTEGERS else _odd_floats(entry, kind):
            row = random_row(sealed, rng)
            yield (*row[:position], value, *row[position + 1 :])
    missing, beyond = (missing_count(sealed), -missing_count(sealed) - 1) if kind in INTEGERS else (math.nan, math.inf)
    for _ in range(8):
        yield tuple(rng.choice((value, missing, beyond)) for value in random_row(sealed, rng))
    yield (missing,) * len(sealed.inputs)


def _odd_floats(entry: Input, kind: str) -> list[float]:
    odd = [math.nan, math.inf, -math.inf, entry.low, entry.high, -0.0]
    odd += [next_to(entry.low, -math.inf, kind), next_to(entry.high, math.inf, kind)]
    if entry.levels:
        odd += [0.5, len(entry.levels) - 1.5, float(len(entry.levels)), -1.0]
    return odd


def _odd_counts(sealed: SealedModel, entry: Input) -> list[float]:
    """Missing, the ends of the type, and on and beyond each limit, as far as the type reaches."""
    missing = missing_count(sealed)
    odd = [missing, missing + 1, -missing - 1, entry.low - 1, entry.low, entry.high, entry.high + 1, 0, -1]
    return [value for value in odd if missing <= value < -missing]
