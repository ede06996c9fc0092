"""The check of the sealed thresholds against the costs: right for every arithmetic, and fine enough to see one unit."""

from __future__ import annotations

import random
from dataclasses import replace
from fractions import Fraction

import mpmath
import pytest
from models import FLOW, SUCTION, make_request, make_trained

from export.exact import unit
from export.thresholds import wrong_thresholds
from export.vectors import next_to
from runtime_min.model import ARITHMETICS, DecisionRequest, SealedModel, Thresholds
from runtime_min.sealing import seal_request

TRAINED = make_trained([SUCTION, FLOW], 5)


def sealed_for(decision: DecisionRequest, arithmetic: str) -> SealedModel:
    return seal_request(TRAINED, make_request([SUCTION, FLOW], arithmetic=arithmetic, decision=decision))


def random_decisions(seed: int, count: int) -> list[DecisionRequest]:
    rng = random.Random(seed)

    def cost() -> str:
        return f"{rng.uniform(0.1, 50):.2f}"

    return [DecisionRequest(cost(), cost(), None, rng.choice([None, "0.75", "1/7"])) for _ in range(count)]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_thresholds_of_any_costs_hold(arithmetic: str) -> None:
    for decision in random_decisions(1, 60):
        assert wrong_thresholds(sealed_for(decision, arithmetic)) == "", decision


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_threshold_one_unit_off_is_found(arithmetic: str) -> None:
    for decision in random_decisions(2, 20):
        sealed = sealed_for(decision, arithmetic)
        low, high = sealed.decision.low, sealed.decision.high
        below, above = next_to(low, low - 1, arithmetic), next_to(high, high + 1, arithmetic)
        for other in (Thresholds(below, high), Thresholds(low, above)):
            assert "the costs and no_call give" in wrong_thresholds(replace(sealed, decision=other))


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_sealed_threshold_is_the_logarithm_of_the_costs_to_half_a_unit(arithmetic: str) -> None:
    """The logarithm from mpmath at 60 digits; Elkan 2001, The foundations of cost-sensitive learning, equation 2."""
    with mpmath.workdps(60):
        for decision in random_decisions(3, 20):
            sealed = sealed_for(replace(decision, no_call=None), arithmetic)
            alarm, miss = (mpmath.mpf(str(cost)) for cost in (decision.cost_false_alarm, decision.cost_miss))
            exact = mpmath.log(alarm / miss)
            at = Fraction(sealed.decision.low) * unit(sealed)
            off = abs(mpmath.mpf(at.numerator) / at.denominator - exact)
            for way in (-1, 1):
                neighbour = Fraction(next_to(sealed.decision.low, sealed.decision.low + way, arithmetic)) * unit(sealed)
                assert off <= abs(mpmath.mpf(neighbour.numerator) / neighbour.denominator - exact)


def test_threshold_as_given_is_held_too() -> None:
    sealed = sealed_for(DecisionRequest(None, None, "0.1"), "binary32")
    assert wrong_thresholds(sealed) == ""
    assert wrong_thresholds(replace(sealed, decision=Thresholds(0.0, 0.0))) != ""
