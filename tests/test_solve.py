"""The weights are the optimum: against 25-digit optima, published tables, mpmath, scikit-learn and statsmodels."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
import statsmodels.api as sm
from check_sets import TWO_CLASS_SETS, CheckSet, check_set
from sklearn.linear_model import LogisticRegression

from runtime_min.errors import FitError
from trainer import solve as module
from trainer.grid import WEIGHT_STEP
from trainer.objective import BLOCK_ROWS, Prior, checked_gradient, gradient_in_pairs, objective_of, slopes
from trainer.solve import Solution, solve
from trainer.standardise import Standardised, standardise

HALF_STEP = WEIGHT_STEP / 2
FITS = [(name, sd) for name in TWO_CLASS_SETS for sd in (0.5, 1.0, 3.0, math.inf)]


def ridge(width: int, sd: float = 1.0) -> Prior:
    return Prior((0.0,) * width, (sd,) * width)


def recorded_fit(found: CheckSet, sd: float) -> dict:
    return next(fit for fit in found.record["map"]["fits"] if float(fit["prior"]["sd"]) == sd)


def exact_log_odds(theta: np.ndarray, standardised: Standardised, row: np.ndarray) -> Fraction:
    z = Fraction(float(theta[0]))
    for weight, centre, scale, value in zip(theta[1:], standardised.centres, standardised.scales, row, strict=True):
        z += Fraction(float(weight)) * (Fraction(float(value)) - Fraction(centre)) / Fraction(scale)
    return z


@pytest.mark.parametrize(("name", "sd"), FITS)
def test_log_odds_agree_with_25_digit_optima(name: str, sd: float) -> None:
    """Within 1e-10 before the grid; after it the grid's share, 2^-31 a weight times the size of its column, comes on
    top. Optima: the set's record, mpmath Newton at 60 digits."""
    found = check_set(name)
    standardised = standardise(found.values, found.row_weights, found.numeric)
    prior = ridge(found.values.shape[1], sd)
    objective = objective_of(standardised.columns, found.labels, found.row_weights, prior)
    before, _ = module._newton(objective, np.zeros(len(objective.means)), None, 1e-8, BLOCK_ROWS)
    solution = solve(standardised.columns, found.labels, found.row_weights, prior)
    after = np.array((solution.intercept, *solution.weights))
    for row in recorded_fit(found, sd)["rows"]:
        expected = Fraction(row["log_odds"])
        columns = standardised.columns[row["row"]]
        assert abs(exact_log_odds(before, standardised, found.values[row["row"]]) - expected) <= 1e-10
        allowed = 1e-10 + 2.0**-31 * (1.0 + np.abs(columns).sum())
        assert abs(exact_log_odds(after, standardised, found.values[row["row"]]) - expected) <= allowed


@pytest.mark.parametrize("name", TWO_CLASS_SETS)
def test_published_tables_are_reproduced(name: str) -> None:
    """Coefficients, standard errors, deviance and log-likelihood as printed, within the tolerance of the record; one
    record has ten decimals, so the grid's share comes on top."""
    found = check_set(name)
    standardised = standardise(found.values, found.row_weights, found.numeric)
    solution = solve(standardised.columns, found.labels, found.row_weights, ridge(found.values.shape[1], math.inf))
    centres, scales = np.array(standardised.centres), np.array(standardised.scales)
    fold = np.diag((1.0, *(1.0 / scales)))
    fold[0, 1:] = -centres / scales
    raw = fold @ (solution.intercept, *solution.weights)
    errors = np.sqrt(np.diagonal(fold @ np.array(solution.covariance) @ fold.T))
    objective = objective_of(standardised.columns, found.labels, found.row_weights, ridge(len(scales), math.inf))
    theta = np.array((solution.intercept, *solution.weights))
    log_likelihood = -module.value(objective, theta)
    terms = ["intercept", *found.record["inputs"]]
    compared = 0
    for entry in found.record["published"]["values"]:
        kind = entry["what"]
        grid = 0.0
        if kind in ("coefficient", "standard_error"):
            place = terms.index(entry["term"])
            ours = (raw if kind == "coefficient" else errors)[place]
            grid = HALF_STEP * np.abs(fold[place]).sum() if kind == "coefficient" else 0.0
        elif kind in ("deviance", "log_likelihood"):
            ours = log_likelihood if kind == "log_likelihood" else _deviance(found, log_likelihood)
        else:
            continue
        compared += 1
        assert abs(ours - float(entry["published"])) <= entry["tolerance"] + grid, entry
    assert compared >= 2


