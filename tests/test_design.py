"""Inputs to columns, and what stands in for a missing value. Expected values follow from the definitions, by hand."""

from __future__ import annotations

import math
import random
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from runtime_min.model import TrainedInput
from trainer.design import Column, columns_of, design_matrix, typical_value, with_typical

FLOW = TrainedInput("flow", "m³/h", (), None)
IMPELLER = TrainedInput("impeller", "", ("closed", "semi_open", "open"), None)
WATER = TrainedInput("water", "°C", (), None)
NAN = math.nan


def test_first_level_is_the_reference_and_levels_stand_in_the_place_of_their_input() -> None:
    assert columns_of([FLOW, IMPELLER, WATER]) == (
        Column("flow", "value", (0,), None),
        Column("impeller=semi_open", "level", (1,), 1),
        Column("impeller=open", "level", (1,), 2),
        Column("water", "value", (2,), None),
    )


def test_matrix_holds_values_and_indicators() -> None:
    values = np.array([[10.0, 0, -1], [20.5, 1, 0], [0.0, 2, 4]])
    matrix = design_matrix(columns_of([FLOW, IMPELLER, WATER]), values)
    assert matrix.tolist() == [[10, 0, 0, -1], [20.5, 1, 0, 0], [0, 0, 1, 4]]


def test_numbers_alone_are_not_copied() -> None:
    values = np.ones((4, 2))
    assert design_matrix(columns_of([FLOW, WATER]), values) is values
    assert with_typical(values, [1.0, 2.0]) is values


def test_typical_number_is_the_mean_of_what_is_there() -> None:
    assert typical_value(np.array([1.0, NAN, 2.0, 6.0]), 0) == 3.0
    assert typical_value(np.array([NAN, NAN]), 0) is None
    assert typical_value(np.array([NAN]), 3) is None


def test_typical_level_is_the_commonest_and_of_equals_the_lowest() -> None:
    assert typical_value(np.array([2.0, 1, 2, NAN, 1, 0]), 3) == 1.0
    assert typical_value(np.array([2.0, 1, 2]), 3) == 2.0


@given(st.lists(st.floats(-1e300, 1e300), min_size=1, max_size=40), st.randoms(use_true_random=False))
def test_typical_number_is_the_mean_but_for_two_roundings_in_any_order(
    numbers: list[float], rng: random.Random
) -> None:
    found = typical_value(np.array(numbers), 0)
    exact = sum(map(Fraction, numbers)) / len(numbers)
    # One rounding of the sum, one of the quotient; below 2^-1022 half the smallest number instead.
    assert found is not None
    assert abs(Fraction(found) - exact) <= abs(exact) * Fraction(2, 2**53) * Fraction(11, 10) + Fraction(1, 2**1000)
    shuffled = rng.sample(numbers, len(numbers))
    assert typical_value(np.array(shuffled), 0) == found


def test_mean_of_the_largest_numbers_does_not_overflow() -> None:
    largest = 1.7976931348623157e308
    assert typical_value(np.array([largest] * 5), 0) == largest
    assert typical_value(np.array([largest, -largest, largest]), 0) == pytest.approx(largest / 3, rel=1e-15)


def test_every_missing_value_takes_the_typical_one_of_its_input() -> None:
    values = np.array([[1.0, NAN, 2], [NAN, 1, NAN]])
    assert with_typical(values, [7.5, 2.0, 0.25]).tolist() == [[1, 2, 2], [7.5, 1, 0.25]]
    assert math.isnan(values[0, 1])


def test_typical_value_of_weighted_numbers_is_the_weighted_mean() -> None:
    assert typical_value(np.array([1.0, NAN, 5.0]), 0, np.array([3.0, 100.0, 1.0])) == 2.0
    assert typical_value(np.array([NAN, NAN]), 0, np.array([1.0, 2.0])) is None


def test_typical_level_is_the_one_with_the_most_weight_of_several_the_lowest() -> None:
    levels = np.array([2.0, 1, 1, NAN, 0])
    assert typical_value(levels, 3, np.array([5.0, 2, 2, 100, 1])) == 2.0
    assert typical_value(levels, 3, np.array([4.0, 2, 2, 100, 1])) == 1.0


@given(
    st.lists(st.tuples(st.floats(-1e300, 1e300), st.floats(5e-324, 1e300)), min_size=1, max_size=12),
    st.randoms(use_true_random=False),
)
def test_weighted_mean_is_near_the_exact_one_and_the_same_in_any_order(
    rows: list[tuple[float, float]], rng: random.Random
) -> None:
    found = typical_value(*_values_and_weights(rows))
    exact = [(Fraction(value), Fraction(weight)) for value, weight in rows]
    total = sum(weight for _, weight in exact)
    mean = sum(value * weight for value, weight in exact) / total
    size = sum(abs(value) * weight for value, weight in exact) / total
    assert found is not None
    # Each product, both sums and the quotient are rounded once; a product below 2^-1022 loses nothing beside 2^-974.
    assert abs(Fraction(found) - mean) <= Fraction(5, 2**53) * size + Fraction(1, 2**974)
    assert typical_value(*_values_and_weights(rng.sample(rows, len(rows)))) == found


def _values_and_weights(rows: list[tuple[float, float]]) -> tuple[np.ndarray, int, np.ndarray]:
    return np.array([value for value, _ in rows]), 0, np.array([weight for _, weight in rows])
