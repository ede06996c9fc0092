"""The error budget: derived by hand for small models, never exceeded by any of many real inputs, and what it says."""

from __future__ import annotations

import itertools
import math
import time
from dataclasses import replace
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from models import (
    ADC,
    CURRENT,
    FLOW,
    IMPELLER,
    SUCTION,
    WATER,
    Quantity,
    make_request,
    make_trained,
    sample_extended_models,
    sample_sealed_models,
)
from one_input import line

from export.advice import advise
from export.budget import Budget, derive
from export.exact import log_odds_of, trained_log_odds
from export.interval import (
    Interval,
    difference_rounding,
    half_unit,
    product_rounding,
    rounding,
    sum_rounding,
)
from export.witness import witness_misses
from runtime_min import score
from runtime_min.errors import SealError
from runtime_min.model import Counts, DecisionRequest, SealedModel, TrainedModel, Witness
from runtime_min.sealing import fold, round_to, seal_request

SAMPLES = {**sample_sealed_models(), **sample_extended_models()}
DTYPES = {"binary32": np.float32, "binary64": np.float64}
Pair = tuple[TrainedModel, SealedModel]
ARITHMETICS = ("binary32", "binary64")


def two(exponent: int) -> Fraction:
    return Fraction(2) ** exponent


def two_f(exponent: int) -> float:
    return math.ldexp(1.0, exponent)


def bounds(budget: Budget) -> dict[str, Fraction]:
    return {item.kind: item.bound for item in budget.items}


def error(trained: TrainedModel, sealed: SealedModel, reals: list[Fraction]) -> Fraction:
    """|device - trained| at what the device delivers, each rounded once to the arithmetic."""
    device = score.log_odds(sealed, [round_to(sealed.arithmetic, real) for real in reals])
    return abs(Fraction(device) - log_odds_of(trained, sealed, reals)[0])


# --- derived by hand --------------------------------------------------------------------------------------------------


def test_budget_of_a_third_of_x_is_what_the_derivation_by_hand_gives() -> None:
    # u = round(1/3) = 11184811 * 2^-25, so u - 1/3 = (3 * 11184811 - 2^25) / (3 * 2^25) = 1 / (3 * 2^25).
    # Over 0 to 10 that is 5 +- 5 times as much. x up to 10: units of 2^-20 (2^-49 where it is read as binary64 first).
    # u x up to 3.4: units of 2^-22. The range 0 to 10 has no datum; the sum starts at 0, so it is exact.
    trained, sealed = line("0", "10", scale=3.0)
    budget = derive(trained, sealed)
    assert bounds(budget) == {
        "mid-range": Fraction(5, 3 * 2**25),
        "input": Fraction(1, 3) * (two(-21) + two(-50)),
        "weight": Fraction(5, 3 * 2**25),
        "product": two(-23),
    }
    assert budget.log_odds == sum(bounds(budget).values())


def test_budget_of_binary64_reads_an_input_once() -> None:
    trained, sealed = line("0", "10", scale=0.25, arithmetic="binary64")
    assert bounds(derive(trained, sealed)) == {"input": 4 * two(-50)}


def test_sum_costs_half_a_unit_of_the_largest_partial_sum() -> None:
    # 1000 + x, |x| <= 2: units of 2^-14. The weight 1 makes the product exact.
    trained, sealed = line("-1", "2", intercept=1000.0)
    assert bounds(derive(trained, sealed))["sum"] == two(-15)


def test_power_of_two_as_largest_magnitude_has_the_finer_unit_below_it() -> None:
    assert rounding("binary32", Interval(Fraction(-1), Fraction(1, 3))) == two(-25)
    assert rounding("binary32", Interval(Fraction(-1), Fraction(4, 3))) == two(-24)


