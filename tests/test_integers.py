"""int16 and int32 from outside: every number its exact value rounded once, the binary point proved the best, sums
driven to their extremes in fixed-width arithmetic, policies, and what cannot be sealed.

All expected values are computed here in rational arithmetic from the trained model, by the definitions, or are two's
complement as Python's `int.to_bytes` and NumPy's fixed-width integers have it.
"""

from __future__ import annotations

import itertools
import math
import random
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from models import (
    ADC,
    CURRENT,
    FLOW,
    IMPELLER,
    PRESSURE,
    SUCTION,
    VALVE,
    WATER,
    Quantity,
    make_request,
    make_trained,
    sample_integer_models,
)

from runtime_min import score
from runtime_min.arithmetic import from_bits, raw_bits
from runtime_min.device_numbers import device_numbers
from runtime_min.errors import SealError
from runtime_min.integer_score import count_bits, missing_count
from runtime_min.model import Counts, DecisionRequest, InputRequest, Score, SealedModel, TrainedModel
from runtime_min.proof import proof
from runtime_min.sealing import datum_of, delivered, fold, prevalence_shift, seal_request, thresholds_of
from runtime_min.sealing_integers import chosen_counts

SAMPLES = sample_integer_models()
ACCUMULATOR = {"int16": 32, "int32": 64}
WEIGHT = {"int16": 16, "int32": 32}
LARGEST_SHIFT = {"int16": 30, "int32": 62}  # with which 1 still fits the accumulator


# --- by the definitions ----------------------------------------------------------------------------------------------


class Exact:
    """A trained model in counts, from the definitions alone: exact intercept at the data, and a slope a count."""

    def __init__(self, trained: TrainedModel, sealed: SealedModel) -> None:
        weights = dict(zip([term.name for term in trained.terms], fold(trained)[0].weights, strict=True))
        self.intercept = fold(trained)[0].intercept + prevalence_shift(trained)
        self.slopes: list[list[Fraction]] = []
        self.datums: list[int] = []
        self.steps: list[tuple[int, int]] = []  # lowest and highest count less datum
        for entry in sealed.inputs:
            if entry.levels:
                self.slopes.append([Fraction(0), *(weights[f"{entry.name}={level}"] for level in entry.levels[1:])])
                self.datums.append(0)
                self.steps.append((0, 0))
                continue
            assert entry.counts is not None
            gain, offset = Fraction(entry.counts.gain), Fraction(entry.counts.offset)
            middle = Fraction(int(entry.low) + int(entry.high), 2)
            datum = round(middle)
            self.slopes.append([weights[entry.name] * gain])
            self.intercept += weights[entry.name] * (offset + gain * datum)
            self.datums.append(datum)
            self.steps.append((int(entry.low) - datum, int(entry.high) - datum))
        self.thresholds = thresholds_of(sealed.about.request.decision)

    def at(self, row: list[int]) -> Fraction:
        """The exact log-odds at a row of counts."""
        z = self.intercept
        for slopes, datum, count in zip(self.slopes, self.datums, row, strict=True):
            z += slopes[count] if len(slopes) > 1 else slopes[0] * (count - datum)
        return z

    def rounded(self, shift: int, bits: int) -> tuple[int, list[tuple[list[int], int]], list[int]]:
        """(intercept, weights and left shift of each input, thresholds) with so many binary places."""
        terms = []
        for slopes in self.slopes:
            exact = [slope * 2**shift for slope in slopes]
            left = 0
            while len(slopes) == 1 and abs(round(exact[0] / 2**left)) > 2 ** (bits - 1) - 1:
                left += 1
            terms.append(([round(value / 2**left) for value in exact], left))
        return round(self.intercept * 2**shift), terms, [round(value * 2**shift) for value in self.thresholds]

    def overflows(self, shift: int, arithmetic: str) -> bool:
        """Whether some figure leaves the accumulator with so many binary places, each extreme walked to by itself."""
        intercept, terms, thresholds = self.rounded(shift, WEIGHT[arithmetic])
        figures = [intercept, *thresholds]
        for sign in (-1, 1):
            z = intercept
            for (weights, left), ends in zip(terms, self.steps, strict=True):
                moves = weights if len(weights) > 1 else [weights[0] * end * 2**left for end in ends]
                z += max(moves, key=lambda move: sign * move)
                figures += [z, *moves]
        return max(map(abs, figures)) > 2 ** (ACCUMULATOR[arithmetic] - 1) - 1


