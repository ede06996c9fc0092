"""The prior's strength by cross-validation, held against loops over scikit-learn; priors of single terms.

Sources: scikit-learn's LogisticRegression with C = sd^2 on columns standardised on each fold's fitted rows, on data
sets of `check_values`; the rest by construction. Pumps and their rows are invented.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import numpy.typing as npt
import pytest
from check_sets import check_set
from sklearn.linear_model import LogisticRegression

from runtime_min.errors import FitError
from runtime_min.model import Choice, TrainedInput
from trainer import prior as module
from trainer.design import columns_of
from trainer.plan import PriorPlan, TermPrior
from trainer.prior import FOLDS, LOSS_STEP, STRENGTHS, ColumnPrior, PriorRule, choose_sd, rule_of

Floats = npt.NDArray[np.float64]
Labels = npt.NDArray[np.int64]


def numbers(width: int) -> tuple[TrainedInput, ...]:
    return tuple(TrainedInput(f"x{position}", "", (), None) for position in range(width))


def dealt(rows: int, seed: int = 3, count: int = FOLDS) -> Labels:
    return np.random.default_rng(seed).permutation(rows) % count


def shared(width: int) -> PriorRule:
    return PriorRule((ColumnPrior(),) * width)


def choose(values: Floats, labels: Labels, fold: Labels, row_weights: Floats | None = None) -> Choice:
    width = values.shape[1]
    return choose_sd(numbers(width), values, labels, row_weights, fold, shared(width))


def losses_of(choice: Choice) -> Floats:
    return np.array([strength.log_loss for strength in choice.strengths])


def invented(rows: int = 240, seed: int = 1) -> tuple[Floats, Labels]:
    rng = np.random.default_rng(seed)
    values = rng.normal([5.0, -2.0, 100.0, 0.0], [2.0, 0.5, 30.0, 1.0], (rows, 4))
    z = values[:, 0] - 5.0 + 0.5 * (values[:, 3] - values[:, 1] - 2.0)
    return values, (rng.random(rows) < 1 / (1 + np.exp(-z))).astype(np.int64)


def curve_of_scikit_learn(values: Floats, labels: Labels, fold: Labels, row_weights: Floats | None) -> Floats:
    weights = np.ones(len(labels)) if row_weights is None else row_weights
    sums = np.zeros((fold.max() + 1, len(STRENGTHS)))
    for index in range(len(sums)):
        out = fold == index
        mean = np.average(values[~out], axis=0, weights=weights[~out])
        sd = np.sqrt(np.average((values[~out] - mean) ** 2, axis=0, weights=weights[~out]))
        columns, left, event = (values[~out] - mean) / sd, (values[out] - mean) / sd, labels[out] == 1
        for at, strength in enumerate(STRENGTHS):
            model = LogisticRegression(C=strength**2, solver="newton-cholesky", tol=1e-9, max_iter=1000)
            model.fit(columns, labels[~out], sample_weight=weights[~out])
            z = left @ model.coef_[0] + model.intercept_[0]
            sums[index, at] = weights[out] @ np.logaddexp(0.0, np.where(event, -z, z))
    return sums.sum(axis=0) / weights.sum()


# --- against the outside ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["iris_vv", "lowbwt_hl22", "orings_grouped", "pima_tr", "spector", "womensrole"])
def test_curve_and_choice_are_those_of_a_loop_over_scikit_learn(name: str) -> None:
    data = check_set(name)
    fold = dealt(len(data.labels))
    found = choose(data.values, data.labels, fold, data.row_weights)
    expected = curve_of_scikit_learn(data.values, data.labels, fold, data.row_weights)
    assert [strength.sd for strength in found.strengths] == list(STRENGTHS)
    assert losses_of(found) == pytest.approx(expected, abs=1e-6, rel=0)
    assert found.sd == STRENGTHS[int(np.argmin(expected))]
    assert (found.method, found.folds) == ("cross-validation", FOLDS)


def test_standard_error_is_that_of_the_mean_of_equal_folds() -> None:
    """For folds of equal weight the formula is the textbook's: sample sd of the folds' means / sqrt(folds)."""
    values, labels = invented()
    fold = dealt(len(labels))
    found = choose(values, labels, fold)
    for at in (0, 14, 29):
        means = []
        for index in range(FOLDS):
            out = fold == index
            mean, sd = values[~out].mean(axis=0), values[~out].std(axis=0)
            model = LogisticRegression(C=STRENGTHS[at] ** 2, solver="newton-cholesky", tol=1e-9, max_iter=1000)
            model.fit((values[~out] - mean) / sd, labels[~out])
            z = (values[out] - mean) / sd @ model.coef_[0] + model.intercept_[0]
            means.append(np.logaddexp(0.0, np.where(labels[out] == 1, -z, z)).mean())
        error = np.std(means, ddof=1) / math.sqrt(FOLDS)
        assert found.strengths[at].standard_error == pytest.approx(error, rel=1e-6)


def test_row_weight_of_three_is_three_rows() -> None:
    values, labels = invented(80)
    times = np.random.default_rng(4).integers(1, 4, 80)
    fold = dealt(80)
    weighted = choose(values, labels, fold, times.astype(np.float64))
    repeated = choose(*(np.repeat(part, times, axis=0) for part in (values, labels, fold)))
    assert weighted.sd == repeated.sd
    # Weights on the grid of 2^-30, centres and scales of 40 bits.
    assert losses_of(weighted) == pytest.approx(losses_of(repeated), abs=1e-8, rel=0)


def test_strengths_can_be_stated_in_a_plan() -> None:
    assert len(STRENGTHS) == 30
    assert (STRENGTHS[0], STRENGTHS[-1]) == (0.01, 100.0)
    for strength, after in itertools.pairwise(STRENGTHS):
        assert strength < after
        assert float(f"{strength:.2g}") == strength


# --- nothing of a fold reaches its fit -------------------------------------------------------------------------------


def paths(values: Floats, labels: Labels, fold: Labels, inputs: tuple[TrainedInput, ...]) -> list[list[Floats]]:
    rows = module._Rows(inputs, values, labels, None, fold)
    rule = shared(len(columns_of(inputs)))
    with module.one_thread():
        return [module._along_strengths(part, rule, STRENGTHS).thetas for part in module._parts(rows, FOLDS)]


def test_rows_left_out_change_no_bit_of_the_fits_that_leave_them_out() -> None:
    """Their values, labels, missing values and levels: standardisation and what stands in are the others' alone."""
    inputs = (*numbers(3), TrainedInput("impeller", "", ("closed", "semi_open", "open"), None))
    values, labels = invented()
    values[:, 3] = np.random.default_rng(2).integers(0, 3, len(values))
    values[::7, 0] = values[::11, 3] = math.nan
    fold = dealt(len(labels))
    spoiled, flipped = values.copy(), labels.copy()
    out = fold == 2
    spoiled[out] = [1e6, math.nan, -5.0, 2.0]
    flipped[out] = 1 - labels[out]
    before, after = paths(values, labels, fold, inputs), paths(spoiled, flipped, fold, inputs)
    for index in range(FOLDS):
        same = all(np.array_equal(one, other) for one, other in zip(before[index], after[index], strict=True))
        assert same == (index == 2)


