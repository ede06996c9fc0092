"""From a plan and its rows to a trained model. The rows are invented.

Expected weights: scikit-learn's LogisticRegression with C = sd^2 on standardised columns.
"""

from __future__ import annotations

import math
import random
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from sklearn.linear_model import LogisticRegression

from runtime_min.errors import FitError
from runtime_min.sealing import seal_request
from runtime_min.validity import trained_problems
from trainer import fit_plan, read_plan, read_rows
from trainer.request import request_of
from trainer.split import held_out_rows

PLAN = """
model = "pump"
[rows]
file = "runs.csv"
label = "state"
classes = ["sound", "cavitating"]
held_out = 0.25
seed = 5
[[input]]
name = "flow"
unit = "m3/h"
range = [0.0, 100.0]
missing = "typical"
[[input]]
name = "impeller"
levels = ["closed", "semi_open", "open"]
missing = "typical"
[[input]]
name = "water"
range = [1.00000005960464477539063, 45.0]
outside = "clamp"
[prior]
sd = 1.5
"""


def written(folder: Path, shuffle: int | None = None, plan: str = PLAN, rows: int = 160) -> Path:
    rng = random.Random(8)
    lines = []
    for _ in range(rows):
        flow, impeller, water = rng.uniform(0, 100), rng.randrange(3), rng.uniform(-5, 45)
        z = (50 - flow) / 15 + (0, 1, -1)[impeller]
        state = "cavitating" if rng.random() < 1 / (1 + math.exp(-z)) else "sound"
        shown = ["" if rng.random() < 0.1 else f"{flow:.2f}"]
        shown += ["" if rng.random() < 0.1 else ("closed", "semi_open", "open")[impeller], f"{water:.1f}", state]
        lines.append(",".join(shown))
    if shuffle is not None:
        random.Random(shuffle).shuffle(lines)
    (folder / "runs.csv").write_text("flow,impeller,water,state\n" + "\n".join(lines) + "\n", encoding="utf-8")
    (folder / "plan.toml").write_text(plan, encoding="utf-8")
    return folder / "plan.toml"


def test_plan_is_fitted_on_the_rows_that_it_does_not_hold_out(tmp_path: Path) -> None:
    plan = read_plan(written(tmp_path))
    rows = read_rows(plan)
    trained = fit_plan(plan, rows)
    out = held_out_rows(rows, plan.rows.held_out, plan.rows.seed)
    fitted = rows.values[~out].copy()
    flow, impeller = fitted[:, 0], fitted[:, 1]
    assert np.isnan(flow).any()
    assert np.isnan(impeller).any()
    flow[np.isnan(flow)] = np.nanmean(flow)
    commonest = np.bincount(impeller[~np.isnan(impeller)].astype(int)).argmax()
    impeller[np.isnan(impeller)] = commonest
    assert [entry.typical for entry in trained.inputs] == pytest.approx([flow.mean(), commonest, fitted[:, 2].mean()])
    assert [term.name for term in trained.terms] == ["flow", "impeller=semi_open", "impeller=open", "water"]
    columns = np.column_stack([flow, impeller == 1, impeller == 2, fitted[:, 2]]).astype(float)
    for position in (0, 3):
        columns[:, position] = (columns[:, position] - columns[:, position].mean()) / columns[:, position].std()
    reference = LogisticRegression(C=1.5**2, tol=1e-12, solver="newton-cholesky", max_iter=1000)
    reference.fit(columns, rows.labels[~out])
    assert trained.weights == pytest.approx(reference.coef_[0], abs=2e-9)
    assert trained.intercept == pytest.approx(reference.intercept_[0], abs=2e-9)
    assert (trained.rows.total, trained.rows.dropped) == (160, 0)
    assert (trained.rows.fitted, trained.rows.held_out) == (int(np.sum(~out)), int(np.sum(out))) == (120, 40)
    assert trained.held_out is not None
    assert (trained.held_out.rows, trained.held_out.events) == (40, int(rows.labels[out].sum()))
    assert trained.held_out.base_rate == rows.labels[~out].mean()
    assert trained.held_out.log_loss < trained.held_out.base_log_loss
    assert trained_problems(trained) == []


def test_held_out_rows_change_nothing_but_their_results(tmp_path: Path) -> None:
    plan = read_plan(written(tmp_path))
    rows = read_rows(plan)
    out = held_out_rows(rows, plan.rows.held_out, plan.rows.seed)
    values, labels = rows.values.copy(), rows.labels.copy()
    values[out] = [99.0, 2.0, 2.0]
    labels[out] = 1
    first, other = fit_plan(plan, rows), fit_plan(plan, replace(rows, values=values, labels=labels))
    assert other.held_out != first.held_out
    assert other.held_out is not None
    assert other.held_out.auc is None
    assert replace(other, held_out=None) == replace(first, held_out=None)


def test_nothing_held_out_gives_no_results(tmp_path: Path) -> None:
    plan = read_plan(written(tmp_path, plan=PLAN.replace("held_out = 0.25", "held_out = 0")))
    trained = fit_plan(plan, read_rows(plan))
    assert trained.held_out is None
    assert (trained.rows.fitted, trained.rows.held_out) == (160, 0)


@pytest.mark.parametrize("arithmetic", ["binary32", "binary64"])
def test_order_of_the_rows_changes_neither_model_id_nor_results(arithmetic: str, tmp_path: Path) -> None:
    text = PLAN + f'[device]\narithmetic = "{arithmetic}"\n'
    seen = set()
    for shuffle in (None, *range(6)):
        plan = read_plan(written(tmp_path, shuffle, text))
        rows = read_rows(plan)
        trained = fit_plan(plan, rows)
        sealed = seal_request(trained, request_of(plan, rows))
        seen.add(
            (sealed.model_id, trained.inputs, trained.terms, trained.scores, trained.class_weights, trained.held_out)
        )
    assert len(seen) == 1


def test_witness_of_a_plan_lies_within_the_device_limits(tmp_path: Path) -> None:
    """The lower limit of the water is one that rounds twice to another binary32 number than once."""
    plan = read_plan(written(tmp_path))
    rows = read_rows(plan)
    trained = fit_plan(plan, rows)
    sealed = seal_request(trained, request_of(plan, rows))
    assert sealed.arithmetic == "binary32"
    assert sealed.inputs[2].low > 1
    for witness in trained.witness:
        for value, entry in zip(witness.inputs, sealed.inputs, strict=True):
            assert entry.low <= np.float32(value) <= entry.high


def test_input_without_a_value_in_the_fitted_rows_is_named(tmp_path: Path) -> None:
    plan = read_plan(written(tmp_path))
    rows = read_rows(plan)
    values = rows.values.copy()
    values[:, 0] = math.nan
    with pytest.raises(FitError) as caught:
        fit_plan(plan, replace(rows, values=values))
    assert str(caught.value) == '[[input]] "flow": found no value in any of the 120 fitted rows; remove the input'


def test_level_that_no_fitted_row_has_is_named(tmp_path: Path) -> None:
    plan = read_plan(written(tmp_path))
    rows = read_rows(plan)
    values = rows.values.copy()
    values[values[:, 1] == 2, 1] = 0
    with pytest.raises(FitError) as caught:
        fit_plan(plan, replace(rows, values=values))
    assert 'no fitted row has the level "open" of impeller; remove it from the levels of impeller' in str(caught.value)