def test_input_limit_at_a_power_of_two_counts_the_reals_just_above_it() -> None:
    trained, sealed = line("-1", "4", arithmetic="binary64")
    # Units are 2^-51 below 4 and 2^-50 above.
    real = 4 + two(-51) * Fraction(999, 1000)
    assert round_to("binary64", real) == 4.0
    assert error(trained, sealed, [real]) > two(-52)
    assert bounds(derive(trained, sealed))["input"] == two(-51)


def test_mid_range_item_is_the_distance_of_the_device_intercept_where_weights_are_exact() -> None:
    # 2^20 + 31/1024 rounds to 2^20 in binary32 (units of 2^-3).
    trained, sealed = line("-1", "2", intercept=2.0**20 + 31 / 1024)
    assert bounds(derive(trained, sealed))["mid-range"] == Fraction(31, 1024)


def test_datum_subtraction_is_free_where_sterbenz_proves_it_exact() -> None:
    trained, sealed = line("273.15", "323.15")
    assert sealed.terms[0].datum == 298.0
    assert "datum" not in bounds(derive(trained, sealed))


def test_datum_subtraction_costs_where_small_inputs_lose_bits() -> None:
    # The datum is 5: below 2.5 the difference, up to 4.99, has units of 2^-21 and x has finer ones.
    trained, sealed = line("0.01", "9.99")
    assert sealed.terms[0].datum == 5.0
    assert bounds(derive(trained, sealed))["datum"] == two(-22)


def test_mid_range_item_counts_signs() -> None:
    # The device's weight is 2^-30 below the trained one, so 4 * 2^-30 at mid-range of 0 to 8. Its intercept is 2^-25
    # above the trained one, which makes up for that, or 2^-25 below.
    for sign in (1, -1):
        trained, sealed = line("0", "8", weight=1 + two_f(-30), intercept=sign * (1 - two_f(-25)))
        assert sealed.terms[0].weights == ((1.0,),)
        assert sealed.intercepts == (float(sign),)
        assert bounds(derive(trained, sealed))["mid-range"] == abs(sign * two(-25) - 4 * two(-30))
        assert bounds(derive(trained, sealed))["weight"] == 4 * two(-30)


def test_level_weights_cost_half_of_what_lies_between_the_extreme_levels() -> None:
    # Units of 2^-22 in [2, 4) and of 2^-19 in [16, 32): the weights round by -2^-24 and -3 * 2^-22.
    weights = (3 + two_f(-24), 17 + 3 * two_f(-22))
    trained = make_trained([IMPELLER], 3)
    trained = replace(trained, scores=(replace(trained.scores[0], intercept=0.0, weights=weights),))
    sealed = seal_request(trained, make_request([IMPELLER]))
    assert bounds(derive(trained, sealed)) == {"mid-range": 3 * two(-23), "weight": 3 * two(-23)}


def test_threshold_item_is_the_rounding_of_the_logarithm() -> None:
    # ln(1/25) by mpmath, to 50 digits.
    trained, sealed = line("-1", "2", decision=DecisionRequest("1", "25", None))
    budget = derive(trained, sealed)
    with mpmath.workdps(50):
        exact = mpmath.log(mpmath.mpf(1) / 25)
        off = abs(mpmath.mpf(sealed.decision.low) - exact)
        assert abs(mpmath.mpf(budget.threshold.numerator) / budget.threshold.denominator - off) < mpmath.mpf(10) ** -45
        half = mpmath.mpf(budget.log_odds.numerator) / budget.log_odds.denominator + off
        assert budget.bands[0][0] <= exact - half <= math.nextafter(budget.bands[0][0], math.inf)
        assert math.nextafter(budget.bands[0][1], -math.inf) <= exact + half <= budget.bands[0][1]


# --- one rounding -----------------------------------------------------------------------------------------------------


@given(st.floats(width=32, allow_nan=False, allow_infinity=False))
def test_half_unit_of_binary32_agrees_with_numpy(value: float) -> None:
    assume(value != 0 and abs(value) < float(np.finfo(np.float32).max))
    assert 2 * half_unit("binary32", abs(Fraction(value))) == Fraction(float(np.spacing(np.float32(abs(value)))))


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_half_unit_of_binary64_agrees_with_the_standard_library(value: float) -> None:
    assume(value != 0)
    assert 2 * half_unit("binary64", abs(Fraction(value))) == Fraction(math.ulp(value))


