"""What data cannot answer is named, with the column and what to do: every message in full."""

from __future__ import annotations

import math

import numpy as np
import pytest

from trainer import judge as module
from trainer.judge import judge
from trainer.objective import Prior
from trainer.solve import solve
from trainer.standardise import standardise

NAMES = ("suction", "flow", "current", "vibration")
CLASSES = ("sound", "cavitating")
FLAT = math.inf


def prior(width: int, sd: float = 1.0, **intercept: float) -> Prior:
    return Prior((0.0,) * width, (sd,) * width, **intercept)


def rows(width: int = 3, count: int = 400) -> tuple[np.ndarray, np.ndarray]:
    """Overlapping classes, nothing wrong."""
    draws = np.random.default_rng(1)
    values = draws.normal(size=(count, width)) * 5.0 + 100.0
    labels = (draws.random(count) < 1.0 / (1.0 + np.exp(20.0 - 0.2 * values[:, 0]))).astype(int)
    return values, labels


def said(values: np.ndarray, labels: np.ndarray, prior: Prior, row_weights: np.ndarray | None = None) -> list[str]:
    problems = judge(values, labels, row_weights, prior, NAMES[: values.shape[1]], CLASSES)
    return [str(problem) for problem in problems]


@pytest.mark.parametrize("sd", [1e-4, 1.0, FLAT])
def test_good_rows_pass(sd: float) -> None:
    values, labels = rows()
    assert said(values, labels, prior(3, sd)) == []
    assert said(values, labels, prior(3, sd), np.where(np.arange(400) % 2, 0.0, 1e12)) == []


def test_nan_and_infinity_are_named_by_column_and_row() -> None:
    values, labels = rows()
    values[6, 1] = math.nan
    values[[9, 30], 2] = math.inf
    assert said(values, labels, prior(3)) == [
        'rows: column "flow": NaN or infinity in 1 row, first in row 7; remove or repair what was recorded there',
        'rows: column "current": NaN or infinity in 2 rows, first in row 10; remove or repair what was recorded there',
    ]


def test_labels_that_are_no_class_are_named() -> None:
    values, labels = rows()
    wrong = labels.astype(float)
    wrong[[3, 5]] = math.nan, 2.0
    assert said(values, wrong, prior(3)) == [
        "rows: label: 2 rows without a class, first row 4; give each row one of the 2 classes"
    ]


def test_bad_row_weights_are_named() -> None:
    values, labels = rows()
    weights = np.ones(400)
    weights[[4, 8, 9]] = -1.0, math.nan, math.inf
    assert said(values, labels, prior(3), weights) == [
        "rows: weight: 3 weights negative, infinite or NaN, first in row 5; give each row a finite weight of 0 or more"
    ]


def test_class_without_rows_or_weight_is_named() -> None:
    values, labels = rows()
    expected = [
        'rows: class "cavitating": no row with a weight above 0; add rows of this class, or leave it out',
    ]
    assert said(values, np.zeros(400, dtype=int), prior(3)) == expected
    assert said(values, labels, prior(3), np.where(labels == 1, 0.0, 1.0)) == expected


def test_no_weight_at_all_leaves_both_classes_without_rows() -> None:
    values, labels = rows()
    assert len(said(values, labels, prior(3), np.zeros(400))) == 2


@pytest.mark.parametrize("sd", [1.0, FLAT])
def test_constant_column_is_refused_under_any_prior(sd: float) -> None:
    values, labels = rows()
    values[:, 1] = 0.1
    expected = ['rows: column "flow": the same value, 0.1, in every row; remove the column']
    assert said(values, labels, prior(3, sd)) == expected
    values[5, 1] = 7.0  # only the row without weight differs
    assert said(values, labels, prior(3, sd), np.where(np.arange(400) == 5, 0.0, 1.0)) == expected


def test_level_that_no_row_has_is_named_as_a_level() -> None:
    values, labels = rows()
    values[:, 1] = 0.0
    problems = judge(values, labels, None, prior(3), ("flow", "wheel=open", "head"), CLASSES)
    assert [str(problem) for problem in problems] == [
        'rows: no fitted row has the level "open" of wheel; remove it from the levels of wheel, or hold out fewer rows'
    ]


def test_narrow_prior_is_refused() -> None:
    values, labels = rows()
    found = said(values, labels, Prior((0.0, math.nan, 0.0), (1e-5, 1.0, math.nan), 0.0))
    assert found == [
        'prior: column "suction": sd 1e-05 below 0.0001; use 0.0001 or more, or leave the term out',
        'prior: column "current": sd nan below 0.0001; use 0.0001 or more, or leave the term out',
        "prior: intercept_sd: sd 0 below 0.0001; use 0.0001 or more, or leave the term out",
        'prior: column "flow": mean nan; give a finite mean',
    ]


def test_all_problems_come_at_once() -> None:
    values, _ = rows()
    values[:, 2] = 3.0
    assert len(said(values, np.ones(400, dtype=int), prior(3))) == 2


