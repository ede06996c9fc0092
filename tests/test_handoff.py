"""HANDOFF.md and coefficients.csv: who has nothing else gets the bits of every vector, and is told what they mean."""

from __future__ import annotations

import csv
import io
import re
from fractions import Fraction

import numpy as np
import pytest
from line_models import HOSTILE, with_text
from models import sample_extended_models, sample_integer_models, sample_sealed_models

from export.coefficients import coefficients_csv
from export.handoff import handoff_md
from export.vectors import make_vectors
from runtime_min.arithmetic import from_bits
from runtime_min.model import SealedModel

FLOATS = {**sample_sealed_models(), **sample_extended_models()}
INTEGERS = sample_integer_models()
WRITE = ("python", "c", "onnx")
Rows = list[dict[str, str]]


def coefficient_rows(sealed: SealedModel) -> Rows:
    return list(csv.DictReader(io.StringIO(coefficients_csv(sealed).decode(), newline="")))


def one(rows: Rows, what: str, name: str = "") -> str | None:
    found = [row["decimal"] for row in rows if (row["what"], row["input"]) == (what, name)]
    assert len(found) <= 1
    return found[0] if found else None


def integer_log_odds(rows: Rows, names: list[str], counts: tuple[float, ...]) -> int:
    """By the words of HANDOFF.md, from coefficients.csv alone."""
    z = int(str(one(rows, "intercept")))
    for name, count in zip(names, counts, strict=True):
        shift = one(rows, "shift left", name)
        if shift is None:
            levels = [int(row["decimal"]) for row in rows if row["what"] == "weight" and row["input"] == name]
            z += levels[int(count)]
            continue
        weight, datum = int(str(one(rows, "weight", name))), int(str(one(rows, "datum", name)))
        z += (int(count) - datum) * weight * 2 ** int(shift)
    return z


def integer_probability(rows: Rows, z: int) -> int:
    nodes = [int(row["decimal"]) for row in rows if row["what"].startswith("table: T[")]
    drop, step = int(str(one(rows, "table: drop"))), int(str(one(rows, "table: step")))
    a = abs(z) >> drop
    i, f = divmod(a, 2**step)
    q = nodes[-1] if i >= len(nodes) - 1 else nodes[i] + (((nodes[i + 1] - nodes[i]) * f + 2 ** (step - 1)) >> step)
    return q if z >= 0 else 32768 - q


@pytest.mark.parametrize("name", INTEGERS)
def test_coefficients_alone_give_the_bits_of_every_vector_in_integers(name: str) -> None:
    _, sealed = INTEGERS[name]
    rows = coefficient_rows(sealed)
    names = [entry.name for entry in sealed.inputs]
    low, high = (int(str(one(rows, f"threshold {end}"))) for end in ("low", "high"))
    tried = 0
    for vector in make_vectors(sealed):
        limits = [(float(str(one(rows, "low", n))), float(str(one(rows, "high", n)))) for n in names]
        if not all(least <= count <= most for count, (least, most) in zip(vector.inputs, limits, strict=True)):
            continue
        z = integer_log_odds(rows, names, vector.inputs)
        assert z == from_bits(vector.expected.log_odds[0], sealed.arithmetic)
        assert integer_probability(rows, z) == vector.expected.probability[0]
        assert vector.expected.decision == (1 if z >= high else 0 if z < low else -1)
        tried += 1
    assert tried > 300


@pytest.mark.parametrize("name", FLOATS)
def test_coefficients_alone_give_the_log_odds_of_every_vector_in_floating_point(name: str) -> None:
    # In NumPy's own binary32 and binary64, from the bits of coefficients.csv.
    _, sealed = FLOATS[name]
    kind = np.float32 if sealed.arithmetic == "binary32" else np.float64
    width = f">u{kind().itemsize}"

    def number(row: dict[str, str]) -> np.floating:
        return np.array(int(row["bits"], 16), width).view(f">f{kind().itemsize}").astype(kind)[()]

    rows = [row for row in coefficient_rows(sealed) if row["bits"]]
    for vector in make_vectors(sealed)[:300]:
        z = next(number(row) for row in rows if row["what"] == "intercept")
        for entry, value in zip(sealed.inputs, vector.inputs, strict=True):
            weights = [number(row) for row in rows if (row["what"], row["input"]) == ("weight", entry.name)]
            if entry.levels:
                z = z + weights[int(value)]
                continue
            data = [number(row) for row in rows if (row["what"], row["input"]) == ("datum", entry.name)]
            z = z + weights[0] * (kind(value) - data[0] if data else kind(value))
        assert float(z) == from_bits(vector.expected.log_odds[0], sealed.arithmetic)


