"""The error budget is never exceeded, by any of many real inputs, and bands and reach are what they say."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from models import (
    SUCTION,
    Quantity,
    make_request,
    make_trained,
    sample_extended_models,
    sample_sealed_models,
)
from one_input import line

from export.budget import Budget, derive
from export.exact import log_odds_of, trained_log_odds
from export.witness import witness_misses
from runtime_min import score
from runtime_min.model import Counts, DecisionRequest, SealedModel, TrainedModel
from runtime_min.sealing import fold, round_to, seal_request

SAMPLES = {**sample_sealed_models(), **sample_extended_models()}
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
        reals = [
            Fraction(int(rng.integers(entry.low, entry.high, endpoint=True)))
            if entry.counts or entry.levels
            else Fraction(rng.uniform(entry.low, entry.high))
            for entry in sealed.inputs
        ]
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