def test_duplicate_column_is_named_under_a_flat_prior_only() -> None:
    values, labels = rows()
    twice = np.column_stack((values, 3.0 * values[:, 1] - 8.0))
    assert said(twice, labels, prior(4, FLAT)) == [
        'rows: column "vibration": repeats column "flow", which a flat prior cannot tell apart; '
        "remove it, or give these columns a prior with a finite sd"
    ]
    assert said(twice, labels, prior(4)) == []


def test_collinear_sum_is_named_with_its_makers() -> None:
    values, labels = rows()
    summed = np.column_stack((values, values[:, 0] - 2.0 * values[:, 2] + 1e6))
    assert said(summed, labels, prior(4, FLAT)) == [
        'rows: column "vibration": a sum of multiples of "suction", "current", which a flat prior cannot tell apart; '
        "remove it, or give these columns a prior with a finite sd"
    ]


def test_one_prior_among_duplicates_is_enough() -> None:
    values, labels = rows()
    twice = np.column_stack((values, values[:, 1]))
    assert said(twice, labels, Prior((0.0,) * 4, (FLAT, FLAT, FLAT, 2.0))) == []


def test_nearly_collinear_columns_can_be_told_apart() -> None:
    """Correlation 1 − 1e-10 leaves 1e-10 of the variance, a thousand times what rounding leaves in doubt."""
    values, labels = rows()
    draws = np.random.default_rng(2)
    near = np.column_stack((values, values[:, 1] + 7e-5 * draws.normal(size=400)))
    assert said(near, labels, prior(4, FLAT)) == []


def test_more_flat_weights_than_rows_are_refused() -> None:
    values, labels = rows(width=4)
    few = np.flatnonzero(labels)[:1].tolist() + np.flatnonzero(labels == 0)[:3].tolist()
    assert said(values[few], labels[few], prior(4, FLAT)) == [
        "rows: 4 rows for 5 weights under a flat prior; give the terms a prior with a finite sd, or add rows"
    ]
    assert said(values[few], labels[few], prior(4)) == []


def separated_by(what: str) -> str:
    return (
        f'{what} the classes "sound" and "cavitating", so that no finite weight fits best; '
        "give {} a prior with a finite sd, or add rows where the classes overlap"
    )


def test_complete_separation_names_the_column() -> None:
    values, _ = rows()
    labels = (values[:, 1] > 103.0).astype(int)
    assert said(values, labels, prior(3, FLAT)) == [
        separated_by('rows: column "flow": separates').format("it"),
    ]
    assert said(values, labels, prior(3)) == []


def test_separation_by_two_columns_names_both() -> None:
    values, _ = rows()
    labels = (values[:, 1] + values[:, 2] > 203.0).astype(int)
    assert said(values, labels, prior(3, FLAT)) == [
        separated_by('rows: columns "flow", "current": together separate').format("them"),
    ]


def test_quasi_separation_by_a_level_names_it() -> None:
    """Every row of the level is an event, the others are mixed."""
    values, labels = rows()
    level = (np.arange(400) % 9 == 0).astype(float)
    labels = np.where(level > 0, 1, labels)
    assert said(np.column_stack((values, level)), labels, prior(4, FLAT)) == [
        separated_by('rows: column "vibration": separates').format("it"),
    ]
    mixed = Prior((0.0,) * 4, (FLAT, FLAT, FLAT, 1.0))
    assert said(np.column_stack((values, level)), labels, mixed) == []


def test_quasi_separation_at_a_border_value_is_found() -> None:
    """Both classes at exactly 100, else sides apart (Albert and Anderson 1984, quasi-complete)."""
    values, _ = rows()
    values[:20, 0] = 100.0
    labels = (values[:, 0] > 100.0).astype(int)
    labels[:10] = 1
    assert said(values, labels, prior(3, FLAT)) == [separated_by('rows: column "suction": separates').format("it")]


def test_one_overlapping_row_among_many_is_enough() -> None:
    """The sample that is tried first is separated, the whole is not."""
    draws = np.random.default_rng(3)
    values = draws.normal(size=(20_000, 2))
    labels = (values[:, 0] > 0.0).astype(int)
    deepest = np.argsort(values[:, 0])[[0, -1]]
    labels[deepest] = 1 - labels[deepest]
    assert judge(values, labels, None, prior(2, FLAT), NAMES[:2], CLASSES) == ()
    solution = solve(standardise(values, None, [True, True]).columns, labels, None, prior(2, FLAT))
    assert solution.newton_decrement <= 1e-6


def test_separating_columns_beyond_six_are_counted() -> None:
    draws = np.random.default_rng(4)
    values = draws.normal(size=(3000, 9))
    labels = (values.sum(axis=1) > 0.0).astype(int)
    (problem,) = judge(values, labels, None, prior(9, FLAT), [f"x{j}" for j in range(9)], CLASSES)
    assert problem.where == 'rows: columns "x0", "x1", "x2", "x3", "x4", "x5" and 3 more'


def test_usual_fit_calls_no_linear_programme(monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object) -> list[object]:
        raise AssertionError("called")

    monkeypatch.setattr(module, "separation_problems", fail)
    values, labels = rows()
    assert said(values, labels, prior(3, FLAT)) == []
