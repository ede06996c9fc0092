"""From arrays to a trained model, end to end.

Sources: `check_values/facts/pima_test_scores.json` (mpmath and scikit-learn) and `check_values/sets/pima_tr.json` (a
published fit without a prior; optima to 25 digits); scikit-learn's LogisticRegression with C = sd^2 on standardised
columns.
"""

from __future__ import annotations

import csv
import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas
import pytest
from sklearn.linear_model import LogisticRegression

from runtime_min.codec import load_trained, trained_text
from runtime_min.errors import FirmlogitError, FitError, RowsError
from runtime_min.names import NAME_RULE
from runtime_min.validity import trained_problems
from trainer import fit_map
from trainer.arrays import _span
from trainer.operate import held_out_results
from trainer.witness import INVENTED_ROWS, log_odds_with_bounds

CHECK_VALUES = Path(__file__).parent / "check_values"
SCORES = json.loads((CHECK_VALUES / "facts" / "pima_test_scores.json").read_text(encoding="utf-8"))
PIMA = json.loads((CHECK_VALUES / "sets" / "pima_tr.json").read_text(encoding="utf-8"))
Floats = npt.NDArray[np.float64]


def pima(name: str) -> tuple[Floats, list[str]]:
    with (CHECK_VALUES / "data" / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    return np.array([[float(row[key]) for key in SCORES["inputs"]] for row in rows]), [row["type"] for row in rows]


def invented(n: int = 60, seed: int = 3) -> tuple[Floats, npt.NDArray[np.int64]]:
    rng = np.random.default_rng(seed)
    X = rng.normal([5.0, -2.0], [2.0, 0.5], (n, 2))
    return X, (rng.random(n) < 1 / (1 + np.exp(5 - X[:, 0]))).astype(np.int64)


def problems_of(*arguments: Any, **options: Any) -> list[str]:
    with pytest.raises(FirmlogitError) as caught:
        fit_map(*arguments, **options)
    return [str(problem) for problem in caught.value.problems]


# --- against the outside ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("expected", SCORES["expected"], ids=lambda entry: f"sd {entry['prior_sd']}")
def test_pima_test_rows_are_scored_as_recorded(expected: dict[str, Any]) -> None:
    X, y = pima("pima_tr")
    trained = fit_map(X, y, sd=float(expected["prior_sd"]), names=SCORES["inputs"])
    assert trained.classes == ("No", "Yes")
    test_X, test_y = pima("pima_te")
    labels = np.array([int(label == SCORES["event"]) for label in test_y])
    log_odds, _ = log_odds_with_bounds(trained.terms, trained.scores[0], test_X)
    said = log_odds >= 0  # probability 0.5
    assert np.sum(said & (labels == 1)) == expected["true_positive"]
    assert np.sum(said & (labels == 0)) == expected["false_positive"]
    assert np.sum(~said & (labels == 1)) == expected["false_negative"]
    assert np.sum(~said & (labels == 0)) == expected["true_negative"]
    found = held_out_results(log_odds, labels, 68 / 200)
    # The tolerance of the record; that weights are kept in steps of 2^-30 costs less over 332 rows.
    assert found.log_loss == pytest.approx(float(expected["mean_log_loss"]), abs=1e-10)
    assert found.brier == pytest.approx(float(expected["brier"]), abs=1e-10)
    above, below = map(int, expected["auc"].split("/"))
    assert found.auc == above / below


@pytest.mark.parametrize("fit", PIMA["map"]["fits"], ids=lambda fit: f"sd {fit['prior']['sd']}")
def test_pima_weights_are_the_optimum_on_the_grid(fit: dict[str, Any]) -> None:
    X, y = pima("pima_tr")
    trained = fit_map(X, y, sd=float(fit["prior"]["sd"]), names=SCORES["inputs"])
    expected = fit["standardised"]
    # Half a step of 2^-30, and what centres and scales of 40 bits move the optimum by: 2^-40 of the columns' unit.
    for found, name in zip((trained.intercept, *trained.weights), ("intercept", *SCORES["inputs"]), strict=True):
        assert found == pytest.approx(float(expected[name]), abs=2.0**-31 + 1e-11)
        assert found * 2.0**30 == round(found * 2.0**30)


def test_folded_pima_fit_without_prior_is_the_published_one() -> None:
    X, y = pima("pima_tr")
    folded = fit_map(X, y, sd=math.inf, names=SCORES["inputs"]).folded()
    found = dict(zip(["intercept", *SCORES["inputs"]], [folded.intercept, *folded.weights], strict=True))
    values = [value for value in PIMA["published"]["values"] if value["what"] == "coefficient"]
    assert len(values) == 8
    for value in values:
        assert abs(found[value["term"]] - float(value["published"])) <= value["tolerance"]


@pytest.mark.parametrize("weighted", [False, True])
def test_fit_agrees_with_scikit_learn(weighted: bool) -> None:
    X, y = invented(200)
    weights = np.random.default_rng(1).uniform(0.2, 3, 200) if weighted else np.ones(200)
    mean = np.average(X, axis=0, weights=weights)
    sd = np.sqrt(np.average((X - mean) ** 2, axis=0, weights=weights))
    reference = LogisticRegression(C=0.7**2, tol=1e-12, solver="newton-cholesky", max_iter=1000)
    reference.fit((X - mean) / sd, y, sample_weight=weights)
    trained = fit_map(X, y, sd=0.7, row_weights=weights if weighted else None)
    assert trained.weights == pytest.approx(reference.coef_[0], abs=2e-9)
    assert trained.intercept == pytest.approx(reference.intercept_[0], abs=2e-9)


# --- what fit_map returns --------------------------------------------------------------------------------------------


def test_trained_model_is_complete_and_valid(tmp_path: Path) -> None:
    X, y = invented()
    trained = fit_map(X, y, names=["flow", "current"], sd=[0.5, math.inf], intercept_sd=10.0)
    assert trained_problems(trained) == []
    (tmp_path / "trained.json").write_text(trained_text(trained), encoding="utf-8")
    assert load_trained(tmp_path / "trained.json") == trained
    assert (trained.prior.means, trained.prior.sds, trained.prior.intercept_sd) == ((0.0, 0.0), (0.5, None), 10.0)
    assert trained.class_weights == (float(np.sum(y == 0)), float(np.sum(y == 1)))
    assert (trained.rows.total, trained.rows.fitted, trained.rows.held_out, trained.rows.sha256) == (60, 60, 0, None)
    assert trained.held_out is None
    assert [entry.typical for entry in trained.inputs] == [term.centre for term in trained.terms]
    assert [term.centre for term in trained.terms] == pytest.approx(X.mean(axis=0), abs=1e-11)
    assert [term.scale for term in trained.terms] == pytest.approx(X.std(axis=0), rel=1e-11)
    assert trained.certificate.distance <= 1e-6


def test_covariance_is_the_inverse_hessian_intercept_first() -> None:
    X, y = invented()
    trained = fit_map(X, y, sd=0.8)
    columns = np.column_stack([np.ones(60), (X - X.mean(axis=0)) / X.std(axis=0)])
    z = columns @ np.array([trained.intercept, *trained.weights])
    share = 1 / (1 + np.exp(-z))
    hessian = (columns.T * (share * (1 - share))) @ columns + np.diag([0, 0.8**-2, 0.8**-2])
    inverse = np.linalg.inv(hessian)
    # The solver keeps the Hessian of its last but one step: to 1e-5 in every direction, so within 1e-5 of the sds.
    allowed = 1.1e-5 * np.sqrt(np.outer(np.diagonal(inverse), np.diagonal(inverse)))
    assert (np.abs(np.array(trained.covariance) - inverse) <= allowed).all()


def test_witness_lies_within_what_was_seen_and_says_what_the_model_says() -> None:
    X, y = invented()
    trained = fit_map(X, y)
    values = np.array([witness.inputs for witness in trained.witness])
    assert len(values) == INVENTED_ROWS + 4
    assert (values >= X.min(axis=0)).all()
    assert (values <= X.max(axis=0)).all()
    assert values.min(axis=0).tolist() == X.min(axis=0).tolist()
    z = trained.intercept + (values - X.mean(axis=0)) / X.std(axis=0) @ np.array(trained.weights)
    assert [witness.log_odds[0] for witness in trained.witness] == pytest.approx(z, abs=1e-9)


def test_row_weights_count_rows_and_zero_leaves_one_out() -> None:
    X, y = invented(80)
    times = np.random.default_rng(2).integers(0, 4, 80)
    weighted = fit_map(X, y, row_weights=times)
    repeated = fit_map(np.repeat(X, times, axis=0), np.repeat(y, times))
    assert weighted.scores == repeated.scores
    assert weighted.terms == repeated.terms
    assert weighted.class_weights == repeated.class_weights
    assert [w.inputs for w in weighted.witness] == [w.inputs for w in repeated.witness]
    assert (weighted.rows.total, weighted.rows.fitted) == (80, int(np.sum(times > 0)))


@pytest.mark.parametrize(
    ("labels", "classes"),
    [
        ([False, True], ("False", "True")),
        ([0, 1], ("0", "1")),
        ([-7, 3], ("-7", "3")),
        (["sound", "cavitating"], ("cavitating", "sound")),
        ([0.5, 2.0], ("0.5", "2.0")),
    ],
    ids=["bools", "integers", "negative", "texts", "fractions"],
)
def test_last_class_in_order_is_the_event(labels: list[Any], classes: tuple[str, str]) -> None:
    X, y = invented()
    given = [labels[index] for index in y]
    swapped = labels[1] < labels[0]
    reference = fit_map(X, 1 - y if swapped else y)
    for kind in (list, np.array, pandas.Series, lambda v: np.array(v, dtype=object)):
        trained = fit_map(X, kind(given))
        assert trained.classes == classes
        assert trained.scores == reference.scores


def test_names_are_given_or_taken_from_a_data_frame_or_counted() -> None:
    X, y = invented()
    frame = pandas.DataFrame(X, columns=["flow", "current"])
    assert [entry.name for entry in fit_map(X, y).inputs] == ["x0", "x1"]
    assert [term.name for term in fit_map(frame, y).terms] == ["flow", "current"]
    assert [entry.name for entry in fit_map(frame, y, names=["a", "b"]).inputs] == ["a", "b"]
    assert [entry.name for entry in fit_map(pandas.DataFrame(X), y).inputs] == ["x0", "x1"]
    assert fit_map(frame, y, names=["x0", "x1"]) == fit_map(X.tolist(), y) == fit_map(np.asfortranarray(X), y)


# --- what fit_map refuses --------------------------------------------------------------------------------------------

NUMBER = "give a number above 0, or math.inf for a flat prior"


def test_every_problem_of_the_arguments_is_named_at_once() -> None:
    X, y = invented()
    X[3, 1], X[5, 0] = math.nan, -math.inf
    with pytest.raises(RowsError) as caught:
        fit_map(X, y[:-1], sd=-1, names=["flow", "Flow"], row_weights=[1.0] * 59, intercept_sd=math.nan)
    assert [str(problem) for problem in caught.value.problems] == [
        "y: found 59 labels for 60 rows; give one label a row",
        "row_weights: found the shape (59,); give one a row, (60,)",
        "X[3, 1]: found nan; remove the rows, or put a number in",
        "X[5, 0]: found -inf; remove the rows, or put a number in",
        f'names[1]: found "Flow", which is not an identifier of lower-case letters; {NAME_RULE} (names=[...])',
        f"sd: found -1; {NUMBER}",
        f"intercept_sd: found nan; {NUMBER}",
    ]


def test_many_values_that_are_not_finite_are_counted() -> None:
    X, y = invented()
    X[10:20] = math.nan
    found = problems_of(X, y)
    assert len(found) == 6
    assert found[-1] == "X: found 15 more that are not finite; remove the rows, or put a number in"


SHAPE = "give (rows, inputs), at least one of each"


@pytest.mark.parametrize(
    ("X", "sentence"),
    [
        ([1.0, 2.0], f"X: found the shape (2,); {SHAPE}"),
        (np.empty((0, 3)), f"X: found the shape (0, 3); {SHAPE}"),
        (np.ones((2, 2, 2)), f"X: found the shape (2, 2, 2); {SHAPE}"),
        ([["1", "2"]], "X: found the type <U1; give an array of numbers"),
        (np.ones((2, 2), complex), "X: found the type complex128; give an array of numbers"),
        (np.ma.masked_less([[1.0], [2.0]], 2), "X: found masked entries; remove those rows, or fill the entries"),
    ],
    ids=["one dimension", "no rows", "three dimensions", "texts", "complex", "masked"],
)
def test_array_that_is_no_table_of_numbers_is_refused(X: Any, sentence: str) -> None:
    assert problems_of(X, [0, 1]) == [sentence]


@pytest.mark.parametrize("X", [[[1.0], [1.0, 2.0]], np.array([[1.0, None], [2, 3]]), object(), [[10**400], [1]]])
def test_array_of_other_things_is_refused(X: Any) -> None:
    found = problems_of(X, [0, 1])
    assert len(found) == 1
    assert found[0].startswith("X")


@pytest.mark.parametrize(
    ("y", "sentence"),
    [
        ([1] * 60, "y: found one value only; give labels of two classes"),
        ([0, 1, 2] * 20, "y: found 3 different values; give labels of two classes"),
        ([[0, 1]] * 30, "y: found the shape (30, 2); give one label a row, in one dimension"),
        ([0.0, math.nan] + [1.0] * 58, "y[1]: found nan; remove the rows"),
        ([0.0, math.inf] + [1.0] * 58, "y[1]: found inf; remove the rows"),
        (
            np.array([0, "a"] * 30, dtype=object),
            "y: found labels of different types; give all labels as texts, or all as numbers",
        ),
        (
            np.array(["a", None] * 30, dtype=object),
            "y: found labels of different types; give all labels as texts, or all as numbers",
        ),
    ],
    ids=["one class", "three classes", "two dimensions", "nan", "infinity", "mixed", "none"],
)
def test_labels_that_are_not_two_classes_are_refused(y: Any, sentence: str) -> None:
    assert problems_of(invented()[0], y) == [sentence]


@pytest.mark.parametrize(
    ("weights", "sentence"),
    [
        ([1.0] * 59 + [-2.0], "row_weights[59]: found -2; give weights of 0 or more"),
        ([math.nan] + [1.0] * 59, "row_weights[0]: found nan; give finite numbers"),
        ([1e308] * 60, "row_weights[0]: found 1e+308, too large to be summed; scale them all down"),
        ([0] * 60, "row_weights: found only zeros; give some rows a weight"),
        (["1"] * 60, "row_weights: found the type <U1; give an array of numbers"),
    ],
    ids=["negative", "nan", "too large", "zeros", "texts"],
)
def test_row_weights_that_are_none_are_refused(weights: Any, sentence: str) -> None:
    assert problems_of(*invented(), row_weights=weights) == [sentence]


@pytest.mark.parametrize(
    ("options", "sentences"),
    [
        ({"sd": 0}, [f"sd: found 0; {NUMBER}"]),
        ({"sd": "wide"}, [f"sd: found 'wide'; {NUMBER}"]),
        ({"sd": [1.0, math.nan]}, [f"sd[1]: found nan; {NUMBER}"]),
        ({"sd": [1.0]}, ["sd: found 1 for 2 columns; give one number, or one a column"]),
        ({"sd": 1e-5}, ["sd: found 1e-05, too narrow for weights kept in steps of 2^-30; give 0.0001 or more"]),
        ({"names": ["a", "a"]}, ['names[1]: found "a" twice; name each input once']),
        ({"names": ["a"]}, ["names: found 1 names for 2 columns; give one name a column"]),
    ],
    ids=["zero", "text", "nan", "one of two", "narrow", "twin names", "few names"],
)
def test_other_arguments_are_refused_as_a_matter_of_the_fit(options: dict[str, Any], sentences: list[str]) -> None:
    with pytest.raises(FitError) as caught:
        fit_map(*invented(), **options)
    assert [str(problem) for problem in caught.value.problems] == sentences


def test_rows_that_determine_no_model_are_refused_with_every_reason() -> None:
    X, y = invented()
    X = np.column_stack([X, np.full(60, 7.0), np.full(60, 8.0)])
    with pytest.raises(FitError) as caught:
        fit_map(X, y, names=["flow", "current", "speed", "level"])
    assert len(caught.value.problems) == 2
    assert ['"speed"' in str(caught.value.problems[0]), '"level"' in str(caught.value.problems[1])] == [True, True]


def test_numbers_that_cannot_be_subtracted_are_refused() -> None:
    X, y = invented()
    X[:, 1] *= 1e299
    assert fit_map(X, y).weights == pytest.approx(fit_map(X / [1, 1e299], y).weights, abs=1e-8)
    X[:, 1] = np.where(X[:, 1] > X[:, 1].mean(), 1.7e308, -1.7e308)
    with pytest.raises(FitError) as caught:
        fit_map(X, y)
    assert str(caught.value) == 'input "x1": found numbers as large as 1.7e+308; take a larger unit'


def test_class_whose_rows_weigh_nothing_is_refused() -> None:
    X, y = invented()
    with pytest.raises(FitError) as caught:
        fit_map(X, y, row_weights=1 - y)
    assert '"1"' in str(caught.value)


@pytest.mark.parametrize("shape", [(1, 1), (511, 1), (513, 1), (5000, 3), (2049, 700)])
def test_witness_limits_are_the_least_and_largest_of_each_column(shape: tuple[int, int]) -> None:
    """NumPy's own reduction is the reference; NaN must show in either."""
    values = np.random.default_rng(shape[0]).normal(size=shape)
    low, high = _span(values)
    assert low.tolist() == values.min(axis=0).tolist()
    assert high.tolist() == values.max(axis=0).tolist()
    values[-1, -1] = math.nan
    assert [math.isnan(end[-1]) for end in _span(values)] == [True, True]
