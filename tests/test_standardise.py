"""Centres and scales are what exact arithmetic gives, rounded once, in every row order."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from check_sets import TWO_CLASS_SETS, check_set
from hypothesis import example, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from trainer import standardise as module
from trainer.exact_sums import Pairs, pair_sum, tree_additions, tree_sum, two_product, two_sum
from trainer.pair_logistic import logistic_pairs
from trainer.standardise import class_sums, standardise


def exact_centre_and_scale(values: np.ndarray, row_weights: np.ndarray | None) -> tuple[float, float]:
    """The rule in rationals and 400-digit roots: 40 significant bits of the scale, the centre to its last bit."""
    weights = [Fraction(1)] * len(values) if row_weights is None else [Fraction(float(w)) for w in row_weights]
    numbers = [Fraction(float(v)) for v in values]
    mean = sum(w * v for w, v in zip(weights, numbers, strict=True)) / sum(weights)
    variance = sum(w * (v - mean) ** 2 for w, v in zip(weights, numbers, strict=True)) / sum(weights)
    with mpmath.workdps(400):
        scale = mpmath.sqrt(mpmath.mpf(variance.numerator) / variance.denominator)
        last_bit = int(mpmath.floor(mpmath.log(scale, 2))) - 39
        scale = float(mpmath.nint(scale / mpmath.mpf(2) ** last_bit) * mpmath.mpf(2) ** last_bit)
    step = Fraction(2) ** last_bit
    if mean:
        with mpmath.workdps(400):
            of_mean = int(mpmath.floor(mpmath.log(abs(mpmath.mpf(mean.numerator) / mean.denominator), 2)))
        step = max(step, Fraction(2) ** (of_mean - 52))
    return float(round(mean / step) * step), scale


@pytest.mark.parametrize("name", TWO_CLASS_SETS)
def test_centres_and_scales_agree_with_25_digits(name: str) -> None:
    """Half of the last of 40 bits is 2^-40 of the scale at most; the records' source is mpmath at 60 digits."""
    found = check_set(name)
    standardised = standardise(found.values, found.row_weights, found.numeric)
    for column, centre, scale in zip(found.record["inputs"], standardised.centres, standardised.scales, strict=True):
        expected_scale = mpmath.mpf(found.record["map"]["sd"][column])
        assert abs(scale / expected_scale - 1) <= 2.0**-40
        assert abs(centre - mpmath.mpf(found.record["map"]["mean"][column])) <= 2.0**-40 * expected_scale


@pytest.mark.parametrize("weighted", [False, True])
@pytest.mark.parametrize(("offset", "spread"), [(0.0, 1.0), (1e9, 1.0), (3.7, 1e-12), (-1e13, 1e12), (1e-3, 1e200)])
def test_centres_and_scales_are_exact_arithmetic_rounded_once(offset: float, spread: float, weighted: bool) -> None:
    draws = np.random.default_rng(3)
    values = offset + spread * draws.normal(size=(300, 6))
    weights = draws.random(300) * 10.0 ** draws.integers(-3, 12, size=300) if weighted else None
    found = standardise(values, weights, [True] * 6)
    for column in range(6):
        expected = exact_centre_and_scale(values[:, column], weights)
        assert (found.centres[column], found.scales[column]) == expected


@settings(max_examples=200, deadline=None)
@example(np.array([0.0, 5e-324, 0.0]), [1.0] * 12, False)
@given(
    arrays(np.float64, st.integers(2, 12), elements=st.floats(-1e100, 1e100)),
    st.lists(st.floats(1e-200, 1e200), min_size=12, max_size=12),
    st.booleans(),
)
def test_any_column_is_exact_arithmetic_rounded_once(values: np.ndarray, weights: list[float], weighted: bool) -> None:
    row_weights = np.array(weights[: len(values)]) if weighted else None
    found = standardise(values[:, np.newaxis], row_weights, [True])
    if (values == values[0]).all():
        assert (found.centres, found.scales) == ((values[0] + 0.0,), (1.0,))
        assert not found.columns.any()
        return
    centre, scale = exact_centre_and_scale(values, row_weights)
    if scale == 0.0:  # subnormal numbers only
        assert found.scales == (1.0,)
    else:
        assert (found.centres[0], found.scales[0]) == (centre, scale)


def test_centre_on_a_midpoint_goes_to_the_even_multiple() -> None:
    """Half the rows at m − 1 and half at m + 1: mean m, scale 1, last bit 2^-39. m = 1/2 + 2^-40 is a midpoint."""
    for half_steps, expected in ((1, 0.5), (3, 0.5 + 2.0**-38)):
        middle = 0.5 + half_steps * 2.0**-40
        values = np.repeat([middle - 1.0, middle + 1.0], 500)[:, np.newaxis]
        found = standardise(values, None, [True])
        assert (found.centres, found.scales) == ((expected,), (1.0,))


