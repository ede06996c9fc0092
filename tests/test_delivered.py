"""What a device delivers that is no plain value: above an origin, as a count; and a field with another share of events.

Sources: `check_values/facts/prior_shift.json` (King and Zeng 2001; Saerens, Latinne and Decaestecker 2002); decimals
and ties worked out by hand; all else in rational arithmetic.
"""

from __future__ import annotations

import csv
import io
import json
import math
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from models import (
    ADC,
    CLOCK,
    COLD,
    FALLING,
    NO_CALL,
    PRESSURE,
    SHUNT,
    SUCTION,
    VALVE,
    WIDE,
    Quantity,
    make_request,
    make_trained,
    sample_extended_models,
)

from runtime_min import score
from runtime_min.__main__ import score_rows
from runtime_min.errors import SealError
from runtime_min.model import Counts, DecisionRequest, Input, Score
from runtime_min.names import c_position_name, delivered_unit, exact_decimal
from runtime_min.sealing import delivered, fold, prevalence_shift, seal_request

FACTS = Path(__file__).parent / "check_values" / "facts"
SHIFTS = json.loads((FACTS / "prior_shift.json").read_text(encoding="utf-8"))["values"]
SAMPLES = sample_extended_models()
DIGITS = {"binary32": 24, "binary64": 53}


# --- names -----------------------------------------------------------------------------------------------------------


def an_input(unit: str, origin: str | None = None, counts: Counts | None = None) -> Input:
    return Input("suction", unit, (), 0.0, 1.0, "fault", "fault", None, origin, counts)


@pytest.mark.parametrize(
    ("entry", "in_c", "in_words"),
    [
        (an_input("kPa"), "SUCTION_KPA", "kPa"),
        (an_input(""), "SUCTION", ""),
        (an_input("kPa", "101.325"), "SUCTION_KPA_ABOVE_101_325", "kPa above 101.325"),
        (an_input("kPa", "4053/40"), "SUCTION_KPA_ABOVE_101_325", "kPa above 101.325"),
        (an_input("°C", "-40"), "SUCTION_DEG_C_ABOVE_MINUS_40", "°C above -40"),
        (an_input("", "1.7e9"), "SUCTION_ABOVE_1700000000", "above 1700000000"),
        (an_input("s", "1/3"), "SUCTION_S_ABOVE_1_OVER_3", "s above 1/3"),
        (an_input("s", "-2.5e-30"), "SUCTION_S_ABOVE_MINUS_2_5E_MINUS_30", "s above -2.5e-30"),
        (an_input("kPa", None, Counts(12, "0.1", "-95", False, False)), "SUCTION_COUNTS", "counts of 0.1 kPa from -95"),
        (an_input("", None, Counts(12, "1/1024", "0", True, True)), "SUCTION_COUNTS", "counts of 0.0009765625 from 0"),
    ],
)
def test_delivered_quantity_shows_in_its_names(entry: Input, in_c: str, in_words: str) -> None:
    assert c_position_name(entry) == in_c
    assert delivered_unit(entry) == in_words


@given(st.fractions())
def test_exact_decimal_loses_nothing(value: Fraction) -> None:
    assert Fraction(exact_decimal(value)) == value


@given(st.integers(-(10**6), 10**6), st.integers(-300, 300))
def test_exact_decimal_of_decimals_is_one_and_short(digits: int, exponent: int) -> None:
    value = Fraction(digits) * Fraction(10) ** exponent
    assert "/" not in exact_decimal(value)
    assert len(exact_decimal(value)) <= 26
    assert Fraction(exact_decimal(value)) == value


# --- another share of events in the field ----------------------------------------------------------------------------


@pytest.mark.parametrize("case", SHIFTS, ids=lambda case: f"{case['training_share']} to {case['population_share']}")
def test_prevalence_gives_the_published_correction(case: dict[str, Any]) -> None:
    """With weights of zero the model's probability is that of its intercept, before and after."""
    share = Fraction(case["training_share"])
    trained = make_trained([Quantity("flow", "", "0", "1")], 1)
    trained = replace(
        trained,
        class_weights=(float(share.denominator - share.numerator), float(share.numerator)),
        scores=(Score(float(case["log_odds_before"]), (0.0,)),),
        prevalence=case["population_share"],
    )
    assert abs(prevalence_shift(trained) + Fraction(case["subtract_from_intercept"])) < Fraction(1, 10**24)
    sealed = seal_request(trained, make_request([Quantity("flow", "", "0", "1")], arithmetic="binary64"))
    assert abs(sealed.intercepts[0] - float(case["log_odds_after"])) <= 2e-15
    assert abs(score.probability(sealed, [0.5]) - float(Fraction(case["corrected"]))) <= 1e-15