@pytest.mark.parametrize("name", SAMPLES)
def test_every_number_is_its_exact_value_rounded_once(name: str) -> None:
    trained, sealed = SAMPLES[name]
    exact = Exact(trained, sealed)
    intercept, terms, thresholds = exact.rounded(sealed.accumulator_shift or 0, WEIGHT[sealed.arithmetic])
    assert sealed.intercepts == (intercept,)
    assert [sealed.decision.low, sealed.decision.high] == thresholds
    for entry, term, (weights, left), datum in zip(sealed.inputs, sealed.terms, terms, exact.datums, strict=True):
        assert list(term.weights[0]) == weights
        assert term.shift == (None if entry.levels else left)
        assert term.datum == (None if entry.levels else datum)
    assert all(type(number) is int for _, number in device_numbers(sealed))


@pytest.mark.parametrize("name", SAMPLES)
def test_one_binary_place_more_would_overflow(name: str) -> None:
    trained, sealed = SAMPLES[name]
    exact, shift = Exact(trained, sealed), sealed.accumulator_shift
    assert shift is not None
    assert not exact.overflows(shift, sealed.arithmetic)
    assert shift == LARGEST_SHIFT[sealed.arithmetic] or exact.overflows(shift + 1, sealed.arithmetic)
    assert all(step.fits for step in proof(sealed))


def test_samples_end_at_the_widest_and_at_narrower_binary_points() -> None:
    shifts = {sealed.accumulator_shift for _, sealed in SAMPLES.values() if sealed.arithmetic == "int16"}
    assert 30 in shifts
    assert min(shifts) <= 25
    lefts = {term.shift for _, sealed in SAMPLES.values() for term in sealed.terms}
    assert {None, 0, 1} < lefts


# --- no overflow -----------------------------------------------------------------------------------------------------


def walked(sealed: SealedModel, row: list[int]) -> list[int]:
    """Every partial sum as a device of the accumulator's width computes it: NumPy's integers wrap around."""
    kind = np.int32 if sealed.arithmetic == "int16" else np.int64
    with np.errstate(over="ignore"):
        z = np.array([sealed.intercepts[0]], kind)
        sums = [int(z[0])]
        for term in sealed.terms:
            count = row[term.of[0]]
            if term.form == "level":
                move = np.array([term.weights[0][count]], kind)
            else:
                move = np.array([term.weights[0][0]], kind) * np.array([count - int(term.datum or 0)], kind)
                move = move * np.array([2 ** (term.shift or 0)], kind)
            z = z + move
            sums.append(int(z[0]))
    return sums


@pytest.mark.parametrize("name", SAMPLES)
def test_every_partial_sum_reaches_its_proven_extremes_without_overflow(name: str) -> None:
    _, sealed = SAMPLES[name]
    proven = [step for step in proof(sealed) if step.what == "sum"]
    assert len(proven) == len(sealed.inputs)
    for rank in range(len(proven)):
        for extreme in ("lowest", "highest"):
            pick = min if extreme == "lowest" else max
            row = []
            for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
                weights = term.weights[0]
                value = weights.__getitem__ if entry.levels else lambda count, weights=weights: weights[0] * count
                row.append(pick(range(len(entry.levels)) if entry.levels else (entry.low, entry.high), key=value))
            sums = walked(sealed, row)
            assert sums[rank + 1] == getattr(proven[rank], extreme)
            assert sums[-1] == score.log_odds(sealed, row)
    assert all(step.largest < 2 ** (step.bits - 1) for step in proof(sealed))


@pytest.mark.parametrize("arithmetic", ["int16", "int32"])
@given(data=st.data())
@settings(deadline=None, max_examples=60)
def test_fixed_width_arithmetic_gives_log_odds_near_the_exact_ones(arithmetic: str, data: st.DataObject) -> None:
    """The scorer's error is that of its numbers: half a unit of each, times what it multiplies."""
    quantities = data.draw(quantities_of_models())
    weight_sd, no_call = data.draw(st.sampled_from([0.01, 1.0, 50.0])), data.draw(st.sampled_from([None, "0.5"]))
    trained = make_trained(quantities, data.draw(st.integers(0, 10**6)), weight_sd=weight_sd)
    decision = DecisionRequest("1", str(data.draw(st.integers(1, 10**9))), None, no_call)
    sealed = seal_request(trained, make_request(quantities, arithmetic=arithmetic, decision=decision))
    exact, shift = Exact(trained, sealed), sealed.accumulator_shift or 0
    row = [data.draw(st.integers(int(entry.low), int(entry.high))) for entry in sealed.inputs]
    z = score.log_odds(sealed, row)
    assert z == walked(sealed, row)[-1]
    allowed = Fraction(1, 2)
    for count, term in zip(row, sealed.terms, strict=True):
        times = 1 if term.shift is None else abs(count - int(term.datum or 0)) * 2**term.shift
        allowed += Fraction(times, 2)
    assert abs(z - exact.at(row) * 2**shift) <= allowed
    assert exact.overflows(shift + 1, arithmetic) or shift == LARGEST_SHIFT[arithmetic]


