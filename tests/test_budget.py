"""The error budget: derived by hand for small models, one rounding at a time, and what one mistake does to it."""

from __future__ import annotations

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
    CURRENT,
    FLOW,
    IMPELLER,
    SUCTION,
    WATER,
    make_request,
    make_trained,
    sample_extended_models,
    sample_sealed_models,
)
from one_input import line

from export.budget import Budget, derive
from export.exact import log_odds_of
from export.interval import (
    Interval,
    difference_rounding,
    half_unit,
    product_rounding,
    rounding,
    sum_rounding,
)
from runtime_min import score
from runtime_min.errors import SealError
from runtime_min.model import DecisionRequest, SealedModel, TrainedModel
from runtime_min.sealing import round_to, seal_request

SAMPLES = {**sample_sealed_models(), **sample_extended_models()}
DTYPES = {"binary32": np.float32, "binary64": np.float64}
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