def test_fit_that_sees_the_rows_left_out_changes_the_curve(monkeypatch: pytest.MonkeyPatch) -> None:
    """40 rows, 10 columns, pure noise: leaving out honestly asks for the strongest prior, a leak for a weak one."""
    rng = np.random.default_rng(0)
    values, labels = rng.normal(size=(40, 10)), rng.integers(0, 2, 40)
    fold = dealt(40)
    honest = choose(values, labels, fold)
    parts = module._parts

    def leaking(rows: module._Rows, count: int):  # type: ignore[no-untyped-def]
        everything = rows._replace(fold=np.full(len(rows.fold), -1))
        for part in parts(rows, count):
            whole = next(parts(everything, 1))
            yield part._replace(columns=whole.columns, labels=whole.labels, row_weights=whole.row_weights)

    monkeypatch.setattr(module, "_parts", leaking)
    leaked = choose(values, labels, fold)
    assert honest.sd < 0.2
    assert leaked.sd > 1.0
    assert np.abs(losses_of(leaked) - losses_of(honest)).max() > 0.1


def test_standardisation_over_all_rows_changes_the_curve(monkeypatch: pytest.MonkeyPatch) -> None:
    values, labels = invented(60)
    fold = dealt(60)
    honest = losses_of(choose(values, labels, fold))
    whole = module.standardise(values, None, [True] * 4)
    calls = iter(range(100))

    def leaking(matrix: Floats, row_weights: Floats | None, numeric: list[bool]) -> module.Standardised:
        columns = (values[fold != next(calls) % FOLDS] - whole.centres) / whole.scales
        return replace(whole, columns=columns)

    monkeypatch.setattr(module, "standardise", leaking)
    assert np.abs(losses_of(choose(values, labels, fold)) - honest).max() > 1e-4


