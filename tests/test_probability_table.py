"""The logistic table of integers: every argument up to beyond its last node, in NumPy's 32-bit integers.

Sources: `check_values/facts/logistic.json` (hard points of the logistic function, three independent tools). Else the
logistic function by NumPy in binary64, whose error (below 1e-15) is far below the table's unit, 2^-15.
"""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st

from runtime_min.integer_score import table_probability
from runtime_min.model import Table
from runtime_min.probability_table import TABLE_ERROR, probability_table

POINTS = json.loads((Path(__file__).parent / "check_values" / "facts" / "logistic.json").read_text(encoding="utf-8"))
SHIFTS = (3, 4, 10, 18, 19, 24, 30, 62)
BEYOND = 10.0  # log-odds; the last node stands at 8


def every_argument(table: Table, shift: int) -> npt.NDArray[np.int64]:
    """All |z| >> drop from 0 to beyond the last node: the result depends on nothing else of z."""
    return np.arange(int(BEYOND * 2.0 ** (shift - table.drop)) + 1, dtype=np.int64)


def looked_up(table: Table, a: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    """The rule in 32-bit integers, as a device has them; a is |z| >> drop."""
    nodes = np.array(table.nodes, np.int32)
    i = np.minimum(a >> table.step, len(nodes) - 1).astype(np.int32)
    f = (a & (2**table.step - 1)).astype(np.int32)
    after = nodes[np.minimum(i + 1, len(nodes) - 1)]
    return (nodes[i] + (((after - nodes[i]) * f + np.int32(2 ** (table.step - 1))) >> table.step)).astype(np.int64)


@pytest.mark.parametrize("shift", SHIFTS)
def test_every_argument_is_within_the_stated_error(shift: int) -> None:
    """Of all z that one argument stands for, the extremes are farthest from it, since the logistic function grows."""
    table = probability_table(shift)
    a = every_argument(table, shift)
    q = looked_up(table, a)
    scale = 2.0 ** (table.drop - shift)
    for end in (a * scale, (a + 1) * scale if table.drop else a * scale):
        worst = np.abs(q / 2.0**15 - 1 / (1 + np.exp(-end))).max()
        assert worst <= float(TABLE_ERROR)
    assert np.abs(table.nodes[-1] / 2.0**15 - 1.0) <= float(TABLE_ERROR)


@pytest.mark.parametrize("shift", SHIFTS)
def test_every_argument_gives_no_less_than_the_one_before(shift: int) -> None:
    table = probability_table(shift)
    q = looked_up(table, every_argument(table, shift))
    assert q[0] == 2**14
    assert (np.diff(q) >= 0).all()
    assert q[-1] == table.nodes[-1] <= 2**15


@pytest.mark.parametrize("shift", SHIFTS)
def test_scorer_is_the_rule_in_32_bits(shift: int) -> None:
    table = probability_table(shift)
    ends = range(len(table.nodes) + 1)
    near = [(node << (table.drop + table.step)) + by for node in ends for by in (-2, -1, 0, 1, 2)]
    top = (1 << max(shift + 1, 31)) - 1
    for z in (*near, 3 << table.drop, top):
        if z >= 0:
            wanted = int(looked_up(table, np.array([z >> table.drop], np.int64))[0])
            assert table_probability(z, table) == wanted
            assert table_probability(-z, table) == (32768 - wanted if z else wanted)


@given(st.integers(-(2**63) + 1, 2**63 - 1), st.sampled_from(SHIFTS), st.integers(0, 2**40))
def test_table_is_symmetric_and_monotone(z: int, shift: int, by: int) -> None:
    table = probability_table(shift)
    assert table_probability(0, table) == 2**14
    assert table_probability(z, table) + table_probability(-z, table) == 2**15
    assert table_probability(z, table) <= table_probability(z + by, table)


@pytest.mark.parametrize("shift", SHIFTS)
def test_table_product_fits_32_bits_and_nodes_stand_a_quarter_apart(shift: int) -> None:
    table = probability_table(shift)
    assert table.drop + table.step == shift - 2
    assert max(np.diff(table.nodes)) * (2**table.step - 1) + 2 ** (table.step - 1) < 2**31
    assert table.step == min(16, shift - 2)


@pytest.mark.parametrize("shift", [18, 26, 62])
def test_published_values_are_within_the_stated_error(shift: int) -> None:
    table = probability_table(shift)
    tried = 0
    for point in POINTS["points"]:
        z = Fraction(float.fromhex(point["z"]))
        if abs(z) < 2 ** (30 if shift < 62 else 62) // 2**shift + 1:
            tried += 1
            # A step of 2^-shift changes a probability by a quarter of it at most.
            found = Fraction(table_probability(round(z * 2**shift), table), 2**15)
            allowed = TABLE_ERROR + Fraction(1, 2 ** (shift + 2))
            assert abs(found - Fraction(float.fromhex(point["value"]))) <= allowed
    assert tried > 20
