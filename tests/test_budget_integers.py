"""The error budget in integers: derived by hand, never exceeded, reached, and broken where it lacks an item."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from models import ADC, FALLING, IMPELLER, VALVE, Quantity, make_request, make_trained, sample_integer_models

from export.attack import attack, error_at
from export.budget import Budget, derive
from export.exact import log_odds_of
from export.witness import witness_misses
from runtime_min import score
from runtime_min.arithmetic import ACCUMULATOR_BITS
from runtime_min.model import INTEGERS, Counts, DecisionRequest, Score, SealedModel, TrainedModel
from runtime_min.proof import proof
from runtime_min.sealing import seal_request

SAMPLES = sample_integer_models()
Pair = tuple[TrainedModel, SealedModel]
AT_ZERO = DecisionRequest(None, None, "0")


def line(quantity: Quantity, weight: float, intercept: float = 0.0, arithmetic: str = "int16") -> Pair:
    """Trained log-odds intercept + weight * value of one input."""
    trained = make_trained([quantity], 1)
    trained = replace(
        trained,
        terms=(replace(trained.terms[0], centre=0.0, scale=1.0),),
        scores=(Score(intercept, (weight,)),),
        witness=(),
    )
    return trained, seal_request(trained, make_request([quantity], arithmetic=arithmetic, decision=AT_ZERO))


def counted(low: str, high: str, **counts: object) -> Quantity:
    given = {"bits": 12, "gain": "1", "offset": "0", "signed": True, "chosen": False, **counts}
    return Quantity("x", "kPa", low, high, counts=Counts(**given))  # type: ignore[arg-type]


def bounds(budget: Budget) -> dict[str, Fraction]:
    return {item.kind: item.bound for item in budget.items}


# --- derived by hand --------------------------------------------------------------------------------------------------


def test_counts_of_the_plan_cost_the_rounding_of_the_weight_alone() -> None:
    # 1/3 is a binary64 number near a third; sealed as u 2^(s - S), to half a unit of 2^(s - S).
    trained, sealed = line(counted("-1000", "1000"), 1 / 3)
    term = sealed.terms[0]
    assert term.datum == 0
    unit = Fraction(2) ** (int(term.shift or 0) - int(sealed.accumulator_shift or 0))
    off = abs(term.weights[0][0] * unit - Fraction(1 / 3))
    assert 0 < off <= unit / 2
    assert bounds(derive(trained, sealed)) == {"weight": 1000 * off}


def test_chosen_counts_cost_half_a_count_times_the_weight() -> None:
    # -100 to 100 in 15 bits and a sign: counts of 2^-8 kPa; the weight 2 is exact.
    trained, sealed = line(Quantity("x", "kPa", "-100", "100"), 2.0)
    assert sealed.inputs[0].counts is not None
    assert sealed.inputs[0].counts.gain == "1/256"
    assert bounds(derive(trained, sealed)) == {"input": Fraction(1, 256)}


def test_intercept_costs_its_rounding_to_a_unit_of_the_accumulator() -> None:
    trained, sealed = line(counted("-1000", "1000", gain="1/1024"), 0.5, intercept=1 / 3)
    unit = Fraction(1, 2 ** int(sealed.accumulator_shift or 0))
    assert bounds(derive(trained, sealed)) == {"mid-range": abs(round(Fraction(1 / 3) / unit) * unit - Fraction(1 / 3))}


def test_levels_cost_the_rounding_of_each_to_a_unit_of_the_accumulator() -> None:
    trained = make_trained([IMPELLER], 3)
    trained = replace(trained, scores=(replace(trained.scores[0], intercept=0.0, weights=(1 / 3, 1 / 7)),))
    sealed = seal_request(trained, make_request([IMPELLER], arithmetic="int16"))
    unit = Fraction(1, 2 ** int(sealed.accumulator_shift or 0))
    off = [Fraction(0), *(round(Fraction(w) / unit) * unit - Fraction(w) for w in (1 / 3, 1 / 7))]
    half, middle = (max(off) - min(off)) / 2, abs(max(off) + min(off)) / 2
    assert bounds(derive(trained, sealed)) == {"mid-range": middle, "weight": half}


def test_threshold_costs_its_rounding_to_a_unit_of_the_accumulator() -> None:
    quantity = counted("-1000", "1000")
    trained, _ = line(quantity, 0.01)
    request = make_request([quantity], arithmetic="int16", decision=DecisionRequest("1", "3", None))
    sealed = seal_request(trained, request)
    with mpmath.workdps(40):
        units = mpmath.log(mpmath.mpf(1) / 3) * 2 ** int(sealed.accumulator_shift or 0)
        off = abs(mpmath.nint(units) - units) / 2 ** int(sealed.accumulator_shift or 0)
        found = derive(trained, sealed).threshold
        assert abs(mpmath.mpf(found.numerator) / found.denominator - off) < mpmath.mpf(10) ** -30


# --- never exceeded, and reached --------------------------------------------------------------------------------------


@st.composite
def models(draw: st.DrawFn) -> Pair:
    """One to five inputs: counts of the plan (signed, unsigned, falling), counts to be chosen, levels."""
    quantities = []
    for position in range(draw(st.integers(1, 5))):
        kind = draw(st.integers(0, 3))
        if kind == 0:
            levels = tuple(f"l{rank}" for rank in range(draw(st.integers(2, 5))))
            quantities.append(Quantity(f"q{position}", levels=levels))
            continue
        low, width = draw(st.decimals(-1000, 1000, places=3)), draw(st.decimals("0.5", 100_000, places=3))
        counts = None
        if kind > 1:
            bits, signed = draw(st.integers(4, 16)), draw(st.booleans())
            gain = Fraction(width) / 2 ** (bits - 1) * draw(st.sampled_from((1, -1)))
            middle = 0 if signed else 2 ** (bits - 1)
            counts = Counts(bits, str(gain), str(Fraction(low + width / 2) - gain * middle), signed, False)
        quantities.append(Quantity(f"q{position}", "", str(low), str(low + width), counts=counts))
    prevalence = draw(st.sampled_from((None, "0.02", "1/3")))
    weight_sd = draw(st.sampled_from((0.01, 1.0, 20.0)))
    trained = make_trained(quantities, draw(st.integers(0, 2**32)), weight_sd=weight_sd, prevalence=prevalence)
    return trained, seal_request(trained, make_request(quantities, arithmetic=draw(st.sampled_from(INTEGERS))))


@settings(max_examples=150, deadline=None)
@given(models(), st.data())
def test_no_real_input_errs_by_more_than_the_budget(pair: Pair, data: st.DataObject) -> None:
    trained, sealed = pair
    budget = derive(trained, sealed)
    for _ in range(10):
        reals = []
        for entry in sealed.inputs:
            count = data.draw(st.integers(int(entry.low), int(entry.high)))
            chosen = entry.counts is not None and entry.counts.chosen
            # A tie goes to the even count.
            reals.append(count + (data.draw(st.fractions("-0.49", "0.49")) if chosen else Fraction(0)))
        assert error_at(trained, sealed, reals) <= budget.log_odds


@settings(max_examples=60, deadline=None)
@given(models())
def test_budget_is_what_the_worst_corner_errs_by(pair: Pair) -> None:
    # The error is linear: its largest magnitude is found by trying every corner, in rationals.
    trained, sealed = pair
    ends = []
    for entry in sealed.inputs:
        half = Fraction(1, 2) if entry.counts is not None and entry.counts.chosen else Fraction(0)
        if entry.levels:
            ends.append([(Fraction(level), level) for level in range(len(entry.levels))])
        else:
            limits = (int(entry.low), int(entry.high))
            ends.append([(limit + sign * half, limit) for limit in limits for sign in (1, -1)])
    unit = Fraction(1, 2 ** int(sealed.accumulator_shift or 0))
    worst = Fraction(0)
    for corner in itertools.product(*ends):
        device = score.scores(sealed, [count for _, count in corner])[0] * unit
        worst = max(worst, abs(Fraction(device) - log_odds_of(trained, sealed, [real for real, _ in corner])[0]))
    assert derive(trained, sealed).log_odds == worst


@pytest.mark.parametrize("name", SAMPLES)
def test_attack_reaches_the_budget_and_no_more(name: str) -> None:
    trained, sealed = SAMPLES[name]
    budget = derive(trained, sealed)
    found = attack(trained, sealed, budget, seed=1, effort="quick")
    # Reals are taken just short of the tie.
    assert 1 - 2**-20 <= found.share <= 1 or budget.log_odds == found.worst == 0


@pytest.mark.parametrize("name", SAMPLES)
def test_reference_scorer_stands_within_budget_of_the_witness(name: str) -> None:
    trained, sealed = SAMPLES[name]
    misses = witness_misses(trained, sealed, derive(trained, sealed))
    assert misses.rows == ()
    assert misses.compared > 0


@pytest.mark.parametrize("name", SAMPLES)
def test_device_probability_lies_within_its_bound(name: str) -> None:
    trained, sealed = SAMPLES[name]
    bound = derive(trained, sealed).probability
    rng = np.random.default_rng(4)
    for _ in range(200):
        counts = [int(rng.integers(entry.low, entry.high, endpoint=True)) for entry in sealed.inputs]
        device = Fraction(score.probability(sealed, counts), 2**15)
        with mpmath.workdps(40):
            z = log_odds_of(trained, sealed, [Fraction(count) for count in counts])[0]
            exact = 1 / (1 + mpmath.exp(-mpmath.mpf(z.numerator) / z.denominator))
            off = abs(mpmath.mpf(device.numerator) / device.denominator - exact)
            assert off <= mpmath.mpf(bound.numerator) / bound.denominator


# --- every input tried ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", INTEGERS)
def test_few_inputs_are_tried_one_and_all_and_the_worst_is_theirs(arithmetic: str) -> None:
    small = replace(FALLING, low="60", high="85")
    quantities = [small, IMPELLER, VALVE]
    trained = make_trained(quantities, 2)
    sealed = seal_request(trained, make_request(quantities, arithmetic=arithmetic))
    found = attack(trained, sealed, derive(trained, sealed), seed=1, effort="quick")
    rows = list(itertools.product(*(range(int(entry.low), int(entry.high) + 1) for entry in sealed.inputs)))
    assert found.everything
    assert found.tried == len(rows) == math.prod(int(entry.high) - int(entry.low) + 1 for entry in sealed.inputs)
    assert found.worst == max(error_at(trained, sealed, [Fraction(count) for count in row]) for row in rows)


def test_more_inputs_than_can_be_tried_are_not_said_to_be_all() -> None:
    trained, sealed = SAMPLES["pump_int16"]
    assert not attack(trained, sealed, derive(trained, sealed), seed=1, effort="quick").everything
    quantities = [ADC, replace(ADC, name="other"), FALLING]
    trained = make_trained(quantities, 2)
    sealed = seal_request(trained, make_request(quantities, arithmetic="int16"))
    assert not attack(trained, sealed, derive(trained, sealed), seed=1, effort="quick").everything


# --- the extremes -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_accumulator_reaches_its_proven_extremes_in_both_directions_and_fits(name: str) -> None:
    _, sealed = SAMPLES[name]
    sums = [step for step in proof(sealed) if step.what == "sum"]
    bits = ACCUMULATOR_BITS[sealed.arithmetic]
    for way in (1, -1):
        row: list[int] = []
        for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
            if entry.levels:
                weights = [way * weight for weight in term.weights[0]]
                row.append(weights.index(max(weights)))
            else:
                row.append(int(entry.high if way * term.weights[0][0] > 0 else entry.low))
        for position in range(len(row)):
            # The partial sum after each input, with the inputs after it left out.
            part = replace(sealed, inputs=sealed.inputs[: position + 1], terms=sealed.terms[: position + 1])
            z = score.scores(part, row[: position + 1])[0]
            assert z == (sums[position].highest if way > 0 else sums[position].lowest)
            assert -(2 ** (bits - 1)) < z < 2 ** (bits - 1)


# --- mistakes show ----------------------------------------------------------------------------------------------------

DOMINATED = {
    "mid-range": lambda: line(counted("-1000", "1000", gain="1/1024"), 0.5, intercept=1 / 3),
    "weight": lambda: line(counted("-1000", "1000"), 1 / 3),
    "input": lambda: line(Quantity("x", "kPa", "-100", "100"), 2.0),
}


@pytest.mark.parametrize("kind", DOMINATED)
def test_attack_breaks_a_budget_that_leaves_out_one_kind_of_item(kind: str) -> None:
    trained, sealed = DOMINATED[kind]()
    budget = derive(trained, sealed)
    left = tuple(item for item in budget.items if item.kind != kind)
    assert len(left) < len(budget.items)
    short = replace(budget, items=left, log_odds=sum((item.bound for item in left), Fraction(0)))
    assert attack(trained, sealed, budget, seed=1, effort="quick").share <= 1
    assert attack(trained, sealed, short, seed=1, effort="quick").share > 1


def changed(sealed: SealedModel, position: int, **fields: object) -> SealedModel:
    terms = list(sealed.terms)
    terms[position] = replace(terms[position], **fields)  # type: ignore[arg-type]
    return replace(sealed, terms=tuple(terms))


def next_weight(sealed: SealedModel) -> SealedModel:
    return changed(sealed, 0, weights=((sealed.terms[0].weights[0][0] + 1,),))


def next_shift(sealed: SealedModel) -> SealedModel:
    return changed(sealed, 0, shift=int(sealed.terms[0].shift or 0) + 1)


def next_datum(sealed: SealedModel) -> SealedModel:
    return changed(sealed, 0, datum=int(sealed.terms[0].datum or 0) + 1)


def next_level(sealed: SealedModel) -> SealedModel:
    *rest, last = sealed.terms[-1].weights[0]
    return changed(sealed, len(sealed.terms) - 1, weights=((*rest, last + 2**14),))


def other_unit(sealed: SealedModel) -> SealedModel:
    return replace(sealed, accumulator_shift=int(sealed.accumulator_shift or 0) - 1)


@pytest.mark.parametrize("mistake", [next_weight, next_shift, next_datum, next_level, other_unit])
def test_attack_finds_a_mistake_in_the_sealed_model_under_the_right_budget(
    mistake: Callable[[SealedModel], SealedModel],
) -> None:
    trained, sealed = SAMPLES["counts_int16"]
    budget = derive(trained, sealed)
    assert attack(trained, mistake(sealed), budget, seed=2, effort="quick").share > 1
    assert derive(trained, mistake(sealed)).log_odds > budget.log_odds