LIMITS = st.floats(-1e6, 1e6, width=32)


@settings(max_examples=400, deadline=None)
@given(LIMITS, LIMITS, st.floats(-1e4, 1e4, width=32), st.integers(0, 2**32))
def test_no_operation_errs_by_more_than_its_item(one: float, other: float, constant: float, seed: int) -> None:
    assume(one != other and constant != 0)
    low, high = min(one, other), max(one, other)
    limits, exact = Interval(Fraction(low), Fraction(high)), Fraction(constant)
    rng = np.random.default_rng(seed)
    # From anywhere, and (in magnitude) from every binade, so that exact and inexact sides of a datum are both met.
    inside = np.concatenate(
        [rng.uniform(low, high, 100), rng.choice((low, high), 100) * np.exp2(-30 * rng.random(100))]
    )
    values = np.clip(inside.astype(np.float32), np.float32(low), np.float32(high))
    c = np.float32(constant)
    for computed, told, bound in (
        (values - c, lambda v: v - exact, difference_rounding("binary32", limits, exact)),
        (values * c, lambda v: v * exact, product_rounding("binary32", exact, limits)),
        (values + c, lambda v: v + exact, sum_rounding("binary32", limits.minus(-exact))),
    ):
        errors = [abs(Fraction(float(got)) - told(Fraction(float(v)))) for got, v in zip(computed, values, strict=True)]
        assert max(errors) <= bound


def test_product_with_a_power_of_two_is_exact_until_it_underflows() -> None:
    ordinary = Interval(Fraction(-10), Fraction(10))
    assert product_rounding("binary32", Fraction(8), ordinary) == 0
    # 2^-149 is the smallest binary32 number: a quarter of 3 of them is rounded by a quarter of one.
    assert product_rounding("binary32", Fraction(1, 4), ordinary) == two(-150)
    assert product_rounding("binary32", Fraction(3, 2**100), Interval(two(-149), two(-140))) == two(-150)


def test_sum_is_exact_below_twice_the_smallest_normal_number_and_not_above() -> None:
    # Multiples of 2^-149 below 2^-125 fit in 24 bits; 2^-125 + 2^-149 lies half-way between two binary32 numbers.
    assert sum_rounding("binary32", Interval(Fraction(0), two(-125))) == 0
    assert sum_rounding("binary32", Interval(Fraction(0), two(-125) + two(-149))) == two(-149)


def test_subtraction_just_outside_the_range_of_sterbenz_loses_one_bit() -> None:
    # 13/32 + 2^-25 less 5/4 has 25 significant bits: below 1/2 inputs have units of 2^-25, the difference of 2^-24.
    limits = Interval(Fraction(13, 32), Fraction(19, 32))
    assert difference_rounding("binary32", limits, Fraction(5, 4)) == two(-25)
    # Between 1/2 and 19/32 both have units of 2^-24.
    assert difference_rounding("binary32", Interval(Fraction(1, 2), Fraction(19, 32)), Fraction(5, 4)) == 0


# --- never exceeded ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("limits", "given"),
    [
        (("1", "1.0002"), {"centre": 0.1, "intercept": -1.5}),
        (("0.4999", "0.5001"), {"centre": 0.5}),
        (("-1.5e-42", "2e-42"), {}),
    ],
)
def test_budget_holds_at_every_number_of_a_narrow_range(limits: tuple[str, str], given: dict[str, float]) -> None:
    trained, sealed = line(*limits, weight=1.375 + two_f(-28), scale=0.7, **given)
    budget = derive(trained, sealed)
    entry = sealed.inputs[0]
    x, worst, count = np.float32(entry.low), Fraction(0), 0
    while x <= entry.high:
        value = Fraction(float(x))
        for neighbour in (np.nextafter(x, np.float32(-np.inf)), np.nextafter(x, np.float32(np.inf))):
            real = value + (Fraction(float(neighbour)) - value) / 2 * Fraction(999, 1000)
            worst = max(worst, error(trained, sealed, [real]))
        x, count = np.nextafter(x, np.float32(np.inf)), count + 1
    assert count > 1000
    assert budget.log_odds / 2 < worst <= budget.log_odds


