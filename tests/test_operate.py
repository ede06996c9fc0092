"""Held-out results against published examples, scikit-learn, and extremes worked by hand.

Sources: `check_values/facts/brier_1950.json`, `check_values/facts/hanley_mcneil_1982.json`,
`check_values/facts/softplus.json`; scikit-learn's log_loss, brier_score_loss and roc_auc_score.
"""

from __future__ import annotations

import json
import math
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sklearn.metrics import brier_score_loss, log_loss, roc_auc_score

from trainer.operate import area_under_roc, held_out_results

FACTS = Path(__file__).parent / "check_values" / "facts"


def fact(name: str) -> dict[str, Any]:
    data: dict[str, Any] = json.loads((FACTS / f"{name}.json").read_text(encoding="utf-8"))
    return data


def test_brier_score_of_the_ten_rain_forecasts_of_1950() -> None:
    record = fact("brier_1950")
    forecast = np.array([float(text) for text in record["forecast"]])
    with np.errstate(divide="ignore"):
        log_odds = np.log(forecast) - np.log1p(-forecast)
    found = held_out_results(log_odds, np.array(record["observed"]), 0.3)
    # A forecast of 0 has log-odds -inf; the two logarithms and exp err by some units in the last place.
    assert found.brier == pytest.approx(float(record["expected"]["brier_half"]), rel=1e-14)


def test_area_under_the_curve_of_the_rated_images_of_1982_is_exact() -> None:
    record = fact("hanley_mcneil_1982")
    ratings = np.repeat(record["ratings"] * 2, record["normal"] + record["abnormal"]).astype(float)
    labels = np.repeat([0, 1], [sum(record["normal"]), sum(record["abnormal"])])
    auc = area_under_roc(ratings, labels)
    assert auc == float(Fraction(record["expected"]["auc"]))
    assert f"{auc:.3f}" == record["expected"]["auc_published"]


@pytest.mark.parametrize("seed", range(5))
def test_results_agree_with_scikit_learn(seed: int) -> None:
    rng = np.random.default_rng(seed)
    log_odds = np.round(rng.normal(0, 2, 300), 1)  # rounded: many ties
    labels = (rng.random(300) < 1 / (1 + np.exp(-log_odds))).astype(int)
    share = 1 / (1 + np.exp(-log_odds))
    base = np.full(300, 0.3)
    found = held_out_results(log_odds, labels, 0.3)
    assert (found.rows, found.events, found.base_rate) == (300, int(labels.sum()), 0.3)
    assert found.log_loss == pytest.approx(log_loss(labels, share), rel=1e-12)
    assert found.brier == pytest.approx(brier_score_loss(labels, share), rel=1e-12)
    assert found.auc == pytest.approx(roc_auc_score(labels, share), rel=1e-12)
    assert found.base_log_loss == pytest.approx(log_loss(labels, base), rel=1e-12)
    assert found.base_brier == pytest.approx(brier_score_loss(labels, base), rel=1e-12)


def test_order_of_the_rows_changes_no_bit() -> None:
    rng = np.random.default_rng(9)
    log_odds, labels = rng.normal(0, 3, 500), rng.integers(0, 2, 500)
    first = held_out_results(log_odds, labels, 0.4)
    for _ in range(20):
        order = rng.permutation(500)
        assert held_out_results(log_odds[order], labels[order], 0.4) == first


def test_far_log_odds_lose_nothing() -> None:
    """log(1 + exp(800)) is 800 to the last bit, and log(1 + exp(-800)) is below the smallest number."""
    found = held_out_results(np.array([800.0, 800.0]), np.array([0, 1]), 0.5)
    assert (found.log_loss, found.brier, found.auc) == (400.0, 0.5, 0.5)
    assert (found.base_log_loss, found.base_brier) == (math.log(2), 0.25)


@pytest.mark.parametrize("label", [0, 1])
def test_one_class_has_no_area_under_the_curve(label: int) -> None:
    assert held_out_results(np.array([0.5, -1.0]), np.array([label, label]), 0.25).auc is None


@pytest.mark.parametrize("seed", range(5))
def test_weighted_results_agree_with_scikit_learn(seed: int) -> None:
    rng = np.random.default_rng(seed)
    log_odds = np.round(rng.normal(0, 2, 300), 1)
    labels = (rng.random(300) < 1 / (1 + np.exp(-log_odds))).astype(int)
    weights = rng.uniform(0.01, 5.0, 300)
    share = 1 / (1 + np.exp(-log_odds))
    base = np.full(300, 0.3)
    found = held_out_results(log_odds, labels, 0.3, weights)
    assert (found.rows, found.events, found.base_rate) == (300, int(labels.sum()), 0.3)
    assert found.log_loss == pytest.approx(log_loss(labels, share, sample_weight=weights), rel=1e-12)
    assert found.brier == pytest.approx(brier_score_loss(labels, share, sample_weight=weights), rel=1e-12)
    assert found.auc == pytest.approx(roc_auc_score(labels, share, sample_weight=weights), rel=1e-12)
    assert found.base_log_loss == pytest.approx(log_loss(labels, base, sample_weight=weights), rel=1e-12)
    assert found.base_brier == pytest.approx(brier_score_loss(labels, base, sample_weight=weights), rel=1e-12)


def test_order_of_weighted_rows_changes_no_bit() -> None:
    rng = np.random.default_rng(9)
    log_odds, labels = np.round(rng.normal(0, 3, 500), 1), rng.integers(0, 2, 500)
    weights = rng.uniform(1e-6, 1e6, 500)
    first = held_out_results(log_odds, labels, 0.4, weights)
    for _ in range(20):
        order = rng.permutation(500)
        assert held_out_results(log_odds[order], labels[order], 0.4, weights[order]) == first


def test_row_weight_counts_as_so_many_rows() -> None:
    rng = np.random.default_rng(2)
    log_odds, labels, times = np.round(rng.normal(0, 2, 60), 1), rng.integers(0, 2, 60), rng.integers(1, 5, 60)
    weighted = held_out_results(log_odds, labels, 0.4, times.astype(float))
    repeated = held_out_results(np.repeat(log_odds, times), np.repeat(labels, times), 0.4)
    assert weighted.auc == repeated.auc  # sums of whole numbers are exact
    assert weighted.log_loss == pytest.approx(repeated.log_loss, rel=1e-15)
    assert weighted.brier == pytest.approx(repeated.brier, rel=1e-15)
    assert (weighted.rows, repeated.rows) == (60, int(times.sum()))


def test_area_of_rows_in_perfect_order_is_one_for_any_weights() -> None:
    weights = np.random.default_rng(1).uniform(1e-9, 1e9, 40)
    assert area_under_roc(np.arange(40.0), (np.arange(40) >= 15).astype(int), weights) == pytest.approx(1.0, rel=1e-14)
    assert area_under_roc(np.zeros(40), (np.arange(40) >= 15).astype(int), weights) == pytest.approx(0.5, rel=1e-14)


def test_log_loss_of_one_row_is_log_of_one_plus_exp_at_every_hard_point() -> None:
    """Of a row without the event it is log(1 + exp(z)); the record's values are rounded once from 2,600 bits."""
    points = [point for point in fact("softplus")["points"] if point["format"] == "binary64"]
    assert len(points) > 10
    for point in points:
        z, value = float.fromhex(point["z"]), float.fromhex(point["value"])
        found = held_out_results(np.array([z]), np.array([0]), 0.5).log_loss
        # The record says that a plain formula is off by at most 1 ulp; the quotient by the total adds half of one.
        assert abs(found - value) <= 2 * math.ulp(value), point["z"]