def test_doubles_alone_leave_doubt_and_pairs_decide() -> None:
    """Means within 1e-15 of a midpoint: the bound of plain sums straddles it, that of pairs does not."""
    draws = np.random.default_rng(1)
    decided = 0
    for _ in range(40):
        values = draws.normal(size=257)
        centre, scale = exact_centre_and_scale(values, None)
        step = 2.0 ** (math.floor(math.log2(scale)) - 39)
        values += float((Fraction(centre) + Fraction(step) / 2 - _mean(values)) * (1 + Fraction(1, 10**4)))
        _, _, sure = module._in_doubles(values[:, np.newaxis], None, 64)
        pair = module._in_pairs(values, None)
        decided += not sure[0] and pair is not None
        assert pair is None or pair == exact_centre_and_scale(values, None)
        found = standardise(values[:, np.newaxis], None, [True])
        assert (found.centres[0], found.scales[0]) == exact_centre_and_scale(values, None)
    assert decided >= 5


def _mean(values: np.ndarray) -> Fraction:
    return sum((Fraction(float(v)) for v in values), Fraction(0)) / len(values)


def test_column_is_difference_and_quotient_each_rounded() -> None:
    values = np.random.default_rng(2).normal(size=(5000, 3)) * 7.0 + 3.0
    found = standardise(values, None, [True] * 3)
    assert (found.columns == (values - np.array(found.centres)) / np.array(found.scales)).all()


def test_indicators_stay_as_they_are() -> None:
    values = np.column_stack((np.arange(10.0), np.arange(10) % 2))
    found = standardise(values, None, [True, False])
    assert (found.centres[1], found.scales[1]) == (0.0, 1.0)
    assert (found.columns[:, 1] == values[:, 1]).all()
    assert found.centres[0] == 4.5


def test_rows_of_weight_zero_do_not_count() -> None:
    draws = np.random.default_rng(4)
    values, weights = draws.normal(size=(50, 2)), draws.random(50)
    weights[::3] = 0.0
    values[::3] *= 1e6
    found = standardise(values, weights, [True, True])
    kept = standardise(values[weights > 0], weights[weights > 0], [True, True])
    assert (found.centres, found.scales) == (kept.centres, kept.scales)


def test_class_sums_are_exact_sums_rounded_once() -> None:
    weights = np.array([1e16, 1.0, 1.0, -0.0, 2.0**-60, 1e16])
    labels = np.array([0, 0, 0, 0, 1, 1])
    assert class_sums(labels, weights, 2) == (1e16 + 2.0, 1e16)  # a running sum of the first class gives 1e16
    assert class_sums(labels, None, 3) == (4.0, 2.0, 0.0)


def test_tree_sum_stays_within_its_bound() -> None:
    terms = np.random.default_rng(5).normal(size=4096) * 10.0 ** np.random.default_rng(6).integers(-8, 8, size=4096)
    exact = sum(Fraction(float(t)) for t in terms)
    roundings = tree_additions(4096) * 2.0**-53
    assert abs(Fraction(float(tree_sum(terms))) - exact) <= roundings / (1 - roundings) * float(np.abs(terms).sum())


def test_pairs_lose_nothing() -> None:
    draws = np.random.default_rng(7)
    a, b = draws.normal(size=1001) * 1e8, draws.normal(size=1001)
    for pair, exact in ((two_sum(a, b), lambda x, y: x + y), (two_product(a, b), lambda x, y: x * y)):
        for x, y, high, low in zip(a, b, *pair, strict=True):
            assert Fraction(float(high)) + Fraction(float(low)) == exact(Fraction(float(x)), Fraction(float(y)))
    total = pair_sum(Pairs(a, b * 2.0**-60))
    expected = sum(Fraction(float(x)) + Fraction(float(y)) * Fraction(1, 2**60) for x, y in zip(a, b, strict=True))
    error = abs(Fraction(float(total.high)) + Fraction(float(total.low)) - expected)
    assert error <= Fraction(1, 2**99) * Fraction(float(np.abs(a).sum()))


def test_logistic_in_pairs_has_28_digits() -> None:
    """Against mpmath at 60 digits, over the whole range and with a low part."""
    draws = np.random.default_rng(8)
    high = np.concatenate((draws.normal(size=400) * 20.0, draws.uniform(-599.0, 599.0, 200), (0.0, 1e-300, -1e-9)))
    low = high * 2.0**-54 * draws.uniform(-1.0, 1.0, len(high))
    found = logistic_pairs(Pairs(high, low))
    with mpmath.workdps(60):
        for t_high, t_low, ours_high, ours_low in zip(high, low, *found, strict=True):
            exact = 1 / (1 + mpmath.exp(-(mpmath.mpf(t_high) + mpmath.mpf(t_low))))
            assert abs(mpmath.mpf(ours_high) + mpmath.mpf(ours_low) - exact) <= mpmath.mpf("1e-28") * exact