@st.composite
def models(draw: st.DrawFn) -> tuple[TrainedModel, SealedModel]:
    """A model of one to five inputs: ranges round 0 and away from it, of widths from 1e-3 to 1e6, and levels."""
    quantities = []
    for position in range(draw(st.integers(1, 5))):
        if draw(st.integers(0, 4)) == 0:
            levels = tuple(f"l{rank}" for rank in range(draw(st.integers(2, 5))))
            quantities.append(Quantity(f"q{position}", levels=levels))
            continue
        low = draw(st.decimals(-1000, 1000, places=3))
        width = draw(st.decimals("0.001", 1_000_000, places=3))
        origin = str(draw(st.decimals(-1000, 1000, places=2))) if draw(st.booleans()) else None
        counts = None
        if origin is None and draw(st.booleans()):
            # Signed or falling counts over the width and a little more, of 5 to 20 bits.
            bits, signed = draw(st.integers(5, 20)), draw(st.booleans())
            gain = Fraction(width) / 2 ** (bits - 1) * draw(st.sampled_from((1, -1)))
            middle = 0 if signed else 2 ** (bits - 1)
            counts = Counts(bits, str(gain), str(Fraction(low + width / 2) - gain * middle), signed, False)
        quantities.append(Quantity(f"q{position}", "", str(low), str(low + width), origin=origin, counts=counts))
    seed = draw(st.integers(0, 2**32))
    prevalence = draw(st.sampled_from((None, "0.02", "1/3")))
    weight_sd = draw(st.sampled_from((0.01, 1.0, 100.0)))
    trained = make_trained(quantities, seed, weight_sd=weight_sd, prevalence=prevalence)
    return trained, seal_request(trained, make_request(quantities, arithmetic=draw(st.sampled_from(ARITHMETICS))))


@settings(max_examples=150, deadline=None)
@given(models(), st.data())
def test_no_real_input_errs_by_more_than_the_budget(
    pair: tuple[TrainedModel, SealedModel], data: st.DataObject
) -> None:
    trained, sealed = pair
    budget = derive(trained, sealed)
    share = st.fractions(0, 1)
    for _ in range(10):
        reals = [
            Fraction(data.draw(st.integers(0, len(entry.levels) - 1)))
            if entry.levels
            else Fraction(entry.low) + data.draw(share) * (Fraction(entry.high) - Fraction(entry.low))
            for entry in sealed.inputs
        ]
        reals = [Fraction(round(x)) if e.counts else x for e, x in zip(sealed.inputs, reals, strict=True)]
        assert error(trained, sealed, reals) <= budget.log_odds


def test_real_read_as_binary64_before_binary32_is_covered() -> None:
    # Just above the midpoint of two binary32 numbers, the upper one even: binary64 rounds it to the midpoint, ties go
    # up or down to even; the two roundings move the real by more than half a unit.
    trained, sealed = line("0.5", "1.9", intercept=-1.1875)
    real = 1 + 2 * two(-23) + two(-24) + two(-80)
    twice = round_to("binary32", Fraction(round_to("binary64", real)))
    assert abs(Fraction(twice) - real) > two(-24)
    budget = derive(trained, sealed)
    assert abs(Fraction(score.log_odds(sealed, [twice])) - trained_log_odds(trained, [real])[0]) <= budget.log_odds