def _deviance(found: CheckSet, log_likelihood: float) -> float:
    """Grouped rows are measured against their own proportions, single rows against 0 and 1."""
    if found.row_weights is None:
        return -2.0 * log_likelihood
    saturated = 0.0
    for group in np.unique(found.values, axis=0):
        inside = (found.values == group).all(axis=1)
        counts = [found.row_weights[inside & (found.labels == label)].sum() for label in (0, 1)]
        saturated += sum(count * math.log(count / sum(counts)) for count in counts if count)
    return 2.0 * (saturated - log_likelihood)


def hard_cases() -> dict[str, tuple[np.ndarray, np.ndarray, np.ndarray | None, Prior]]:
    draws = np.random.default_rng(5)
    values = draws.normal(size=(60, 3))
    labels = (draws.random(60) < 1.0 / (1.0 + np.exp(0.5 * values[:, 1] - values[:, 0]))).astype(int)
    twin = np.column_stack((values, values[:, 0] + 1e-5 * draws.normal(size=60)))
    turn = np.arange(60) % 3
    weights = np.where(turn == 0, 0.0, np.where(turn == 1, 1e12, 1.0))
    rare = np.zeros(4001, dtype=int)
    rare[7] = 1
    return {
        "plain": (values, labels, None, ridge(3)),
        "flat": (values, labels, None, ridge(3, math.inf)),
        "offset 1e9": (values + 1e9, labels, None, ridge(3)),
        "scales 1e-12 to 1e12": (values * (1e-12, 1.0, 1e12), labels, None, ridge(3)),
        "separated, with a prior": (values, (values[:, 0] > 0).astype(int), None, ridge(3)),
        "correlation 1 - 1e-10": (twin, labels, None, ridge(4)),
        "correlation 1 - 1e-10, weak prior": (twin, labels, None, ridge(4, 1e3)),
        "correlation 1 - 1e-10, flat": (twin, labels, None, ridge(4, math.inf)),
        "duplicate column": (np.column_stack((values, values[:, 0])), labels, None, ridge(4)),
        "row weights 0 to 1e12": (values, labels, weights, ridge(3)),
        "row weights 0 to 1e12, flat": (values, labels, weights, ridge(3, math.inf)),
        "more columns than rows": (draws.normal(size=(8, 12)), labels[:8], None, ridge(12)),
        "prior sd 1e-4 to 1e4": (values, labels, None, Prior((0.3, -0.2, 0.0), (1e-4, 1e-3, 1e4))),
        "prior on the intercept": (values, labels, None, Prior((0.0,) * 3, (1.0,) * 3, intercept_sd=0.1)),
        "two rows": (values[:2], np.array([0, 1]), None, ridge(3)),
        "one event in 4001": (draws.normal(size=(4001, 1)), rare, None, ridge(1)),
    }


HARD_CASES = hard_cases()


