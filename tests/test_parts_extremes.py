"""Integers on emulated parts: the accumulator driven to its proven extremes, in both directions and at every step.

Expected values: the sum computed here in unbounded integers, from the sealed numbers alone.
"""

from __future__ import annotations

from pathlib import Path

import pytest
from c_programs import header
from models import sample_integer_models

from export.parts import PARTS, Part
from export.parts.run import run_part
from runtime_min.arithmetic import ACCUMULATOR_BITS, raw_bits
from runtime_min.model import SealedModel, Term
from runtime_min.proof import proof

MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}


def reach(sealed: SealedModel, term: Term) -> list[tuple[int, int]]:
    """What a term adds to the accumulator at each end of its input (each level), with that count."""
    entry = sealed.inputs[term.of[0]]
    if term.form == "level":
        return [(int(weight), level) for level, weight in enumerate(term.weights[0])]
    counts = int(entry.low), int(entry.high)
    datum, shift = int(term.datum or 0), int(term.shift or 0)
    return [(int(term.weights[0][0]) * (count - datum) * 2**shift, count) for count in counts]


def extreme_rows(sealed: SealedModel) -> list[tuple[tuple[int, ...], int]]:
    """Rows with their sums: all terms least, all greatest, and up to each term the one with the others turned round."""
    chosen = []
    for turned in range(len(sealed.terms) + 1):
        for first, then in ((min, max), (max, min)):
            row, total = [0] * len(sealed.inputs), int(sealed.intercepts[0])
            for position, term in enumerate(sealed.terms):
                added, count = (first if position < turned else then)(reach(sealed, term))
                row[term.of[0]] = count
                total += added
            chosen.append((tuple(row), total))
    return chosen


@pytest.mark.parametrize("part", PARTS.values(), ids=PARTS)
@pytest.mark.parametrize("name", MODELS)
def test_accumulator_reaches_its_proven_extremes_on_the_part(name: str, part: Part, tmp_path: Path) -> None:
    missing = part.missing()
    if missing:
        pytest.skip(f"{part.name}: {missing}")
    sealed = MODELS[name]
    rows = extreme_rows(sealed)
    last = [step for step in proof(sealed) if step.what == "sum"][-1]
    assert {min(total for _, total in rows), max(total for _, total in rows)} == {last.lowest, last.highest}
    assert last.largest < 2 ** (ACCUMULATOR_BITS[sealed.arithmetic] - 1)
    (tmp_path / "model.h").write_text(header(sealed))
    (run,) = run_part(part, tmp_path / "model.h", sealed, [row for row, _ in rows])
    assert (run.trouble, run.self_test) == (None, 0)
    decisions = [1 if z >= sealed.decision.high else 0 if z < sealed.decision.low else -1 for _, z in rows]
    found = [(output.fault, *output.log_odds, output.decision) for output in run.outputs]
    assert found == [
        (0, raw_bits(total, sealed.arithmetic), decision) for (_, total), decision in zip(rows, decisions, strict=True)
    ]