@pytest.mark.parametrize("name", SAMPLES)
def test_device_probability_lies_within_its_bound(name: str) -> None:
    trained, sealed = SAMPLES[name]
    budget = derive(trained, sealed)
    bound = mpmath.mpf(budget.probability.numerator) / budget.probability.denominator
    rng = np.random.default_rng(3)
    for _ in range(12):
        reals = [Fraction(int(rng.integers(entry.low, entry.high, endpoint=True))) if entry.counts or entry.levels else
                 Fraction(rng.uniform(entry.low, entry.high)) for entry in sealed.inputs]
        device = score.probability(sealed, [round_to(sealed.arithmetic, real) for real in reals])
        with mpmath.workdps(40):
            z = log_odds_of(trained, sealed, reals)[0]
            exact = 1 / (1 + mpmath.exp(-mpmath.mpf(z.numerator) / z.denominator))
            assert abs(mpmath.mpf(device) - exact) <= bound


@pytest.mark.parametrize("name", SAMPLES)
def test_reach_is_the_range_of_trained_log_odds_over_the_corners(name: str) -> None:
    trained, sealed = SAMPLES[name]
    corners = itertools.islice(
        itertools.product(
            *(range(len(entry.levels)) if entry.levels else (entry.low, entry.high) for entry in sealed.inputs)
        ),
        1000,
    )
    found = [log_odds_of(trained, sealed, [Fraction(value) for value in corner])[0] for corner in corners]
    low, high = derive(trained, sealed).reach
    assert low <= min(found)
    assert max(found) <= high
    if len(found) < 1000:
        assert math.nextafter(low, math.inf) >= min(found)
        assert math.nextafter(high, -math.inf) <= max(found)


def test_outside_the_band_the_device_decides_as_the_exact_threshold_does() -> None:
    trained, sealed = line("-3", "4", weight=1.3, scale=0.7, decision=DecisionRequest("1", "3", None))
    budget = derive(trained, sealed)
    threshold = mpmath.log(mpmath.mpf(1) / 3)
    inside = 0
    for step in range(-400, 400):
        # -0.5916 is where 1.3 x / 0.7 meets ln(1/3).
        real = Fraction(float(threshold)) * Fraction(7, 13) + step * two(-28)
        z = trained_log_odds(trained, [real])[0]
        decision = score.decide(sealed, [round_to("binary32", real)])
        if budget.bands[0][0] <= z <= budget.bands[0][1]:
            inside += 1
        else:
            assert decision == int(z > Fraction(float(threshold)))
    assert 0 < inside < 800


def test_each_threshold_of_a_no_call_has_its_band() -> None:
    # ln(1/3) -+ 0.7, by mpmath.
    trained, sealed = line("-3", "4", weight=1.3, scale=0.7, decision=DecisionRequest("1", "3", None, "0.7"))
    budget = derive(trained, sealed)
    assert len(budget.bands) == 2
    for band, half_width in zip(budget.bands, (-1, 1), strict=True):
        with mpmath.workdps(30):
            exact = mpmath.log(mpmath.mpf(1) / 3) + half_width * mpmath.mpf(7) / 10
            assert band[0] <= exact - float(budget.log_odds)
            assert exact + float(budget.log_odds) <= band[1]
            assert band[1] - band[0] <= 2 * float(budget.log_odds + budget.threshold) * 1.0001


def test_prevalence_moves_the_trained_log_odds_by_the_difference_of_the_logits() -> None:
    # Saerens, Latinne and Decaestecker 2002; a quarter of the fitted rows are events.
    trained = make_trained([SUCTION], 1)
    moved = replace(trained, prevalence="0.02")
    with mpmath.workdps(30):
        shift = mpmath.log(mpmath.mpf(2) / 98) - mpmath.log(mpmath.mpf(1) / 3)
        found = trained_log_odds(moved, [Fraction(3)])[0] - trained_log_odds(trained, [Fraction(3)])[0]
        assert abs(mpmath.mpf(found.numerator) / found.denominator - shift) < mpmath.mpf(10) ** -25