def test_group_split_over_folds_changes_the_curve_and_the_choice() -> None:
    """24 pumps, 20 rows of each, one class a pump: what tells pumps apart says nothing of another pump."""
    rng = np.random.default_rng(5)
    pump = np.repeat(np.arange(24), 20)
    values = rng.normal(size=(24, 24))[pump] + 0.05 * rng.normal(size=(480, 24))
    labels = (np.arange(24) % 2)[pump]
    by_pump = choose(values, labels, rng.permutation(24)[pump] % FOLDS)
    by_row = choose(values, labels, dealt(480))
    assert by_pump.sd < 0.1
    assert by_row.sd > 1.0
    assert losses_of(by_pump).min() > 0.6
    assert losses_of(by_row).min() < 0.3


# --- the choice is reproducible --------------------------------------------------------------------------------------


def test_order_of_the_rows_changes_neither_choice_nor_its_loss() -> None:
    """Strengths so near that only their last bits differ, so that all go through the exact comparison."""
    values, labels = invented(150)
    fold = dealt(150)
    strengths = (0.5, *(0.9 + 1e-9 * step for step in range(6)), 5.0)
    seen = set()
    for seed in range(8):
        order = np.random.default_rng(seed).permutation(150)
        found = choose_sd(numbers(4), values[order], labels[order], None, fold[order], shared(4), strengths)
        seen.add((found.sd, tuple(strength.log_loss for strength in found.strengths[1:7])))
    assert len(seen) == 1


def test_equal_losses_go_to_the_stronger_prior() -> None:
    values, labels = invented(150)
    near = [0.9 * (1 + 1e-13 * step) for step in range(5)]
    for strengths in ((0.1, *near, 5.0), tuple(near)):
        found = choose_sd(numbers(4), values, labels, None, dealt(150), shared(4), strengths)
        losses = losses_of(found)
        assert np.ptp(losses[[strength in near for strength in strengths]]) < LOSS_STEP
        assert found.sd == near[0]


