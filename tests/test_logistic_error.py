"""The largest error of the table for the logistic function: the same as that of trying every argument."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import mpmath
import numpy as np
import pytest

from export.logistic_error import table_error
from runtime_min.integer_score import table_probability
from runtime_min.model import Table
from runtime_min.probability_table import TABLE_ERROR, probability_table


def worst_of_every_argument(table: Table, shift: int) -> float:
    """By the rule of the table, vectorised, over every argument up to the last node, and what lies beyond."""
    last = (len(table.nodes) - 1) << (table.step + table.drop)
    nodes, worst = np.array([*table.nodes, table.nodes[-1]], np.int64), 0.0
    for start in range(0, last + 1, 2**20):
        z = np.arange(start, min(start + 2**20, last + 1), dtype=np.int64)
        a = z >> table.drop
        i, f = a >> table.step, a & ((1 << table.step) - 1)
        q = nodes[i] + (((nodes[i + 1] - nodes[i]) * f + (1 << (table.step - 1))) >> table.step)
        worst = max(worst, float(np.max(np.abs(q / 2**15 - 1 / (1 + np.exp(-z / 2.0**shift))))))
    return max(worst, 1 - table.nodes[-1] / 2**15)


@pytest.mark.parametrize("shift", [3, 4, 9, 16, 18, 20])
def test_error_is_that_of_trying_every_argument(shift: int) -> None:
    table = probability_table(shift)
    assert float(table_error(table, shift)) == pytest.approx(worst_of_every_argument(table, shift), abs=1e-12)


@pytest.mark.slow
def test_error_is_that_of_trying_every_argument_of_a_long_table() -> None:
    assert float(table_error(probability_table(25), 25)) == pytest.approx(
        worst_of_every_argument(probability_table(25), 25), abs=1e-12
    )


@pytest.mark.parametrize("shift", [29, 61])
def test_random_arguments_of_a_wide_accumulator_err_by_no_more(shift: int) -> None:
    table = probability_table(shift)
    bound = table_error(table, shift)
    rng = np.random.default_rng(2)
    for share in rng.uniform(-9, 9, 3000).tolist():
        z = int(Fraction(share) * 2**shift)
        with mpmath.workdps(30):
            exact = 1 / (1 + mpmath.exp(-mpmath.mpf(z) / 2**shift))
            off = abs(mpmath.mpf(table_probability(z, table)) / 2**15 - exact)
            assert off <= mpmath.mpf(bound.numerator) / bound.denominator


@pytest.mark.parametrize("shift", [3, 12, 29, 45, 61])
def test_sealed_tables_keep_their_stated_error(shift: int) -> None:
    assert table_error(probability_table(shift), shift) <= TABLE_ERROR


@pytest.mark.parametrize("position", [1, 7, 20])
def test_table_entry_that_is_off_breaks_the_stated_error(position: int) -> None:
    table = probability_table(16)
    wrong = replace(table, nodes=tuple(node - 40 * (at == position) for at, node in enumerate(table.nodes)))
    assert table_error(wrong, 16) > TABLE_ERROR
    assert float(table_error(wrong, 16)) == pytest.approx(worst_of_every_argument(wrong, 16), abs=1e-12)


def test_table_that_is_read_at_another_scale_is_far_off() -> None:
    assert table_error(probability_table(16), 17) > Fraction(1, 10)