@pytest.mark.parametrize("times", [0, 2])
def test_prevalence_left_out_or_counted_twice_makes_the_budget_large(times: int) -> None:
    trained, sealed = SAMPLES["rare_binary32"]
    shift = float(trained_log_odds(trained, [Fraction(0)] * 2)[0]) - float(
        trained_log_odds(replace(trained, prevalence=None), [Fraction(0)] * 2)[0]
    )
    wrong = replace(sealed, intercepts=(sealed.intercepts[0] + (times - 1) * shift,))
    budget = derive(trained, wrong)
    assert budget.log_odds > 5
    assert witness_misses(trained, wrong, derive(trained, sealed)).rows


def test_counts_cost_no_rounding_of_the_input_and_an_origin_that_of_the_difference() -> None:
    # 102,400 to 104,448 Pa: half a unit is 2^-8 (and 2^-37 where binary64 comes first), up to 1,024 from the origin it
    # is 2^-14, above it by one bit.
    def input_bound(**given: object) -> Fraction:
        trained = make_trained([Quantity("x", "Pa", "102400", "104448", **given)], 1)  # type: ignore[arg-type]
        trained = replace(trained, terms=(replace(trained.terms[0], scale=1.0),))
        trained = replace(trained, scores=(replace(trained.scores[0], weights=(1.0,)),))
        quantity = Quantity("x", "Pa", "102400", "104448", **given)  # type: ignore[arg-type]
        return bounds(derive(trained, seal_request(trained, make_request([quantity])))).get("input", Fraction(0))

    assert input_bound() == two(-8) + two(-37)
    assert input_bound(origin="103424") == two(-14) + two(-43)
    assert input_bound(counts=Counts(12, "1", "102000", False, False)) == 0


def test_exact_log_odds_agree_with_the_exact_fold() -> None:
    for trained, sealed in sample_sealed_models().values():
        folded = fold(trained)[0]
        inputs = [Fraction(value) for value in trained.witness[0].inputs]
        columns = [
            inputs[term.of[0]] if term.level is None else Fraction(inputs[term.of[0]] == term.level)
            for term in trained.terms
        ]
        total = folded.intercept + sum(w * v for w, v in zip(folded.weights, columns, strict=True))
        assert trained_log_odds(trained, inputs) == (total,), sealed.name


# --- mistakes show ----------------------------------------------------------------------------------------------------


def test_wrong_fold_makes_the_budget_large() -> None:
    trained, sealed = SAMPLES["pump_binary32"]
    wrong = replace(sealed, intercepts=(trained.intercept,))
    right = derive(trained, sealed).log_odds
    assert derive(trained, wrong).log_odds > 1000 * right


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_last_bit_of_a_weight_makes_the_budget_larger(arithmetic: str) -> None:
    trained, sealed = SAMPLES[f"pump_{arithmetic}"]
    dtype = DTYPES[arithmetic]
    changed = float(np.nextafter(dtype(sealed.terms[0].weights[0][0]), dtype(np.inf)))
    terms = (replace(sealed.terms[0], weights=((changed,),)), *sealed.terms[1:])
    assert derive(trained, replace(sealed, terms=terms)).log_odds > derive(trained, sealed).log_odds


def test_overflow_within_the_ranges_is_refused_with_its_place() -> None:
    trained, sealed = line("-1e38", "3e38", weight=2.0)
    with pytest.raises(SealError) as caught:
        derive(trained, sealed)
    assert str(caught.value) == (
        'product with the weight of "x": can exceed the largest binary32 number within the ranges; '
        "narrow the ranges, rescale the inputs, or choose binary64"
    )


# --- the witness ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_reference_scorer_stands_within_budget_of_the_witness(name: str) -> None:
    trained, sealed = SAMPLES[name]
    misses = witness_misses(trained, sealed, derive(trained, sealed))
    assert (misses.rows, misses.compared) == ((), len(trained.witness))
    assert 0 <= misses.largest <= 1