def mpmath_optimum(
    columns: np.ndarray, labels: np.ndarray, row_weights: np.ndarray | None, prior: Prior, start: Solution
) -> list[mpmath.mpf]:
    """Newton at 50 digits from our weights; the objective is written out again, in its plainest form."""
    rows = [[mpmath.mpf(1), *map(mpmath.mpf, map(float, row))] for row in columns]
    weights = [mpmath.mpf(1)] * len(rows) if row_weights is None else [mpmath.mpf(float(w)) for w in row_weights]
    sds, means = (prior.intercept_sd, *prior.sds), (0.0, *prior.means)
    theta = [mpmath.mpf(t) for t in (start.intercept, *start.weights)]
    size = len(theta)
    for _ in range(40):
        gradient, hessian = mpmath.matrix(size, 1), mpmath.matrix(size, size)
        for i, sd in enumerate(sds):
            if not math.isinf(sd):
                gradient[i] += (theta[i] - means[i]) / mpmath.mpf(sd) ** 2
                hessian[i, i] += 1 / mpmath.mpf(sd) ** 2
        for row, label, weight in zip(rows, labels.tolist(), weights, strict=True):
            if weight:
                p = 1 / (1 + mpmath.exp(-mpmath.fdot(row, theta)))
                for i in range(size):
                    gradient[i] += weight * (p - label) * row[i]
                    for j in range(size):
                        hessian[i, j] += weight * p * (1 - p) * row[i] * row[j]
        step = mpmath.lu_solve(hessian, gradient)
        theta = [t - s for t, s in zip(theta, step, strict=True)]
        if max(map(abs, step)) <= mpmath.mpf(10) ** -30:
            return theta
    raise AssertionError("the reference did not converge")


@pytest.mark.parametrize("case", HARD_CASES)
def test_weights_are_the_50_digit_optimum_on_the_grid(case: str) -> None:
    """Each weight is the multiple of 2^-30 next to the optimum; `distance` bounds what that costs, and no more than
    that."""
    values, labels, row_weights, prior = HARD_CASES[case]
    columns = standardise(values, row_weights, [True] * values.shape[1]).columns
    solution = solve(columns, labels, row_weights, prior)
    ours = (solution.intercept, *solution.weights)
    with mpmath.workdps(50):
        optimum = mpmath_optimum(columns, labels, row_weights, prior, solution)
        misses = [float(abs(a - b)) for a, b in zip(ours, optimum, strict=True)]
    assert max(misses) <= HALF_STEP + 1e-12
    assert all(weight / WEIGHT_STEP == round(weight / WEIGHT_STEP) for weight in ours)
    sds = np.sqrt(np.diagonal(solution.covariance))
    distance = float((np.array(misses) / sds).max())
    assert distance <= solution.distance * 1.0001
    assert solution.distance <= 1.05 * distance


@pytest.mark.parametrize("sd", [0.3, 2.0])
def test_weights_agree_with_scikit_learn_at_matched_objective(sd: float) -> None:
    """One sd is the ridge penalty with C = sd²; scikit-learn's newton-cholesky, to its own tolerance."""
    draws = np.random.default_rng(8)
    values = draws.normal(size=(2000, 12)) @ draws.normal(size=(12, 12))
    labels = (draws.random(2000) < 1.0 / (1.0 + np.exp(-values[:, 0]))).astype(int)
    row_weights = draws.random(2000)
    columns = standardise(values, row_weights, [True] * 12).columns
    reference = LogisticRegression(C=sd * sd, solver="newton-cholesky", tol=1e-12, max_iter=200)
    reference.fit(columns, labels, sample_weight=row_weights)
    solution = solve(columns, labels, row_weights, ridge(12, sd))
    assert np.abs(np.array(solution.weights) - reference.coef_[0]).max() <= HALF_STEP + 1e-9
    assert abs(solution.intercept - reference.intercept_[0]) <= HALF_STEP + 1e-9


def test_covariance_agrees_with_statsmodels() -> None:
    found = check_set("pima_tr")
    columns = standardise(found.values, None, found.numeric).columns
    reference = sm.Logit(found.labels, sm.add_constant(columns)).fit(disp=0, tol=1e-12)
    covariance = solve(columns, found.labels, None, ridge(columns.shape[1], math.inf)).covariance
    assert np.abs(np.array(covariance) / reference.cov_params() - 1.0).max() <= 1e-6


@pytest.mark.parametrize("sd", [1.0, 1e3, math.inf])
@pytest.mark.parametrize("size", [1.0, 30.0, 1e3, 1e6, 1e12, 1e300])
def test_any_start_ends_at_the_same_weights(size: float, sd: float) -> None:
    values, labels, _, _ = HARD_CASES["plain"]
    columns = standardise(values, None, [True] * 3).columns
    expected = solve(columns, labels, None, ridge(3, sd))
    for seed in range(5):
        start = size * np.random.default_rng(seed).normal(size=4)
        found = solve(columns, labels, None, ridge(3, sd), start)
        assert (found.intercept, found.weights) == (expected.intercept, expected.weights)


