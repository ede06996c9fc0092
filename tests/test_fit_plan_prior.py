"""Prior, prevalence, real rows and held-out columns, from a plan to the trained model. The rows are invented.

Expected weights: scipy's minimize (trust-exact) on the objective as design says it, on columns standardised here.
Expected shift of the log-odds: `check_values/facts/prior_shift.json`.
"""

from __future__ import annotations

import json
import math
import random
from dataclasses import replace
from decimal import Context, Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.special import expit

from runtime_min.codec import load_trained, trained_text
from runtime_min.model import TrainedModel
from runtime_min.sealing import seal_request
from runtime_min.validity import trained_problems
from trainer import fit_plan, read_plan, read_rows
from trainer.prior import FOLDS, STRENGTHS, ColumnPrior, PriorRule, choose_sd
from trainer.request import request_of
from trainer.split import folds, held_out_rows
from trainer.table import Rows
from trainer.witness import INVENTED_ROWS, REAL_ROWS, shift_to_field

SHIFTS = json.loads((Path(__file__).parent / "check_values" / "facts" / "prior_shift.json").read_text(encoding="utf-8"))

PLAN = """
model = "pump"
[rows]
file = "runs.csv"
label = "state"
classes = ["sound", "cavitating"]
seed = 5
ROWS
[[input]]
name = "flow"
range = [0.0, 100.0]
missing = "typical"
[[input]]
name = "impeller"
levels = ["closed", "semi_open", "open"]
[[input]]
name = "water"
range = [-5.0, 45.0]
[prior]
PRIOR
[decision]
DECISION
[release]
real_rows = REAL
"""


def written(
    folder: Path, shuffle: int = 0, rows: str = "", prior: str = "", decision: str = "", real: bool = False
) -> Path:
    rng = random.Random(8)
    lines = []
    for row in range(200):
        flow, impeller, water = rng.uniform(0, 100), rng.randrange(3), rng.uniform(-5, 45)
        z = (50 - flow) / 15 + (0, 1, -1)[impeller]
        state = "cavitating" if rng.random() < 1 / (1 + math.exp(-z)) else "sound"
        shown = "" if rng.random() < 0.1 else f"{flow:.2f}"
        level = ("closed", "semi_open", "open")[impeller]
        hours = rng.choice((0.5, 1, 2.25))
        lines.append(f"{shown},{level},{water:.1f},{state},{hours},p{row % 17},{int(row % 17 < 4)}")
    random.Random(shuffle).shuffle(lines)
    header = "flow,impeller,water,state,hours,pump,test\n"
    (folder / "runs.csv").write_text(header + "\n".join(lines) + "\n", encoding="utf-8")
    text = PLAN.replace("ROWS", rows).replace("PRIOR", prior).replace("DECISION", decision)
    (folder / "plan.toml").write_text(text.replace("REAL", str(real).lower()), encoding="utf-8")
    return folder / "plan.toml"


def fitted(path: Path) -> tuple[TrainedModel, Rows, np.ndarray]:
    """(the trained model, the rows, which of them are held out)."""
    plan = read_plan(path)
    rows = read_rows(plan)
    return fit_plan(plan, rows), rows, held_out_rows(rows, plan.rows.held_out, plan.rows.seed)


def optimum(
    trained: TrainedModel, rows: Rows, out: np.ndarray, means: list[float], sds: list[float], intercept_sd: float
) -> np.ndarray:
    """Intercept and weights by scipy, from the rows; means and sds are per spread."""
    weights = np.ones(int(np.sum(~out))) if rows.weights is None else rows.weights[~out]
    values, side = rows.values[~out].copy(), 1.0 - 2.0 * rows.labels[~out]
    there = ~np.isnan(values[:, 0])
    values[~there, 0] = np.average(values[there, 0], weights=weights[there])
    assert trained.inputs[0].typical == pytest.approx(values[~there, 0][0], rel=1e-14)
    columns = np.column_stack([values[:, 0], values[:, 1] == 1, values[:, 1] == 2, values[:, 2]]).astype(float)
    for at in (0, 3):
        mean = np.average(columns[:, at], weights=weights)
        columns[:, at] -= mean
        columns[:, at] /= np.sqrt(np.average(columns[:, at] ** 2, weights=weights))
    design = np.column_stack([np.ones(len(columns)), columns])
    centre, precision = np.array([0.0, *means]), np.array([intercept_sd, *sds]) ** -2.0

    def value(theta: np.ndarray) -> float:
        return float(weights @ np.logaddexp(0, side * (design @ theta)) + 0.5 * precision @ (theta - centre) ** 2)

    def gradient(theta: np.ndarray) -> np.ndarray:
        return (weights * side * expit(side * (design @ theta))) @ design + precision * (theta - centre)

    def hessian(theta: np.ndarray) -> np.ndarray:
        p = expit(design @ theta)
        return (design * (weights * p * (1 - p))[:, None]).T @ design + np.diag(precision)

    found = minimize(value, centre, jac=gradient, hess=hessian, method="trust-exact", options={"gtol": 1e-6}).x
    for _ in range(2):  # the value says nothing below the root of its last bit; the gradient does
        found = found - np.linalg.solve(hessian(found), gradient(found))
    return found


