"""An independent prover of rounding-error bounds confirms the budget: worst found <= proven <= derived <= 1.002 proven.

Gappa 1.4 (Debian package gappa). Its scripts take their numbers from the two models and share no code with the budget.
"""

from __future__ import annotations

import shutil
from dataclasses import replace
from fractions import Fraction

import pytest
from gappa_script import PRECISION, prove, script
from models import (
    CURRENT,
    FLOW,
    IMPELLER,
    SUCTION,
    VALVE,
    VIBRATION,
    WATER,
    Quantity,
    make_request,
    make_trained,
    sample_extended_models,
    sample_sealed_models,
)

from export.attack import attack
from export.budget import derive
from runtime_min.model import SealedModel, TrainedModel
from runtime_min.sealing import seal_request

pytestmark = pytest.mark.skipif(
    shutil.which("gappa") is None, reason="the prover is not installed: apt-get install gappa"
)

OUTWARD = 1 + Fraction(2) ** (100 - PRECISION)
"""Gappa's own numbers have PRECISION bits and are rounded outward; magnitudes and errors are at most 2^100 apart."""


def repeated(quantities: list[Quantity], count: int, arithmetic: str, seed: int) -> tuple[TrainedModel, SealedModel]:
    named = [replace(quantities[n % len(quantities)], name=f"q{n}") for n in range(count)]
    trained = make_trained(named, seed)
    return trained, seal_request(trained, make_request(named, arithmetic=arithmetic))


ROUND_ZERO = [SUCTION, FLOW, Quantity("slip", "", "-0.3", "0.2")]
AWAY_FROM_ZERO = [CURRENT, WATER, Quantity("depth", "m", "-30.5", "-2.25")]

MODELS = {
    **sample_sealed_models(),
    **sample_extended_models(),
    "1 of levels": repeated([IMPELLER], 1, "binary32", 5),
    "5 without datum": repeated(ROUND_ZERO, 5, "binary32", 1),
    "5 with datum": repeated(AWAY_FROM_ZERO, 5, "binary32", 2),
    "12 without datum": repeated(ROUND_ZERO, 12, "binary32", 3),
    "12 with datum": repeated(AWAY_FROM_ZERO, 12, "binary64", 4),
    "20 of both": repeated([*ROUND_ZERO, *AWAY_FROM_ZERO, VALVE], 20, "binary64", 5),
    "40 of both": repeated([*ROUND_ZERO, *AWAY_FROM_ZERO, VIBRATION], 40, "binary32", 6),
}


@pytest.mark.parametrize("name", MODELS)
def test_proven_bound_lies_between_the_worst_found_and_the_derived_bound(name: str) -> None:
    trained, sealed = MODELS[name]
    derived = derive(trained, sealed)
    proven = prove(script(trained, sealed))
    assert attack(trained, sealed, derived, seed=1, effort="quick").worst <= proven
    assert proven <= derived.log_odds * OUTWARD
    assert derived.log_odds <= proven * Fraction(1002, 1000)


@pytest.mark.parametrize("name", ["pump_binary32", "all_datum_binary64", "5 without datum"])
def test_budget_without_any_one_of_its_items_lies_below_the_proven_bound(name: str) -> None:
    trained, sealed = MODELS[name]
    derived = derive(trained, sealed)
    proven = prove(script(trained, sealed))
    # What the derivation gives away to the prover hides items smaller than that.
    given_away = derived.log_odds - proven
    left_out = [item for item in derived.items if item.bound > given_away]
    assert len(left_out) >= len(derived.items) / 2
    assert all(derived.log_odds - item.bound < proven for item in left_out)


def test_prover_sees_a_wrong_weight() -> None:
    trained, sealed = MODELS["pump_binary32"]
    first, *rest = sealed.terms
    wrong = replace(sealed, terms=(replace(first, weights=((first.weights[0][0] * 1.125,),)), *rest))
    assert prove(script(trained, wrong)) > 10 * derive(trained, sealed).log_odds