@st.composite
def quantities_of_models(draw: st.DrawFn) -> list[Quantity]:
    quantities = []
    for position in range(draw(st.integers(1, 5))):
        name = f"sensor_{position}"
        kind = draw(st.integers(0, 3))
        if kind == 0:
            levels = tuple(f"state_{rank}" for rank in range(draw(st.integers(2, 5))))
            quantities.append(Quantity(name, levels=levels, missing=draw(st.sampled_from(["fault", "typical"]))))
            continue
        policies = draw(st.sampled_from(["fault", "clamp"])), draw(st.sampled_from(["fault", "typical"]))
        low = draw(st.fractions(-1000, 1000, max_denominator=1000))
        width = draw(st.fractions(Fraction(1, 10), 500, max_denominator=1000))
        counts = None
        if kind == 1:
            bits, signed = draw(st.sampled_from([8, 12, 16, 24])), draw(st.booleans())
            offset = low if not signed else low + width / 2
            counts = Counts(bits, str(width / 2**bits * draw(st.sampled_from([-1, 1]))), str(offset), signed, False)
            if not signed and counts.gain[0] == "-":
                counts = replace(counts, offset=str(low + width))
        quantities.append(Quantity(name, "V", str(low), str(low + width), (), *policies, counts=counts))
    return quantities


def test_400_typical_models_stay_within_a_hundredth_in_int16() -> None:
    """Over their whole ranges, not at a few rows: the largest sum of weight rounding and half a count, exactly."""
    rng = random.Random(16)
    worst = Fraction(0)
    for seed in range(400):
        quantities = [_typical(rng, position) for position in range(rng.randint(2, 12))]
        trained = make_trained(quantities, 10_000 + seed)
        sealed = seal_request(trained, make_request(quantities, arithmetic="int16"))
        exact, shift = Exact(trained, sealed), sealed.accumulator_shift or 0
        error = abs(Fraction(sealed.intercepts[0], 2**shift) - exact.intercept)
        for slopes, term, ends in zip(exact.slopes, sealed.terms, exact.steps, strict=True):
            unit = Fraction(2 ** (term.shift or 0), 2**shift)
            off = [abs(weight * unit - slope) for weight, slope in zip(term.weights[0], slopes, strict=True)]
            error += max(off) if len(slopes) > 1 else off[0] * max(-ends[0], ends[1]) + abs(slopes[0]) / 2
        worst = max(worst, error)
    assert worst <= Fraction(1, 100)


def _typical(rng: random.Random, position: int) -> Quantity:
    if rng.random() < 0.2:
        return Quantity(f"sensor_{position}", levels=("shut", "half", "open"))
    low = round(rng.uniform(-200.0, 300.0), 2)
    return Quantity(f"sensor_{position}", "V", str(low), str(round(low + 10.0 ** rng.uniform(-1.0, 3.0), 2)))


# --- counts ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("low", "high", "gain", "offset"),
    [
        ("-95", "250", "1/128", "0"),  # 250 · 128 = 32000; · 256 would not fit
        ("0", "180", "1/128", "0"),
        ("273.15", "323.15", "1/1024", "298"),  # midpoint 298.15 to 8 bits is 298; 25.15 · 1024 = 25753.6
        ("0", "32767.49", "1", "0"),
        ("0", "32767.5", "2", "0"),  # a tie, which would go to 32768
        ("-3", "2.5", "1/8192", "0"),
    ],
)
def test_counts_are_chosen_by_hand(low: str, high: str, gain: str, offset: str) -> None:
    assert chosen_counts(Fraction(low), Fraction(high), 16) == Counts(16, gain, offset, signed=True, chosen=True)


@given(
    st.fractions(-(10**9), 10**9, max_denominator=10**6),
    st.fractions(Fraction(1, 10**6), 10**9, max_denominator=10**6),
    st.sampled_from([16, 32]),
)
def test_chosen_gain_is_the_finest_power_of_two_that_fits(low: Fraction, width: Fraction, bits: int) -> None:
    high = low + width
    counts = chosen_counts(low, high, bits)
    gain, offset = Fraction(counts.gain), Fraction(counts.offset)
    assert gain.numerator & (gain.numerator - 1) == 0 == gain.denominator & (gain.denominator - 1)
    most = 2 ** (bits - 1) - 1
    assert all(abs(round((end - offset) / gain)) <= most for end in (low, high))
    assert any(abs(round((end - offset) / (gain / 2))) > most for end in (low, high))
    assert (offset == 0) == (datum_of(low, high) is None)
    if offset:
        assert abs(offset - (low + high) / 2) <= width / 16
        # Away from zero, 3 of 4 of all counts or more, of one fewer bit, lie within the range.
        assert (high - low) / gain > 2 ** (bits - 2)


