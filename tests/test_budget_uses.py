"""What the error budget is used for: the witness is held to it, and advice is given where it is too large."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import pytest
from models import (
    ADC,
    make_request,
    make_trained,
    sample_extended_models,
    sample_sealed_models,
)
from one_input import line

from export.advice import advise
from export.budget import derive
from export.exact import trained_log_odds
from export.witness import witness_misses
from runtime_min.model import Witness
from runtime_min.sealing import seal_request

SAMPLES = {**sample_sealed_models(), **sample_extended_models()}


# --- the witness ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_reference_scorer_stands_within_budget_of_the_witness(name: str) -> None:
    trained, sealed = SAMPLES[name]
    misses = witness_misses(trained, sealed, derive(trained, sealed))
    assert (misses.rows, misses.compared) == ((), len(trained.witness))
    assert 0 <= misses.largest <= 1


def test_witness_off_by_more_than_budget_and_bound_is_a_miss() -> None:
    trained, sealed = line("0", "10", scale=3.0, arithmetic="binary64")
    budget = derive(trained, sealed)
    # round(1/3) * 6 rounds to 2: the reference scorer is off by nothing. Numbers above 2 are 2^-51 apart.
    step, bound = 2.0**-51, 2.0**-50
    most = int((budget.log_odds + Fraction(bound)) / Fraction(step))
    rows = (
        Witness((6.0,), (2.0 + most * step,), (bound,)),
        Witness((6.0,), (2.0 + (most + 1) * step,), (bound,)),
        Witness((6.0,), (2.0 + most * step,), (0.0,)),
        Witness((11.0,), (100.0,), (bound,)),
        Witness((math.nan,), (100.0,), (bound,)),
    )
    misses = witness_misses(replace(trained, witness=rows), sealed, budget)
    assert (misses.rows, misses.compared) == ((1, 2), 3)


def test_bound_of_a_witness_wider_than_binary64_needs_hides_nothing() -> None:
    trained, sealed = line("0", "10", scale=3.0)
    budget = derive(trained, sealed)
    for off, missed in ((float(budget.log_odds) * 0.999, ()), (float(budget.log_odds) * 1.001, (0,))):
        row = Witness((6.0,), (2.0 + off,), (1.0,))
        misses = witness_misses(replace(trained, witness=(row,)), sealed, budget)
        assert misses.rows == missed
        assert misses.largest == pytest.approx(off / float(budget.log_odds), rel=1e-4)


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
        '"int32" (its bound is 1.5e-08), or write origin = 1000 at "x": the device subtracts it before the value '
        "becomes a float (the bound is then 1.91e-06), or raise the tolerance to 6.11e-05"
    )


def test_advice_offers_nothing_that_would_not_fit() -> None:
    trained, sealed = line("950", "1050", intercept=-1000.0, arithmetic="binary64")
    problem = advise(trained, sealed, derive(trained, sealed), Fraction(1, 10**20))
    assert problem.todo == "raise the tolerance to 1.14e-13"