@pytest.mark.parametrize("name", ["crabs", "lowbwt_vr", "orings_binary", "spector", "womensrole"])
def test_strengths_ruled_out_early_are_not_the_best(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """With every strength within reach all are fitted to the last bit: the same choice, and a curve as near as said."""
    data = check_set(name)
    arguments = (data.values, data.labels, dealt(len(data.labels)), data.row_weights)
    found = choose(*arguments)
    claimed = module._LOSS_ERROR
    monkeypatch.setattr(module, "_LOSS_ERROR", 1e3)
    exact = choose(*arguments)
    assert found.sd == exact.sd == STRENGTHS[int(np.argmin(losses_of(exact)))]
    assert np.abs(losses_of(found) - losses_of(exact)).max() < claimed / 10


# --- what cannot be chosen -------------------------------------------------------------------------------------------


def test_class_that_only_one_fold_has_is_named() -> None:
    values, labels = invented(60)
    fold = np.where(labels == 1, 2, np.arange(60) % 2)
    with pytest.raises(FitError) as caught:
        choose(values, labels, fold)
    assert str(caught.value) == (
        "[prior]: sd: found rows of one class only outside fold 3 of 3; write a number for sd, or give more groups or "
        "rows of both classes"
    )


def test_flat_term_that_separates_the_classes_outside_a_fold_is_told() -> None:
    values, labels = invented(60)
    values[:, 1] = labels + np.random.default_rng(3).uniform(0, 0.5, 60)
    values[0, 1] = 1.0 - labels[0]
    fold = np.arange(60) % FOLDS
    columns = (ColumnPrior(), ColumnPrior(shared=False), ColumnPrior(), ColumnPrior())
    with pytest.raises(FitError, match=r"\[prior\]: sd: found no optimum for the rows outside fold 1: some weights"):
        choose_sd(numbers(4), values, labels, None, fold, PriorRule(columns))


def test_input_that_is_missing_or_constant_outside_a_fold_costs_nothing() -> None:
    values, labels = invented(100)
    fold = dealt(100)
    values[fold != 1, 1] = math.nan
    values[fold != 3, 2] = 7.0
    found = choose(values, labels, fold)
    without = choose(values[:, [0, 3]], labels, fold)
    assert found.sd == without.sd
    assert all(map(math.isfinite, losses_of(found)))


# --- priors of single terms ------------------------------------------------------------------------------------------


def test_rule_gives_each_term_its_own_prior_and_the_shared_one_to_the_others() -> None:
    inputs = (*numbers(2), TrainedInput("impeller", "", ("closed", "semi_open", "open"), None))
    terms = (
        TermPrior("x1", Fraction(1, 2), "fixed", Fraction(1, 10), "unit"),
        TermPrior("impeller=open", Fraction(-1), "shared", None, "spread"),
        TermPrior("impeller=semi_open", Fraction(0), "fixed", None, "spread"),
    )
    rule = rule_of(PriorPlan("cross-validation", None, Fraction(3), terms), columns_of(inputs))
    prior = rule.on((2.0, 7.3, 1.0, 1.0), Fraction("0.62"))
    # W = w * scale: 0.1 * 7.3 and 0.5 * 7.3 of the binary64 nearest to 7.3, each rounded once.
    assert prior.means == (0.0, float(Fraction(7.3) / 2), 0.0, -1.0)
    assert prior.sds == (0.62, float(Fraction(7.3) / 10), math.inf, 0.62)
    assert prior.intercept_sd == 3.0


def test_sd_per_unit_is_not_chosen_and_follows_the_scale_of_each_fold() -> None:
    """Rescaling an input and its prior per unit with it is the same model: the same curve."""
    values, labels = invented()
    fold = dealt(len(labels))
    curves = []
    for factor in (1, 1000):
        own = ColumnPrior(Fraction(1, 5 * factor), Fraction(1, 10 * factor), shared=False, per_unit=True)
        scaled = values * [factor, 1.0, 1.0, 1.0]
        rule = PriorRule((own, *(ColumnPrior(),) * 3))
        curves.append(losses_of(choose_sd(numbers(4), scaled, labels, None, fold, rule)))
    assert curves[0] == pytest.approx(curves[1], abs=1e-8, rel=0)
    assert np.abs(curves[0] - losses_of(choose(values, labels, fold))).max() > 1e-3


def test_sd_too_large_for_a_double_is_flat() -> None:
    rule = PriorRule((ColumnPrior(sd=Fraction(10) ** 400, shared=False),))
    assert rule.on((1.0,), None).sds == (math.inf,)