# --- the prior -------------------------------------------------------------------------------------------------------

TERMS = """
sd = 2.0
intercept_sd = 0.7
[prior.term.flow]
mean = -0.05
sd = 0.02
per = "unit"
[prior.term."impeller=open"]
mean = -0.5
[prior.term.water]
sd = 0.25
"""


@pytest.mark.parametrize("weight", ["", 'weight = "hours"'])
def test_means_sds_and_units_of_single_terms_reach_the_fit(weight: str, tmp_path: Path) -> None:
    trained, rows, out = fitted(written(tmp_path, rows=weight, prior=TERMS))
    scale = trained.terms[0].scale
    # Rounded once from the exact product.
    assert trained.prior.means == (float(Fraction("-0.05") * Fraction(scale)), 0.0, -0.5, 0.0)
    assert trained.prior.sds == (float(Fraction("0.02") * Fraction(scale)), 2.0, 2.0, 0.25)
    assert (trained.prior.intercept_sd, trained.choice) == (0.7, None)
    expected = optimum(trained, rows, out, [-0.05 * scale, 0, -0.5, 0], [0.02 * scale, 2, 2, 0.25], 0.7)
    assert [trained.intercept, *trained.weights] == pytest.approx(expected, abs=2e-9)
    assert trained_problems(trained) == []


def test_sd_is_chosen_on_the_fitted_rows_and_kept_with_its_curve(tmp_path: Path) -> None:
    trained, rows, out = fitted(written(tmp_path, rows='group = "pump"\nweight = "hours"'))
    plan = read_plan(tmp_path / "plan.toml")
    assert plan.prior.method == "cross-validation"
    assert rows.weights is not None
    fold = folds(rows, ~out, FOLDS, 5)
    rule = PriorRule((ColumnPrior(),) * 4)
    expected = choose_sd(trained.inputs, rows.values[~out], rows.labels[~out], rows.weights[~out], fold, rule)
    assert trained.choice == expected
    assert trained.choice is not None
    assert trained.choice.sd in STRENGTHS
    assert trained.prior.sds == (trained.choice.sd,) * 4
    groups = np.array(rows.groups)
    assert all(len(set(fold[groups[~out] == pump])) == 1 for pump in set(groups[~out]))
    assert not set(groups[out]) & set(groups[~out])
    assert [trained.intercept, *trained.weights] == pytest.approx(
        optimum(trained, rows, out, [0] * 4, [trained.choice.sd] * 4, math.inf), abs=2e-9
    )
    (tmp_path / "trained.json").write_text(trained_text(trained), encoding="utf-8")
    assert load_trained(tmp_path / "trained.json") == trained


def test_plan_that_states_the_chosen_sd_gives_the_same_model(tmp_path: Path) -> None:
    chosen, _, _ = fitted(written(tmp_path))
    assert chosen.choice is not None
    stated, _, _ = fitted(written(tmp_path, prior=f"sd = {chosen.choice.sd!r}"))
    assert stated == replace(chosen, choice=None)


def test_sd_of_a_term_is_kept_and_the_chosen_one_is_for_the_others(tmp_path: Path) -> None:
    prior = '[prior.term.water]\nsd = 0.3\nmean = 0.1\n[prior.term."impeller=open"]\nmean = -1.0'
    trained, rows, out = fitted(written(tmp_path, prior=prior))
    assert trained.choice is not None
    sd = trained.choice.sd
    assert trained.prior.sds == (sd, sd, sd, 0.3)
    assert trained.prior.means == (0.0, 0.0, -1.0, 0.1)
    fold = folds(rows, ~out, FOLDS, 5)
    water = ColumnPrior(Fraction(1, 10), Fraction(3, 10), shared=False)
    own = (ColumnPrior(), ColumnPrior(), ColumnPrior(mean=Fraction(-1)), water)
    expected = choose_sd(trained.inputs, rows.values[~out], rows.labels[~out], None, fold, PriorRule(own))
    assert trained.choice == expected


def test_nothing_is_chosen_where_every_term_has_its_own_sd(tmp_path: Path) -> None:
    names = ("flow", '"impeller=open"', '"impeller=semi_open"', "water")
    trained, _, _ = fitted(written(tmp_path, prior="".join(f"[prior.term.{name}]\nsd = 0.5\n" for name in names)))
    assert trained.choice is None
    assert trained.prior.sds == (0.5,) * 4


def test_held_out_rows_have_no_part_in_the_choice(tmp_path: Path) -> None:
    path = written(tmp_path)
    plan = read_plan(path)
    first, rows, out = fitted(path)
    values, labels = rows.values.copy(), rows.labels.copy()
    values[out] = [99.0, 2.0, 2.0]
    labels[out] = 1
    other = fit_plan(plan, replace(rows, values=values, labels=labels))
    assert first.choice is not None
    assert replace(other, held_out=None) == replace(first, held_out=None)