@pytest.mark.parametrize("name", INTEGERS)
def test_bits_of_coefficients_are_the_decimals_in_twos_complement(name: str) -> None:
    for row in coefficient_rows(INTEGERS[name][1]):
        if row["bits"]:
            width = 4 * len(row["bits"])
            assert (int(row["bits"], 16) - int(row["decimal"])) % 2**width == 0
            assert -(2 ** (width - 1)) <= int(row["decimal"]) < 2**width


@pytest.mark.parametrize("name", ["counts_binary32", "counts_int16", "one_input_int16", "pump_int32"])
def test_gain_and_offset_map_counts_to_the_limits_of_the_plan(name: str) -> None:
    _, sealed = {**FLOATS, **INTEGERS}[name]
    rows = coefficient_rows(sealed)
    for entry, asked in zip(sealed.inputs, sealed.about.request.inputs, strict=True):
        if not entry.levels:
            gain, offset = (Fraction(str(one(rows, what, entry.name))) for what in ("gain", "offset"))
            ends = sorted(offset + gain * Fraction(str(one(rows, end, entry.name))) for end in ("low", "high"))
            # The device's own counts end inwards of the range, chosen ones at the nearest count.
            slack = 0 if asked.counts else abs(gain) / 2
            assert Fraction(str(asked.low)) - slack <= ends[0] < Fraction(str(asked.low)) + abs(gain)
            assert Fraction(str(asked.high)) - abs(gain) < ends[1] <= Fraction(str(asked.high)) + slack


def text_of(name: str) -> str:
    trained, sealed = {**FLOATS, **INTEGERS}[name]
    text = handoff_md(sealed, make_vectors(sealed), WRITE, trained.prevalence).decode()
    return text.replace("\\", "")


def test_handoff_says_origin_counts_prevalence_and_no_call_in_words() -> None:
    text = text_of("mixed_binary32")
    assert "* pressure: the value less 101325 Pa, subtracted before it becomes a binary32." in text
    assert "* adc: the device's own counts, unsigned, of 12 bits: value = -95 + 0.1 · count kPa, " in text
    assert "count = round((value + 95) / 0.1)." in text
    assert 'holds where a share of 0.02 of all rows is "cavitating"' in text
    assert "between them −1, no call." in text


def test_handoff_of_integers_says_scaling_proof_and_table() -> None:
    _, sealed = INTEGERS["pump_int16"]
    text = text_of("pump_int16")
    counts = sealed.inputs[0].counts
    assert counts is not None
    assert f"* suction: the scaling that was chosen for it, signed, of {counts.bits} bits: value = " in text
    assert f"in units of 2^−{sealed.accumulator_shift} of log-odds" in text
    assert "-32768, the least of its type, is *missing*" in text
    # The proof's last partial sum, found here from the limits alone.
    least = most = int(sealed.intercepts[0])
    for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
        if entry.levels:
            ends = [int(weight) for weight in term.weights[0]]
        else:
            datum, factor = int(term.datum or 0), int(term.weights[0][0]) * 2 ** int(term.shift or 0)
            ends = [(int(end) - datum) * factor for end in (entry.low, entry.high)]
        least, most = least + min(ends), most + max(ends)
    assert f"| sum | {sealed.inputs[-1].name} | {least} | {most} | 32 |" in text


@pytest.mark.parametrize("name", [*INTEGERS, "mixed_binary64"])
def test_worked_example_ends_with_the_vector_that_it_starts_from(name: str) -> None:
    _, sealed = {**FLOATS, **INTEGERS}[name]
    text = text_of(name)
    first = make_vectors(sealed)[0]
    z = from_bits(first.expected.log_odds[0], sealed.arithmetic)
    steps = re.findall(r"^\| (?:z \+ .*?) \| (\S+) \| (\S+) \|$", text, re.MULTILINE)
    assert float(steps[-1][0]) == pytest.approx(float(z), rel=1e-15)
    assert int(steps[-1][1], 16) == first.expected.log_odds[0]
    assert f"Decision: {first.expected.decision}." in text


@pytest.mark.parametrize("name", ["pump_int16", "counts_binary32"])
def test_hostile_text_stays_where_it_is_written(name: str) -> None:
    _, sealed = {**FLOATS, **INTEGERS}[name]
    plain = handoff_md(sealed, make_vectors(sealed), WRITE).decode()
    for hostile in HOSTILE:
        changed = with_text(sealed, hostile)
        text = handoff_md(changed, make_vectors(sealed), WRITE).decode()
        assert text.count("\n") == plain.count("\n")
        assert not any(c for c in text if not c.isprintable() and c != "\n")
        rows = list(csv.reader(io.StringIO(coefficients_csv(changed).decode(), newline="")))
        assert {len(row) for row in rows} == {6}
