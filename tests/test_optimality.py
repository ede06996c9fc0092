"""The fit held against the raw rows by code that shares nothing with the trainer: it agrees, and it finds mistakes."""

from __future__ import annotations

import csv
import importlib.util
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from export.optimality import AskedPrior, AskedTerm, Optimality, Source, recheck_fit
from runtime_min.model import Request, TrainedModel
from trainer.fit import fit_plan
from trainer.plan import Plan, read_plan
from trainer.request import request_of
from trainer.sources import row_files
from trainer.table import read_rows

INPUTS = """
[[input]]
name = "flow"
range = [0, 100]
missing = "typical"

[[input]]
name = "current"
range = [4, 60]
outside = "clamp"

[[input]]
name = "impeller"
levels = ["closed", "open", "semi"]
missing = "typical"
"""


def columns(count: int = 400) -> dict[str, list[str]]:
    """Invented pump records, with missing values, a current beyond its range, and weights of 0."""
    rng = np.random.default_rng(8)
    flow, current = rng.uniform(5, 95, count), rng.uniform(3, 62, count)
    impeller = rng.choice(["closed", "open", "semi"], count)
    z = 0.05 * flow - 0.06 * current + (impeller == "open") - 1
    state = np.where(rng.random(count) < 1 / (1 + np.exp(-z)), "cavitating", "sound")
    table = {
        "flow": [f"{value:.3f}" for value in flow],
        "current": [f"{value:.2f}" for value in current],
        "impeller": list(impeller),
        "state": list(state),
        "hours": [f"{value:.2f}" for value in rng.uniform(0.5, 9, count)],
        "pump": [f"p{number}" for number in rng.integers(0, 23, count)],
        "late": [str(number) for number in rng.integers(0, 2, count)],
    }
    for name, every in (("flow", 17), ("impeller", 29), ("current", 41)):
        table[name][::every] = [""] * len(table[name][::every])
    table["hours"][::37] = ["0"] * len(table["hours"][::37])
    return table