@pytest.mark.parametrize("rows", ["", 'weight = "hours"', 'group = "pump"\nheld_out = "test"'])
def test_order_of_the_rows_changes_neither_the_chosen_sd_nor_the_model_id(rows: str, tmp_path: Path) -> None:
    seen = set()
    for shuffle in range(5):
        path = written(tmp_path, shuffle, rows, decision="prevalence = 0.02", real=True)
        plan = read_plan(path)
        trained, read, _ = fitted(path)
        assert trained.choice is not None
        sealed = seal_request(trained, request_of(plan, read))
        seen.add((sealed.model_id, trained.choice.sd, trained.inputs, trained.held_out, trained.witness))
    assert len(seen) == 1


# --- which rows ------------------------------------------------------------------------------------------------------


def test_column_says_which_rows_are_held_out(tmp_path: Path) -> None:
    trained, rows, out = fitted(written(tmp_path, rows='held_out = "test"\nweight = "hours"', prior="sd = 1.0"))
    assert trained.held_out is not None
    assert rows.weights is not None
    count = sum(row % 17 < 4 for row in range(200))
    assert (trained.rows.held_out, trained.rows.fitted, trained.held_out.rows) == (count, 200 - count, count)
    assert trained.class_weights == tuple(math.fsum(rows.weights[~out & (rows.labels == k)]) for k in (0, 1))
    share = trained.class_weights[1] / sum(trained.class_weights)
    assert trained.held_out.base_rate == pytest.approx(share, rel=1e-15)
    held = rows.weights[out] @ -np.log(np.where(rows.labels[out] == 1, share, 1 - share)) / rows.weights[out].sum()
    assert trained.held_out.base_log_loss == pytest.approx(held, rel=1e-12)
    expected = optimum(trained, rows, out, [0] * 4, [1] * 4, math.inf)
    assert [trained.intercept, *trained.weights] == pytest.approx(expected, abs=2e-9)


# --- the share of the event in the field -----------------------------------------------------------------------------


@pytest.mark.parametrize("record", SHIFTS["values"], ids=lambda record: record["log_odds_after"])
def test_shift_to_the_field_is_the_recorded_one(record: dict[str, Any]) -> None:
    share = Fraction(record["training_share"])
    weights = (float(share.denominator - share.numerator), float(share.numerator))
    found = shift_to_field(Fraction(record["population_share"]), weights)
    assert found == float(Decimal(record["subtract_from_intercept"]).copy_negate())
    assert shift_to_field(None, weights) == 0.0


def test_prevalence_shifts_the_witness_and_nothing_else(tmp_path: Path) -> None:
    plain, _, _ = fitted(written(tmp_path, prior="sd = 1.0"))
    shifted, _, _ = fitted(written(tmp_path, prior="sd = 1.0", decision="prevalence = 0.02"))
    assert shifted.prevalence == "1/50"
    assert replace(shifted, prevalence=None, witness=plain.witness) == plain
    first, event = map(Fraction, plain.class_weights)
    odds = Fraction(1, 49) * first / event
    context = Context(prec=40)
    shift = Fraction(context.divide(Decimal(odds.numerator), Decimal(odds.denominator)).ln(context))
    for before, after in zip(plain.witness, shifted.witness, strict=True):
        assert after.inputs == before.inputs
        exact = Fraction(shifted.intercept) + shift
        for term, weight in zip(shifted.terms, shifted.weights, strict=True):
            number = after.inputs[term.of[0]]
            value = Fraction(number) if term.level is None else Fraction(int(number == term.level))
            exact += Fraction(weight) * (value - Fraction(term.centre)) / Fraction(term.scale)
        assert abs(Fraction(after.log_odds[0]) - exact) <= Fraction(after.bounds[0]) <= Fraction(1, 10**12)


# --- real rows -------------------------------------------------------------------------------------------------------


def test_witness_holds_rows_of_the_data_only_where_the_plan_allows_it(tmp_path: Path) -> None:
    without, _, _ = fitted(written(tmp_path, prior="sd = 1.0"))
    trained, rows, out = fitted(written(tmp_path, prior="sd = 1.0", real=True))
    assert len(without.witness) == INVENTED_ROWS + 4
    assert trained.witness[: INVENTED_ROWS + 4] == without.witness
    assert len(trained.witness) == INVENTED_ROWS + 4 + REAL_ROWS
    typical = trained.inputs[0].typical
    of_data = {tuple(np.where(np.isnan(row), typical, row).tolist()) for row in rows.values[~out]}
    held_out = {tuple(np.where(np.isnan(row), typical, row).tolist()) for row in rows.values[out]}
    shown = {witness.inputs for witness in trained.witness[INVENTED_ROWS + 4 :]}
    assert len(shown) == REAL_ROWS
    assert shown <= of_data
    assert not shown & (held_out - of_data)
    assert not {witness.inputs for witness in without.witness} & (of_data | held_out)
