"""The outside data sets through a plan and a CSV file, row weights included: optima to 25 digits, published fits.

Sources: each record of `check_values/sets`; the deviance of the beetle data is 11.23 in Dobson, An Introduction to
Generalized Linear Models, Table 7.3 (as the record says).
"""

from __future__ import annotations

import csv
import math
from collections import defaultdict
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from check_sets import FOLDER, TWO_CLASS_SETS, check_set

from runtime_min.model import TrainedModel
from trainer import fit_plan, read_plan, read_rows
from trainer.witness import log_odds_with_bounds

CASES = [
    pytest.param(name, fit, id=f"{name}, sd {fit['prior']['sd']}")
    for name in TWO_CLASS_SETS
    for fit in check_set(name).record["map"]["fits"]
]
WEIGHTED_SETS = ("beetle", "orings_grouped", "womensrole")


def fitted(name: str, folder: Path, sd: object) -> TrainedModel:
    record = check_set(name).record
    weight = f'weight = "{record["weight"]}"' if record.get("weight") else ""
    classes = [*(c for c in record["classes"] if c != record["event"]), record["event"]]
    text = (
        f'model = "outside"\n[rows]\nfile = "{FOLDER / record["data"]}"\nlabel = "{record["label"]}"\n'
        f"classes = {classes}\nheld_out = 0\n{weight}\n[prior]\nsd = {sd}\n"
    )
    for position, column in enumerate(record["inputs"]):
        text += f'[[input]]\nname = "x{position}"\ncolumn = "{column}"\n'
    (folder / "plan.toml").write_text(text.replace("'", '"'), encoding="utf-8")
    plan = read_plan(folder / "plan.toml")
    return fit_plan(plan, read_rows(plan))


@pytest.mark.parametrize(("name", "fit"), CASES)
def test_plan_and_rows_give_the_optimum_to_the_grid(name: str, fit: dict, tmp_path: Path) -> None:  # type: ignore[type-arg]
    data = check_set(name)
    trained = fitted(name, tmp_path, fit["prior"]["sd"])
    names = ["intercept", *data.record["inputs"]]
    expected = [float(fit["standardised"][key]) for key in names]
    # Half a step of 2^-30, and what centres and scales of 40 bits move the optimum by.
    largest = max(map(abs, expected))
    assert [trained.intercept, *trained.weights] == pytest.approx(expected, abs=2.0**-31 + 1e-11 * largest, rel=0)
    total = math.fsum(trained.class_weights)
    assert total == float(data.record["total_weight"] if data.row_weights is not None else len(data.labels))
    log_odds, _ = log_odds_with_bounds(trained.terms, trained.scores[0], data.values)
    columns = (data.values - [term.centre for term in trained.terms]) / [term.scale for term in trained.terms]
    for row in fit["rows"]:
        error = 2.0**-31 * (1 + np.abs(columns[row["row"]]).sum()) + 1e-9 * (1 + abs(float(row["log_odds"])))
        assert abs(log_odds[row["row"]] - float(row["log_odds"])) <= error


@pytest.mark.parametrize("name", [n for n in TWO_CLASS_SETS if check_set(n).record["published"]["values"]])
def test_plan_with_a_flat_prior_gives_the_published_fit(name: str, tmp_path: Path) -> None:
    data = check_set(name)
    trained = fitted(name, tmp_path, "inf")
    folded = trained.folded()
    names = ["intercept", *data.record["inputs"]]
    # Per unit: w = W / scale, b = B - Σ W centre / scale; the covariance follows the same map.
    scales = np.array([term.scale for term in trained.terms])
    to_units = np.diag([1.0, *(1.0 / scales)])
    to_units[0, 1:] = -np.array([term.centre for term in trained.terms]) / scales
    errors = np.sqrt(np.diag(to_units @ np.array(trained.covariance) @ to_units.T))
    coefficients = (folded.intercept, *folded.weights)
    found = {("coefficient", key): number for key, number in zip(names, coefficients, strict=True)}
    found |= {("standard_error", key): number for key, number in zip(names, errors, strict=True)}
    # Half a step of the grid in each weight; some records state more digits than that leaves.
    grid = dict(zip(names, 2.0**-31 * np.abs(to_units).sum(axis=1), strict=True))
    log_odds, _ = log_odds_with_bounds(trained.terms, trained.scores[0], data.values)
    weights = np.ones(len(data.labels)) if data.row_weights is None else data.row_weights
    log_likelihood = -float(weights @ np.logaddexp(0.0, np.where(data.labels == 1, -log_odds, log_odds)))
    found |= {("deviance", None): -2.0 * log_likelihood, ("log_likelihood", None): log_likelihood}
    compared = 0
    for value in data.record["published"]["values"]:
        key = (value["what"], value.get("term"))
        if key in found:
            compared += 1
            assert abs(found[key] - float(value["published"])) <= value["tolerance"] + grid.get(key[1], 0.0), key
    assert compared >= len(names)


def test_deviance_of_the_beetle_groups_is_the_published_one(tmp_path: Path) -> None:
    """2 Σ count ln(observed share / fitted share) over the two rows of each dose."""
    data = check_set("beetle")
    trained = fitted("beetle", tmp_path, "inf")
    log_odds, _ = log_odds_with_bounds(trained.terms, trained.scores[0], data.values)
    with (FOLDER / data.record["data"]).open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    totals: dict[str, float] = defaultdict(float)
    for row in rows:
        totals[row["dose"]] += float(row["count"])
    deviance = 0.0
    for row, z in zip(rows, log_odds.tolist(), strict=True):
        fitted_share = 1.0 / (1.0 + math.exp(-z if row["y"] == "1" else z))
        deviance += 2.0 * float(row["count"]) * math.log(float(row["count"]) / totals[row["dose"]] / fitted_share)
    assert abs(deviance - 11.23) <= 0.0051


@pytest.mark.parametrize("name", WEIGHTED_SETS)
def test_typical_value_of_weighted_rows_is_their_weighted_mean(name: str, tmp_path: Path) -> None:
    data = check_set(name)
    trained = fitted(name, tmp_path, 1.0)
    assert data.row_weights is not None
    exact = [Fraction(weight) for weight in data.row_weights.tolist()]
    for entry, column, key in zip(trained.inputs, data.values.T, data.record["inputs"], strict=True):
        mean = sum(w * Fraction(v) for w, v in zip(exact, column.tolist(), strict=True)) / sum(exact)
        assert entry.typical == pytest.approx(float(mean), rel=1e-15)
        assert entry.typical == pytest.approx(float(data.record["map"]["mean"][key]), rel=1e-14)