def test_witness_off_by_more_than_budget_and_bound_is_a_miss() -> None:
    trained, sealed = line("0", "10", scale=3.0)
    budget = derive(trained, sealed)
    # 6 is a binary32 number and round(1/3) * 6 rounds to 2: the reference scorer is off by nothing.
    bound = 2.0**-30
    allowed = float(budget.log_odds) + bound
    rows = (
        Witness((6.0,), (2.0 + allowed * 0.999,), (bound,)),
        Witness((6.0,), (2.0 - allowed * 1.001,), (bound,)),
        Witness((11.0,), (100.0,), (bound,)),
        Witness((math.nan,), (100.0,), (bound,)),
    )
    misses = witness_misses(replace(trained, witness=rows), sealed, budget)
    assert (misses.rows, misses.compared) == ((1,), 2)
    assert misses.largest == pytest.approx(1.001, rel=1e-4)


def test_witness_is_moved_to_the_count_that_the_device_has() -> None:
    # 0.04 kPa lies 0.4 of a count from its count: in the rows it is not quantised.
    trained = make_trained([ADC], 1)
    trained = replace(trained, witness=(), scores=(replace(trained.scores[0], weights=(2.0,)),))
    sealed = seal_request(trained, make_request([ADC]))
    budget = derive(trained, sealed)
    said = float(trained_log_odds(trained, [Fraction("0.04")])[0])
    for off, missed in ((0.0, ()), (float(budget.log_odds) * 1.5, (0,))):
        row = Witness((0.04,), (said + off,), (1e-15,))
        assert witness_misses(replace(trained, witness=(row,)), sealed, budget).rows == missed


# --- advice -----------------------------------------------------------------------------------------------------------


def test_advice_names_the_costliest_item_the_arithmetic_and_the_origin() -> None:
    # Half a unit at 1050 is 2^-14, 6.11e-5 rounded up; after subtracting 1000, at 50, it is 2^-19. Counts of 2^-25 kPa
    # reach 50 kPa from 1000 in 32 bits: half of one is 1.5e-8 rounded up.
    trained, sealed = line("950", "1050", intercept=-1000.0)
    problem = advise(trained, sealed, derive(trained, sealed), Fraction(1, 100_000))
    assert str(problem) == (
        'error budget: 6.11e-05 in log-odds is more than the tolerance 1e-05, and the costliest item is input "x" '
        'rounded to binary32, 6.11e-05; choose arithmetic = "binary64" (its bound is 1.14e-13), or choose arithmetic = '
        '"int32" (its bound is 1.5e-08), or write origin = 1000 at "x": the device subtracts it before the value becomes '
        "a float (the bound is then 1.91e-06), or raise the tolerance to 6.11e-05"
    )


def test_advice_offers_nothing_that_would_not_fit() -> None:
    trained, sealed = line("950", "1050", intercept=-1000.0, arithmetic="binary64")
    problem = advise(trained, sealed, derive(trained, sealed), Fraction(1, 10**20))
    assert problem.todo == "raise the tolerance to 1.14e-13"


# --- figures ----------------------------------------------------------------------------------------------------------


def test_log_odds_bound_is_the_sum_of_its_items_and_none_is_zero() -> None:
    for trained, sealed in SAMPLES.values():
        budget = derive(trained, sealed)
        assert budget.log_odds == sum(item.bound for item in budget.items)
        assert all(item.bound > 0 for item in budget.items)


def test_derivation_for_forty_inputs_takes_less_than_a_tenth_of_a_second() -> None:
    quantities = [replace((SUCTION, FLOW, CURRENT, WATER)[n % 4], name=f"q{n}") for n in range(40)]
    trained = make_trained(quantities, 5)
    sealed = seal_request(trained, make_request(quantities))
    times = []
    for _ in range(3):
        start = time.process_time()
        derive(trained, sealed)
        times.append(time.process_time() - start)
    assert min(times) < 0.1