def write_csv(path: Path, table: dict[str, list[str]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(table)
        writer.writerows(zip(*table.values(), strict=True))


def arrays(table: dict[str, list[str]]) -> dict[str, np.ndarray]:
    numbers = ("flow", "current", "hours", "late")
    return {
        name: np.array([float(cell or "nan") for cell in cells]) if name in numbers else np.array(cells)
        for name, cells in table.items()
    }


def fitted(
    folder: Path, rows: str, prior: str = "sd = 1.0", file: str = "rows.csv"
) -> tuple[Plan, TrainedModel, Request]:
    if file.endswith(".csv") and "*" not in file:
        write_csv(folder / file, columns())
    text = f'model = "pump"\n[rows]\nfile = "{file}"\nlabel = "state"\nclasses = ["sound", "cavitating"]\n{rows}\n'
    (folder / "plan.toml").write_text(f"{text}{INPUTS}[prior]\n{prior}\n", encoding="utf-8")
    plan = read_plan(folder / "plan.toml")
    read = read_rows(plan)
    return plan, fit_plan(plan, read), request_of(plan, read)


def recheck(plan: Plan, trained: TrainedModel, request: Request) -> Optimality:
    rows = plan.rows
    files = row_files(rows.file, plan.path.parent)
    source = Source(files, rows.label, rows.held_out, rows.seed, rows.weight, rows.group)
    prior = plan.prior
    terms = tuple(AskedTerm(t.name, t.mean, t.sd, t.method == "shared", t.per == "unit") for t in prior.terms)
    asked = AskedPrior(prior.method, prior.sd, prior.intercept_sd, terms, plan.decision.prevalence)
    return recheck_fit(trained, request, source, asked)


PLANS = {
    "plain": ("seed = 3", "sd = 1.0"),
    "weights": ('weight = "hours"', "sd = 1.0"),
    "groups": ('group = "pump"\nseed = 5', "sd = 1.0"),
    "a column of held-out rows": ('held_out = "late"\nweight = "hours"', "sd = 0.5\nintercept_sd = 2.0"),
    "no rows held out": ("held_out = 0", "sd = inf"),
    "weights and groups": ('weight = "hours"\ngroup = "pump"', "sd = 1.0"),
    "priors of terms": ('weight = "hours"', 'sd = 1.0\n[prior.term.flow]\nmean = 0.5\nsd = 0.25\nper = "unit"'),
    "a chosen strength": ('group = "pump"', 'sd = "cross-validation"'),
    "a prevalence": ("", "sd = 1.0\n[decision]\nprevalence = 0.02"),
}


@pytest.mark.parametrize("name", PLANS)
def test_fit_of_any_plan_is_the_optimum_of_the_raw_rows(name: str, tmp_path: Path) -> None:
    found = recheck(*fitted(tmp_path, *PLANS[name]))
    assert found.problems == ()
    assert 0 < found.step < 1e-3
    assert 100 < found.rows < 400


@pytest.mark.parametrize("ending", [".npz", ".parquet"])
def test_fit_of_arrays_in_a_file_is_the_optimum_of_the_raw_rows(ending: str, tmp_path: Path) -> None:
    table = arrays(columns())
    if ending == ".npz":
        np.savez(tmp_path / "rows.npz", **table)
    else:
        if importlib.util.find_spec("pyarrow") is None:
            pytest.skip("the reader of Parquet is not installed: pip install pyarrow")
        arrow, parquet = importlib.import_module("pyarrow"), importlib.import_module("pyarrow.parquet")
        parquet.write_table(arrow.table(table), tmp_path / "rows.parquet")
    rows = 'weight = "hours"\ngroup = "pump"'
    from_arrays = fitted(tmp_path, rows, file=f"rows{ending}")
    assert recheck(*from_arrays).problems == ()
    (tmp_path / "csv").mkdir()
    assert fitted(tmp_path / "csv", rows)[1].scores == from_arrays[1].scores


def test_fit_of_several_files_is_the_optimum_of_the_raw_rows(tmp_path: Path) -> None:
    table = columns()
    for part in range(3):
        write_csv(tmp_path / f"week{part}.csv", {name: cells[part::3] for name, cells in table.items()})
    assert recheck(*fitted(tmp_path, 'group = "pump"', file="week*.csv")).problems == ()


# --- planted mistakes -------------------------------------------------------------------------------------------------


def moved_weight(trained: TrainedModel) -> TrainedModel:
    score = trained.scores[0]
    return replace(trained, scores=(replace(score, weights=(score.weights[0] + 2.0**-20, *score.weights[1:])),))


def moved_centre(trained: TrainedModel) -> TrainedModel:
    first, *rest = trained.terms
    return replace(trained, terms=(replace(first, centre=first.centre + first.scale * 1e-9), *rest))


def sample_sd(trained: TrainedModel) -> TrainedModel:
    first, *rest = trained.terms
    count = trained.rows.fitted
    return replace(trained, terms=(replace(first, scale=first.scale * (count / (count - 1)) ** 0.5), *rest))


def reversed_classes(trained: TrainedModel) -> TrainedModel:
    return replace(trained, classes=trained.classes[::-1], class_weights=trained.class_weights[::-1])


def wider_prior(trained: TrainedModel) -> TrainedModel:
    return replace(trained, prior=replace(trained.prior, sds=(1.1, *trained.prior.sds[1:])))


def other_typical(trained: TrainedModel) -> TrainedModel:
    first, *rest = trained.inputs
    return replace(trained, inputs=(replace(first, typical=(first.typical or 0) * 1.001), *rest))


@pytest.mark.parametrize(
    ("mistake", "told"),
    [
        (moved_weight, '"flow" is 9.5e-07 from the optimum'),
        (moved_centre, '"flow" has mean'),
        (sample_sd, '"flow" has mean'),
        (reversed_classes, "from the optimum"),
        (wider_prior, "from the optimum"),
        (other_typical, '"flow" has the typical value'),
    ],
)
def test_mistake_in_the_trained_model_is_found(
    mistake: Callable[[TrainedModel], TrainedModel], told: str, tmp_path: Path
) -> None:
    plan, trained, request = fitted(tmp_path, 'weight = "hours"')
    assert told in "; ".join(recheck(plan, mistake(trained), request).problems)


@pytest.mark.parametrize(
    ("asked", "done", "told"),
    [
        ('weight = "hours"', "", "the fitted rows weigh"),
        ('group = "pump"', "", "from the optimum"),
        ("seed = 1", "seed = 2", "from the optimum"),
        ('held_out = "late"', "held_out = 0", "rows are to be fitted"),
    ],
)
def test_fit_that_left_out_what_the_plan_asks_is_found(asked: str, done: str, told: str, tmp_path: Path) -> None:
    (tmp_path / "done").mkdir()
    _, trained, _ = fitted(tmp_path / "done", done)
    plan, _, request = fitted(tmp_path, asked)
    assert told in "; ".join(recheck(plan, trained, request).problems)


@pytest.mark.parametrize(
    ("asked", "told"),
    [
        ("sd = 2.0", 'the prior of "current"'),
        ("sd = 1.0\nintercept_sd = 3.0", "the prior of the intercept"),
        ("sd = 1.0\n[prior.term.flow]\nmean = 0.5", 'the prior of "flow"'),
        ('sd = 1.0\n[prior.term.flow]\nsd = 1.0\nper = "unit"', 'the prior of "flow"'),
        ('sd = 1.0\n[prior.term."impeller=open"]\nsd = 0.5', 'the prior of "impeller=open"'),
        ("sd = 1.0\n[decision]\nprevalence = 0.02", "the plan states the prevalence 1/50, the trained model None"),
    ],
)
def test_prior_or_prevalence_other_than_the_plan_is_found(asked: str, told: str, tmp_path: Path) -> None:
    (tmp_path / "done").mkdir()
    _, trained, _ = fitted(tmp_path / "done", "")
    plan, _, request = fitted(tmp_path, "", asked)
    assert told in "; ".join(recheck(plan, trained, request).problems)


def test_strength_that_is_not_the_lowest_of_its_curve_is_found(tmp_path: Path) -> None:
    plan, trained, request = fitted(tmp_path, "", 'sd = "cross-validation"')
    assert trained.choice is not None
    worst = max(trained.choice.strengths, key=lambda strength: strength.log_loss)
    wrong = replace(trained, choice=replace(trained.choice, sd=worst.sd))
    assert "has not the lowest log loss" in "; ".join(recheck(plan, wrong, request).problems)


def test_other_rows_than_those_of_the_fit_are_found(tmp_path: Path) -> None:
    plan, trained, request = fitted(tmp_path, "")
    with plan.rows.file.open("a", encoding="utf-8") as file:
        file.write("50,20,open,sound,1,p1,0\n")
    problems = "; ".join(recheck(plan, trained, request).problems)
    assert "401 rows are read" in problems
    assert "other bytes" in problems