def test_without_a_prevalence_nothing_shifts() -> None:
    assert prevalence_shift(make_trained([SUCTION], 1)) == 0


# --- the device against the trained model ----------------------------------------------------------------------------


@given(st.sampled_from(sorted(SAMPLES)), st.data())
@settings(deadline=None)
def test_device_log_odds_are_the_exact_ones_but_for_rounding(name: str, data: st.DataObject) -> None:
    """The bound of `test_sealing`: p + 4 roundings, u each; sizes are those of what the device delivers.

    The log-odds are those of the value in the plan's unit, an exact rational, as the trained model has it.
    """
    trained, sealed = SAMPLES[name]
    exact = fold(trained)[0].intercept + prevalence_shift(trained)
    size = abs(Fraction(sealed.intercepts[0]))
    weights = dict(zip([term.name for term in trained.terms], fold(trained)[0].weights, strict=True))
    row = []
    for position, (entry, asked) in enumerate(zip(sealed.inputs, sealed.about.request.inputs, strict=True)):
        if entry.levels:
            level = data.draw(st.integers(0, len(entry.levels) - 1))
            row.append(float(level))
            weight = weights.get(f"{entry.name}={entry.levels[level]}", Fraction(0))
            exact, size = exact + weight, size + abs(weight)
            continue
        if entry.counts is not None:
            count = data.draw(st.integers(int(entry.low), int(entry.high)))
            value = Fraction(entry.counts.offset) + Fraction(entry.counts.gain) * count
            assert delivered(entry, value, sealed.arithmetic) == count
            gain, device = Fraction(entry.counts.gain), Fraction(count)
        else:
            low, high = Fraction(str(asked.low)), Fraction(str(asked.high))
            value = low + (high - low) * data.draw(st.fractions(0, 1, max_denominator=10**12))
            gain, device = Fraction(1), value - Fraction(entry.origin or 0)
        found = delivered(entry, value, sealed.arithmetic)
        row.append(min(max(found, entry.low), entry.high))
        weight = weights[entry.name]
        exact += weight * value
        size += abs(weight * gain) * (abs(device) + abs(Fraction(sealed.terms[position].datum or 0)))
    u = Fraction(1, 2 ** DIGITS[sealed.arithmetic])
    error = abs(Fraction(score.log_odds(sealed, row)) - exact)
    assert error <= (len(row) + 4) * u * size * Fraction(101, 100)


def test_origin_lets_binary32_tell_seconds_apart() -> None:
    """Near 1.65e9 the neighbours of binary32 are 128 seconds apart (IEEE 754: 24 bits, 2^30 < 1.65e9 < 2^31)."""
    trained, sealed = SAMPLES["origins_binary32"]
    entry = sealed.inputs[1]
    one, other = (delivered(entry, Fraction(second), "binary32") for second in (1650000001, 1650000002))
    assert (one, other) == (1.0, 2.0)
    assert np.float32(1650000001) == np.float32(1650000002)
    assert trained.inputs[1].name == "clock"


def test_delivered_value_is_the_exact_difference_rounded_once() -> None:
    """101.425 - 101.325 is 0.1, whose binary64 is 0.1; the difference of the two binary64 is another number."""
    entry = an_input("kPa", "101.325")
    assert delivered(entry, Fraction("101.425"), "binary64") == 0.1 != 101.425 - 101.325
    assert delivered(entry, Fraction("101.425"), "binary32") == float(np.float32(0.1))
    assert delivered(entry, Fraction(10) ** 400, "binary64") == math.inf


@pytest.mark.parametrize(
    ("value", "count"), [("0.5", 0), ("1.5", 2), ("2.5", 2), ("-0.5", 0), ("-1.5", -2), ("7.51", 8)]
)
def test_delivered_count_is_the_nearest_with_ties_to_even(value: str, count: int) -> None:
    entry = an_input("V", None, Counts(12, "1", "0", True, False))
    for arithmetic in ("binary32", "binary64", "int16", "int32"):
        found = delivered(entry, Fraction(value), arithmetic)
        assert found == count
        assert isinstance(found, int) == arithmetic.startswith("int")