@pytest.mark.parametrize("sd", [1.0, math.inf])
@pytest.mark.parametrize("scale", [0.3, 3.0, 30.0])
def test_step_rule_alone_converges(scale: float, sd: float) -> None:
    """Without giving way to zero, and where a plain Newton step overshoots: from 30 sd off the curvature is 1e-10."""
    values, labels, _, _ = HARD_CASES["plain"]
    columns = standardise(values, None, [True] * 3).columns
    objective = objective_of(columns, labels, None, ridge(3, sd))
    expected, _ = module._newton(objective, np.zeros(4), None, 1e-8, BLOCK_ROWS)
    for seed in range(10):
        start = scale * np.random.default_rng(seed).normal(size=4)
        reached, _ = module._newton(objective, start, None, 1e-8, BLOCK_ROWS)
        assert np.abs(reached - expected).max() <= 1e-12


@pytest.mark.parametrize("miss", [1e-6, 1e-3, 0.1])
def test_perturbed_optimum_shows_a_large_certificate(miss: float) -> None:
    """A weight moved by `miss` posterior sd: decrement and distance tell it (distance from both sides), the relative
    gradient rises far above that of the optimum."""
    found = check_set("pima_tr")
    columns = standardise(found.values, None, found.numeric).columns
    prior = ridge(columns.shape[1])
    solution = solve(columns, found.labels, None, prior)
    covariance = np.array(solution.covariance)
    moved = np.array((solution.intercept, *solution.weights))
    moved[3] += miss * math.sqrt(covariance[3, 3])
    objective = objective_of(columns, found.labels, None, prior)
    told = module._certified(moved, checked_gradient(objective, moved), covariance)
    assert miss * 0.9999 <= told.distance
    assert told.distance <= 2.0 * miss or (miss > 0.01 and told.distance == math.inf)
    assert told.newton_decrement >= 0.9 * miss
    assert told.gradient >= 0.01 * miss
    assert solution.gradient <= 1e-8
    assert solution.newton_decrement <= 1e-7


@pytest.mark.parametrize("weight", [1e-12, 1.0, 1e12])
def test_residual_and_curvature_keep_all_digits(weight: float) -> None:
    """p − y and p (1 − p) lose every digit at z = ±40; the form used here is within 4 units in the last place."""
    z = np.array([-600.0, -40.0, -5.0, -1e-9, 0.0, 1e-9, 5.0, 40.0, 600.0])
    for side, label in ((1.0, 0), (-1.0, 1)):
        slope, curvature = slopes(side * z, np.full(len(z), weight))
        with mpmath.workdps(600):
            for place, number in enumerate(z):
                p = 1 / (1 + mpmath.exp(-mpmath.mpf(number)))
                for ours, exact in ((side * slope, p - label), (curvature, p * (1 - p))):
                    expected = exact * mpmath.mpf(weight)
                    assert abs(mpmath.mpf(ours[place]) - expected) <= 4 * 2.0**-53 * abs(expected)


def test_gradient_in_pairs_holds_where_double_sums_cancel() -> None:
    """Near-duplicate columns and weights of 1e12: against mpmath at 50 digits, relative to the sum of term sizes, which
    is what is returned rounded to one double."""
    values, labels, _, prior = HARD_CASES["correlation 1 - 1e-10"]
    weights = 10.0 ** np.random.default_rng(1).integers(0, 13, size=60)
    columns = standardise(values, weights, [True] * 4).columns
    objective = objective_of(columns, labels, weights, prior)
    theta = np.array([0.3, 5.0, -0.2, 0.7, -4.0])
    found = gradient_in_pairs(objective, theta)
    with mpmath.workdps(50):
        for place in range(5):
            exact = mpmath.mpf(theta[place]) if place else mpmath.mpf(0)
            for row, label, weight in zip(columns, labels.tolist(), weights, strict=True):
                full = [mpmath.mpf(1), *map(mpmath.mpf, map(float, row))]
                p = 1 / (1 + mpmath.exp(-mpmath.fdot(full, map(float, theta))))
                exact += mpmath.mpf(float(weight)) * (p - label) * full[place]
            size = checked_gradient(objective, theta).sizes[place]
            assert abs(found[place] - exact) <= 2.0**-53 * abs(exact) + 1e-27 * size