def test_a_reading_on_a_limit_is_within_it() -> None:
    """4.1 A is (4.1 - 33.25) · 1024 = -29849.6 counts: the limit is the nearest count too, not the next one inside."""
    quantities = [CURRENT, WATER]
    sealed = seal_request(make_trained(quantities, 4), make_request(quantities, arithmetic="int16"))
    for position, (low, high) in enumerate([("4.1", "62.3"), ("273.15", "323.15")]):
        for text, limit in ((low, "low"), (high, "high")):
            count = delivered(sealed.inputs[position], Fraction(text), "int16")
            assert count == getattr(sealed.inputs[position], limit)
    assert sealed.inputs[0].low == -29850


def test_request_keeps_what_was_asked_and_the_model_what_was_chosen() -> None:
    sealed = SAMPLES["pump_int16"][1]
    assert all(entry.counts is None for entry in sealed.about.request.inputs)
    assert [entry.counts is not None and entry.counts.chosen for entry in sealed.inputs] == [True] * 5 + [False]
    assert not any(entry.counts and entry.counts.chosen for entry in SAMPLES["wide_int32"][1].inputs)


def test_width_of_counts_is_that_of_the_widest_limit() -> None:
    widths = {name: count_bits(sealed) for name, (_, sealed) in SAMPLES.items()}
    assert widths["pump_int16"] == widths["counts_int16"] == 16
    assert widths["wide_int16"] == widths["pump_int32"] == widths["levels_only_int32"] == 32
    model = SAMPLES["counts_int16"][1]
    for low, high, bits in ((-32767, 32767, 16), (-32768, 0, 32), (0, 32768, 32)):
        entry = replace(model.inputs[0], low=low, high=high)
        assert count_bits(replace(model, inputs=(entry, *model.inputs[1:]))) == bits


# --- policies and outputs --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_missing_faults_and_clamping_follow_the_policies(name: str) -> None:
    trained, sealed = SAMPLES[name]
    bits = count_bits(sealed)
    assert missing_count(sealed) == -(2 ** (bits - 1))
    inner = [int(entry.high) for entry in sealed.inputs]
    for position, entry in enumerate(sealed.inputs):

        def at(value: float, position: int = position) -> tuple[int, list[float], list[float], int]:
            return score.outputs(sealed, [*inner[:position], value, *inner[position + 1 :]])

        for missing in (missing_count(sealed), math.nan):
            if entry.missing == "fault":
                assert_fault(sealed, at(missing), position)
            else:
                assert entry.typical is not None
                assert at(missing) == at(entry.typical)
        for beyond, limit in ((entry.low - 1, entry.low), (entry.high + 1, entry.high), (-math.inf, entry.low)):
            if beyond == missing_count(sealed):
                continue
            if entry.outside == "clamp":
                assert at(beyond) == at(limit)
            else:
                assert_fault(sealed, at(beyond), position)
        if entry.high - entry.low > 1:
            assert_fault(sealed, at(entry.low + 0.5), position)
        assert at(float(entry.low)) == at(entry.low)
    assert trained.inputs


def assert_fault(sealed: SealedModel, found: tuple[int, list[float], list[float], int], position: int) -> None:
    least = -(2 ** (ACCUMULATOR[sealed.arithmetic] - 1))
    assert found == (1 + position, [least], [0xFFFF], score.FAULT)


def test_decision_compares_with_both_thresholds() -> None:
    _, sealed = SAMPLES["rare_int16"]
    low, high = int(sealed.decision.low), int(sealed.decision.high)
    assert low < high
    still = tuple(replace(term, weights=tuple((0,) * len(row) for row in term.weights)) for term in sealed.terms)
    row = [entry.low for entry in sealed.inputs]
    for z, decision in ((low - 1, 0), (low, score.NO_CALL), (high - 1, score.NO_CALL), (high, 1)):
        assert score.decide(replace(sealed, terms=still, intercepts=(z,)), row) == decision