def test_limits_of_counts_are_those_inside_the_range_and_the_bits() -> None:
    """-95 + 0.1 n within -95 to 250 is n from 0 to 3450; 95.5 - 0.11 n within -10 to 85 is n from 95.45 to 959.1."""
    inputs = {entry.name: entry for entry in SAMPLES["counts_binary64"][1].inputs}
    assert (inputs["adc"].low, inputs["adc"].high) == (0.0, 3450.0)
    assert (inputs["falling"].low, inputs["falling"].high) == (96.0, 959.0)
    assert (inputs["shunt"].low, inputs["shunt"].high) == (-24576.0, 20480.0)
    cut = replace(ADC, high="1000")
    sealed = seal_request(make_trained([cut], 1), make_request([cut]))
    assert (sealed.inputs[0].low, sealed.inputs[0].high) == (0.0, 4095.0)


def test_typical_count_stands_in_for_a_missing_one() -> None:
    trained, sealed = SAMPLES["counts_binary32"]
    position = [entry.name for entry in sealed.inputs].index("shunt")
    typical = Fraction(trained.inputs[position].typical or 0) * 8192
    assert sealed.inputs[position].typical == round(typical)
    row = [entry.low for entry in sealed.inputs]
    with_nan = [*row[:position], math.nan, *row[position + 1 :]]
    with_typical = [*row[:position], float(round(typical)), *row[position + 1 :]]
    assert score.log_odds(sealed, with_nan) == score.log_odds(sealed, with_typical)


def test_missing_level_is_the_commonest_one() -> None:
    trained, sealed = SAMPLES["mixed_binary32"]
    row = [entry.low for entry in sealed.inputs]
    assert sealed.inputs[3].name == VALVE.name
    typical = float(trained.inputs[3].typical or 0)
    assert score.log_odds(sealed, [*row[:3], math.nan]) == score.log_odds(sealed, [*row[:3], typical])
    assert score.check_inputs(sealed, [*row[:3], math.nan]) == 0


def test_no_call_lies_on_both_sides_of_the_threshold() -> None:
    """ln(1/25) = -3.2188758 and 0.75 on each side; the lower limit itself is no call, the upper is the event."""
    _, sealed = SAMPLES["mixed_binary64"]
    assert (sealed.decision.low, sealed.decision.high) == (-3.9688758248682006, -2.4688758248682006)
    _, sealed = SAMPLES["undecided_binary64"]
    assert (sealed.decision.low, sealed.decision.high) == (-0.9, 1.1)
    for z, decision in ((-0.9, score.NO_CALL), (math.nextafter(-0.9, -1), 0), (1.1, 1), (math.nextafter(1.1, 0), -1)):
        terms = (replace(term, weights=tuple((0.0,) * len(row) for row in term.weights)) for term in sealed.terms)
        flat = replace(sealed, intercepts=(z,), terms=tuple(terms))
        assert score.decide(flat, [10.0, 0.0]) == decision


# --- what cannot be sealed -------------------------------------------------------------------------------------------


def sentences(*quantities: Quantity, decision: DecisionRequest = NO_CALL, prevalence: str | None = None) -> list[str]:
    plain = [replace(quantity, origin=None, counts=None) for quantity in quantities]
    trained = replace(make_trained(plain, 5), prevalence=prevalence)
    with pytest.raises(SealError) as caught:
        seal_request(trained, make_request(quantities, decision=decision))
    return [str(problem) for problem in caught.value.problems]


def test_every_mistake_of_a_request_is_named_at_once() -> None:
    found = sentences(
        replace(ADC, origin="1"),
        replace(SHUNT, counts=Counts(40, "0", "x", True, False)),
        replace(VALVE, origin="1"),
        decision=DecisionRequest("1", "25", None, "-1"),
        prevalence="1",
    )
    exact = 'a number as a text like "-95", "0.1" or "1/10"'
    assert found == [
        f'decision.no_call: found "-1"; expected {exact}, 0 or more',
        'prevalence: found "1"; expected a share between 0 and 1',
        'input "adc": counts: found beside an origin; keep one of the two: the offset of counts is an origin',
        'input "shunt": counts.bits: found 40; expected 2 to 32',
        f'input "shunt": counts.gain: found "0"; expected {exact}, other than 0',
        f'input "shunt": counts.offset: found "x"; expected {exact}',
        'input "valve": origin: found beside levels; leave it out',
    ]