def test_separated_classes_under_a_flat_prior_are_refused() -> None:
    values = np.linspace(-1.0, 1.0, 40)[:, np.newaxis]
    with pytest.raises(FitError) as caught:
        solve(values, (values[:, 0] > 0).astype(int), None, ridge(1, math.inf))
    assert str(caught.value) == (
        "rows: the fit finds no optimum: the curvature vanishes along some weights; "
        "give every term a prior with a finite sd, or remove columns that repeat others"
    )


@pytest.mark.parametrize("case", ["even", "rare class", "heavy rows", "sample cannot be fitted"])
def test_many_rows_give_the_weights_that_newton_alone_gives(case: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """The sample and its metric decide the time taken, never the weights."""
    draws = np.random.default_rng(9)
    rows, width = 12_000, 20
    values = draws.normal(size=(rows, width)) @ (np.eye(width) + 0.3 * draws.normal(size=(width, width)))
    level = -6.5 if case == "rare class" else 0.0
    labels = (draws.random(rows) < 1.0 / (1.0 + np.exp(-values[:, 0] - level))).astype(int)
    row_weights = np.where(draws.random(rows) < 1e-3, 1e5, 1.0) if case == "heavy rows" else None
    if case == "sample cannot be fitted":  # one row, hardly ever drawn, keeps the classes from being separated
        labels = (values[:, 0] > 0).astype(int)
        labels[0] = 1 - labels[0]
    columns = standardise(values, row_weights, [True] * width).columns
    prior = ridge(width, math.inf if case == "sample cannot be fitted" else 1.0)
    objective = objective_of(columns, labels, row_weights, prior)
    assert module.sample_size(objective) > 0
    found = solve(columns, labels, row_weights, prior)
    monkeypatch.setattr(module, "sample_size", lambda _: 0)
    alone = solve(columns, labels, row_weights, prior)
    assert (found.intercept, found.weights) == (alone.intercept, alone.weights)


@pytest.mark.parametrize("case", ["plain", "correlation 1 - 1e-10, weak prior"])
@pytest.mark.parametrize("beside", [-1e-13, -2e-15, 2e-15, 1e-13])
def test_weight_beside_a_midpoint_goes_to_its_side(case: str, beside: float) -> None:
    """A prior mean moves the optimum of one weight to 1e-13 or 2e-15 beside a midpoint of the grid; every order of the
    rows gives the neighbour on that side. Where the optimum is: mpmath at 50 digits."""
    values, labels, _, prior = HARD_CASES[case]
    width = values.shape[1]
    columns = standardise(values, None, [True] * width).columns
    mean = 0.0
    with mpmath.workdps(50):
        for _ in range(4):
            moved = Prior((0.0,) * (width - 1) + (mean,), prior.sds)
            solution = solve(columns, labels, None, moved)
            optimum = mpmath_optimum(columns, labels, None, moved, solution)[-1]
            middle = (mpmath.floor(optimum / WEIGHT_STEP) + 0.5) * WEIGHT_STEP
            off = float(middle + beside - optimum)
            if abs(off) <= abs(beside) / 4:
                break
            mean += off * prior.sds[-1] ** 2 / solution.covariance[-1][-1]
        assert abs(off) <= abs(beside) / 4
        expected = float(middle + mpmath.sign(beside) * HALF_STEP)
    assert solution.weights[-1] == expected
    for seed in range(10):
        order = np.random.default_rng(seed).permutation(len(labels))
        assert solve(columns[order], labels[order], None, moved).weights == solution.weights