@given(st.integers(-(2**31), 2**31 - 1), st.integers(-(2**63), 2**63 - 1))
def test_raw_bits_are_twos_complement_of_the_accumulators_width(narrow: int, wide: int) -> None:
    for number, arithmetic, size in ((narrow, "int16", 4), (wide, "int32", 8)):
        bits = int.from_bytes(number.to_bytes(size, "little", signed=True), "little")
        assert raw_bits(number, arithmetic) == bits
        assert from_bits(bits, arithmetic) == number


# --- what cannot be sealed -------------------------------------------------------------------------------------------


AT_ZERO = DecisionRequest("1", "1", None)


def sentences(quantities: list[Quantity], arithmetic: str, decision: DecisionRequest = AT_ZERO) -> list[str]:
    with pytest.raises(SealError) as caught:
        seal_request(make_trained(quantities, 5), make_request(quantities, arithmetic=arithmetic, decision=decision))
    return [str(problem) for problem in caught.value.problems]


def test_model_that_no_binary_point_carries_is_refused_with_what_is_to_blame() -> None:
    """In int16 with 3 binary places the accumulator ends at 2^28 = 268435456, in int32 at 2^60."""
    trained = make_trained([FLOW, IMPELLER], 5)
    asked = make_request([FLOW, IMPELLER], arithmetic="int16")

    def refused(intercept: float, flow: float, level: float) -> str:
        """Weights for the whole range of flow, which is 0 to 180, and for a level."""
        terms = (replace(trained.terms[0], centre=90.0, scale=180.0), *trained.terms[1:])
        steep = replace(trained, terms=terms, scores=(Score(intercept, (flow, 0.0, level)),))
        with pytest.raises(SealError) as caught:
            seal_request(steep, asked)
        return str(caught.value)

    end = ", and 32 bits hold 268435456 with 3 binary places; "
    assert refused(2.0**40, 1.0, 1.0) == (
        f"intercept: log-odds reach 1.09951e+12 in the middle of the ranges{end}check ranges and rows"
    )
    assert refused(1.0, 8e8, 1.0) == (
        f'input "flow": its weight over half its range comes to log-odds of 4e+8{end}'
        "narrow its range, or choose a stronger prior"
    )
    assert refused(1.0, 1.0, -4e8) == (f'input "impeller": a level of it weighs 4e+8{end}choose a stronger prior')
    found = sentences([IMPELLER], "int32", decision=DecisionRequest(None, None, "1e20"))
    assert found == [
        "decision: found a threshold of 1e+20, and 64 bits hold 1152921504606846976 with 3 binary places; "
        "correct the costs or the threshold"
    ]


def test_threshold_beyond_all_log_odds_costs_binary_places_and_is_never_cut() -> None:
    trained = make_trained([FLOW], 5)
    sealed = seal_request(
        trained, make_request([FLOW], arithmetic="int16", decision=DecisionRequest(None, None, "1e5"))
    )
    assert sealed.accumulator_shift == 14  # 1e5 · 2^14 = 1.6e9 < 2^31
    assert sealed.decision.low == 100000 * 2**14
    assert score.decide(sealed, [sealed.inputs[0].high]) == 0


def test_origin_is_refused_where_the_device_counts() -> None:
    assert sentences([PRESSURE], "int16") == [
        'input "pressure": origin: found 101325, where the device counts; '
        "give counts, whose offset is an origin, or leave it out"
    ]


def test_counts_beyond_a_signed_32_bit_integer_are_refused() -> None:
    wide = replace(ADC, low="0", high="4294967295", counts=Counts(32, "1", "0", False, False))
    for arithmetic in ("int16", "int32"):
        assert sentences([wide], arithmetic) == [
            'input "adc": counts: found counts from 0 to 4294967295, beyond what a signed integer of 32 bits holds; '
            "narrow the range, or drop the lowest bit of the count"
        ]
    half = replace(wide, high="2147483647")
    sealed = seal_request(make_trained([half], 5), make_request([half], arithmetic="int16"))
    assert count_bits(sealed) == 32


def test_samples_cover_chosen_counts_levels_every_policy_and_both_widths() -> None:
    inputs = [entry for _, sealed in SAMPLES.values() for entry in sealed.inputs]
    assert {entry.counts.chosen for entry in inputs if entry.counts} == {True, False}
    kinds = {(bool(entry.levels), entry.outside, entry.missing) for entry in inputs}
    assert kinds > set(itertools.product((False,), ("fault", "clamp"), ("fault", "typical")))
    assert {count_bits(sealed) for _, sealed in SAMPLES.values()} == {16, 32}
    assert {SUCTION.name, VALVE.name} < {entry.name for entry in inputs}
    assert isinstance(SAMPLES["pump_int16"][1].about.request.inputs[0], InputRequest)