def test_range_without_counts_is_named_with_what_the_counts_mean() -> None:
    assert sentences(replace(ADC, low="400", high="500")) == [
        'input "adc": counts: the range 400 to 500 holds no count; from 0 to 4095 they mean -95 to 314.5; '
        "correct the range or the counts"
    ]
    assert sentences(replace(ADC, low="-95", high="-94.95")) == [
        'input "adc": counts: the range -95 to -94.95 holds only the count 0; from 0 to 4095 they mean -95 to 314.5; '
        "correct the range or the counts"
    ]


def test_counts_that_binary32_skips_are_refused() -> None:
    """From 2^24 on binary32 has even numbers only."""
    wide = replace(WIDE, low="0", high="3355.4427", counts=Counts(25, "0.0002", "0", False, False))
    assert sentences(replace(wide, high="3355.4432")) == [
        'input "wide": counts: found counts from 0 to 16777216, beyond 2^24, where binary32 skips some; '
        "narrow the range, or choose binary64"
    ]
    assert seal_request(make_trained([wide], 5), make_request([wide])).inputs[0].high == 16777213.0
    wider = replace(wide, high="3355.4432")
    sealed = seal_request(make_trained([wider], 5), make_request([wider], arithmetic="binary64"))
    assert sealed.inputs[0].high == 2.0**24


def test_inputs_that_c_cannot_tell_apart_are_named() -> None:
    twin = Quantity("adc_counts", "", "0", "1")
    found = sentences(ADC, twin)
    assert found == [
        'model.inputs: found the inputs "adc" and "adc_counts", both ADC_COUNTS in C; '
        "choose another name for one of them"
    ]


# --- a CSV in plan units ---------------------------------------------------------------------------------------------


def scored(folder: Path, name: str, lines: list[str]) -> list[dict[str, str]]:
    path = folder / "rows.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    out = io.StringIO()
    score_rows(SAMPLES[name][1], path, out)
    return list(csv.DictReader(io.StringIO(out.getvalue())))


def test_csv_of_plan_units_is_converted_as_the_device_does(tmp_path: Path) -> None:
    _, sealed = SAMPLES["mixed_binary32"]
    rows = ["pressure,adc,flow,valve", "101325.1,-94.95,20,shut", "101325.1,-94.94,20,", " 101325.1,1e2,2e1,2"]
    device = [[float(np.float32(0.1)), 0.0, 20.0, 0.0], [float(np.float32(0.1)), 1.0, 20.0, math.nan]]
    device.append([float(np.float32(0.1)), 1950.0, 20.0, 2.0])
    found = scored(tmp_path, "mixed_binary32", rows)
    for line, row in zip(found, device, strict=True):
        assert line["log_odds"] == repr(score.log_odds(sealed, row))
        assert line["decision"] == str(score.decide(sealed, row))
    assert [line["adc"] for line in found] == ["-94.95", "-94.94", "100.0"]


@pytest.mark.parametrize(
    ("field", "fault"),
    [("1e30000000", True), ("1e-30000000", False), ("1e400", True), ("inf", True), ("0" * 9000 + "1", False)],
)
def test_csv_number_of_any_exponent_is_read_at_once(field: str, fault: bool, tmp_path: Path) -> None:
    found = scored(tmp_path, "mixed_binary32", ["pressure,adc,flow,valve", f"101325,{field},20,shut"])
    assert (found[0]["decision"] == "-2") is fault


def test_samples_cover_origins_counts_prevalence_and_no_call() -> None:
    inputs = [entry for _, sealed in SAMPLES.values() for entry in sealed.inputs]
    assert {entry.name for entry in inputs if entry.origin} == {q.name for q in (PRESSURE, CLOCK, COLD)}
    assert {entry.name for entry in inputs if entry.counts} == {q.name for q in (ADC, SHUNT, FALLING, WIDE)}
    assert {trained.prevalence for trained, _ in SAMPLES.values()} == {None, "0.02", "1/1000"}
    assert any(sealed.decision.low < sealed.decision.high for _, sealed in SAMPLES.values())
