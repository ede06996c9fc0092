"""Where an artefact's outputs part from the vectors, and what that points at, in one sentence.

The sentence says what is seen first: the number of rows, the first of them, what differs there. Then what such a
pattern comes from: a range, a comparison, the intercept, one weight, the logistic function, or rounding alone.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from export.targets import Output, Vector
from export.vector_files import forms_of
from runtime_min import arithmetic, score
from runtime_min.model import INTEGERS, SealedModel

# A log-odds difference of so few units in the last place, on a part of the rows, is rounding and not a wrong number.
ROUNDING_ULPS = 4

# What 16-bit integers lose when they wrap; wider ones lose multiples of it.
WRAPPED = 2**16


def differences(sealed: SealedModel, vectors: Sequence[Vector], outputs: Sequence[Output]) -> tuple[int, str]:
    """How many rows differ from the vectors, and the sentence; (0, "") where all bits are the same."""
    if len(outputs) != len(vectors):
        return max(abs(len(outputs) - len(vectors)), 1), f"found {len(outputs)} results for {len(vectors)} rows"
    wrong = [row for row in range(len(vectors)) if _parts(vectors[row].expected, outputs[row])]
    if not wrong:
        return 0, ""
    first = wrong[0]
    want, have = vectors[first].expected, outputs[first]
    part = _parts(want, have)[0]
    shown = f"{part} is {_shown(have, part, sealed)}, expected {_shown(want, part, sealed)}"
    seen = f"{len(wrong)} of {len(vectors)} rows differ, first line {first + 2} ({vectors[first].kind}): {shown}"
    cause = _cause(sealed, vectors, outputs, wrong)
    return len(wrong), f"{seen}; {cause}" if cause else seen


def _parts(want: Output, have: Output) -> list[str]:
    """Which parts differ. A fault of -1 means that the artefact does not say."""
    names = ("fault", "log_odds", "probability", "decision")
    return [
        name
        for name in names
        if getattr(want, name) != getattr(have, name) and not (name == "fault" and have.fault == -1)
    ]


def _shown(output: Output, part: str, sealed: SealedModel) -> str:
    value = getattr(output, part)
    if isinstance(value, int):
        return str(value)
    number = arithmetic.from_bits(value[0], sealed.arithmetic)
    form = getattr(forms_of(sealed), part)
    return f"{number!r} ({form.bits(number)})"


def _cause(sealed: SealedModel, vectors: Sequence[Vector], outputs: Sequence[Output], wrong: Sequence[int]) -> str:
    parts = {part for row in wrong for part in _parts(vectors[row].expected, outputs[row])}
    faulted = [
        row
        for row in wrong
        if (vectors[row].expected.decision == score.FAULT) != (outputs[row].decision == score.FAULT)
    ]
    if faulted:
        return _range_cause(sealed, [vectors[row] for row in faulted], outputs[faulted[0]])
    if parts == {"fault"}:
        return "the position of the faulty input is reported wrongly"
    if parts == {"decision"}:
        at = {sealed.decision.low, sealed.decision.high}
        on = all(arithmetic.from_bits(vectors[row].expected.log_odds[0], sealed.arithmetic) in at for row in wrong)
        where = "only rows exactly on the threshold: look at the comparison" if on else "look at the thresholds"
        return f"log-odds and probability agree; {where}"
    if "log_odds" not in parts:
        looked_at = "the table and its interpolation" if sealed.table else "the exponential and the logistic function"
        return f"log-odds agree; look at {looked_at}"
    return _log_odds_cause(sealed, vectors, outputs)


def _range_cause(sealed: SealedModel, faulted: Sequence[Vector], have: Output) -> str:
    """The input that makes one side fault and not the other, in the first of these rows.

    Where neither side says which, it is the one whose values lie closest together in all of them, as beside one limit.
    """
    vector = faulted[0]
    fault = vector.expected.fault or max(have.fault, 0)
    if fault:
        position = fault - 1
    else:
        spreads = []
        for at, entry in enumerate(sealed.inputs):
            values = [row.inputs[at] for row in faulted if math.isfinite(row.inputs[at])]
            spreads.append((max(values) - min(values)) / (entry.high - entry.low) if values else 0.0)
        position = spreads.index(min(spreads))
    entry, value = sealed.inputs[position], vector.inputs[position]
    return f'look at how input "{entry.name}" = {value!r} is held against {entry.low!r} to {entry.high!r}'


def _log_odds_cause(sealed: SealedModel, vectors: Sequence[Vector], outputs: Sequence[Output]) -> str:
    """Least squares of the log-odds differences on the terms tells which number is off."""
    rows, deltas, ulps = [], [], []
    for vector, output in zip(vectors, outputs, strict=True):
        fault, values = score.prepared(sealed, vector.inputs)
        if fault:
            continue
        want = arithmetic.from_bits(vector.expected.log_odds[0], sealed.arithmetic)
        delta = arithmetic.from_bits(output.log_odds[0], sealed.arithmetic) - want
        if not math.isfinite(delta):
            return "the artefact's log-odds are not finite"
        rows.append(_columns(sealed, values))
        deltas.append(delta)
        ulps.append(abs(delta) / _last_place(sealed, rows[-1]))
    names = _column_names(sealed)
    table, target = np.array(rows), np.array(deltas, np.float64)
    sizes = np.maximum(np.abs(table).max(axis=0), 1e-300)
    solution = np.linalg.lstsq(table / sizes, target, rcond=1e-10)[0]
    effects = np.abs(solution)
    rest = target - (table / sizes) @ solution
    explained = float(np.sum(rest**2)) <= 0.05 * float(np.sum(target**2))
    if explained:
        order = [int(at) for at in np.argsort(-effects) if effects[at] > 0.02 * effects.max()]
        named = [names[at] for at in order[:3]]
        return "the differences follow " + " and ".join(named)
    if sealed.arithmetic in INTEGERS:
        return _integer_cause(sealed, table, [int(delta) for delta in deltas])
    if max(ulps) <= ROUNDING_ULPS * len(sealed.terms):
        return (
            f"differences of at most {max(ulps):.0f} in the last place of the largest sum: a last digit of a number is "
            "off, or operations are fused or not rounded one by one (look at the literals and the compiler's options)"
        )
    return "no single number explains the differences: look at the order of the terms and at how inputs are prepared"


def _integer_cause(sealed: SealedModel, table: npt.NDArray[np.float64], deltas: Sequence[int]) -> str:
    """Of differences that follow no number: a lost sign shows in the rows that have one, wrapped integers are off by
    multiples of a high power of two. table (rows, columns of the terms): counts less their datums."""
    differs, terms = np.array([delta != 0 for delta in deltas]), len(sealed.terms)
    column = 1
    for term in sealed.terms:
        negative = table[:, column] + (term.datum or 0) < 0
        # Not quite all: the stand-in of a missing value may be negative, and another input below a range.
        if term.form == "value" and negative.any() and (differs != negative).sum() < 0.1 * negative.sum():
            name = sealed.inputs[term.of[0]].name
            return f'the rows where "{name}" is negative differ: look at how its sign is extended'
        column += len(term.weights[0]) - 1 if term.form == "level" else 1
    if math.gcd(*deltas) % WRAPPED == 0:
        return f"all differences are multiples of {WRAPPED}: an integer overflows (look at the widths of the products)"
    if max(map(abs, deltas)) <= terms:
        return f"differences of at most {max(map(abs, deltas))} units: a shift rounds where nothing is to be rounded"
    return "no single number explains the differences: look at the shifts, the signs, and how inputs are prepared"


def _last_place(sealed: SealedModel, columns: Sequence[float]) -> float:
    """A unit in the last place of the largest sum; in integers the accumulator's."""
    if sealed.arithmetic in INTEGERS:
        return 1.0
    largest = _largest_partial_sum(sealed, columns)
    return float(np.spacing(np.float32(largest) if sealed.arithmetic == "binary32" else np.float64(largest)))


def _columns(sealed: SealedModel, values: Sequence[float]) -> list[float]:
    columns = [1.0]
    for term in sealed.terms:
        value = values[term.of[0]]
        if term.form == "level":
            columns += [float(value == level) for level in range(1, len(term.weights[0]))]
        else:
            columns.append(value - (term.datum or 0.0))
    return columns


def _largest_partial_sum(sealed: SealedModel, columns: Sequence[float]) -> float:
    """The sums on the way to the log-odds may be larger than it, and so are their roundings."""
    weights = [sealed.intercepts[0]]
    for term in sealed.terms:
        weights += term.weights[0][1:] if term.form == "level" else term.weights[0]
    partial = np.add.accumulate(np.array(weights) * np.array(columns))
    return float(np.abs(partial).max())


def _column_names(sealed: SealedModel) -> list[str]:
    names = ["the intercept"]
    for term in sealed.terms:
        entry = sealed.inputs[term.of[0]]
        if term.form == "level":
            names += [f'the weight of "{entry.name}" level {level}' for level in range(1, len(entry.levels))]
        else:
            names.append(f'the weight of "{entry.name}"')
    return names
