"""The split depends on what the rows hold and on the seed, and on nothing else."""

from __future__ import annotations

import hashlib
import json
import random
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from runtime_min.canonical import canonical
from runtime_min.errors import RowsError
from trainer.plan import read_plan
from trainer.split import folds, held_out_rows, row_keys
from trainer.table import Rows, read_rows

EXAMPLE = Path(__file__).parent.parent / "examples" / "pump_alarm"


def rows_with(keys: list[bytes]) -> Rows:
    n = len(keys)
    return Rows((), ("a", "b"), np.zeros((n, 0)), np.zeros(n, np.int64), tuple(keys), 0, n, "")


def different(n: int) -> Rows:
    return rows_with([b'"a",%d,1]' % index for index in range(n)])


def test_key_is_the_canonical_array_without_its_seed() -> None:
    # RFC 8785, section 3.2.2.3: numbers as ECMAScript writes them: 1e21 is "1e+21", 1e20 in full, 0.000001 in full.
    keys = row_keys(["a", 'b"'], [[1e21, 1e20], [-0.0, 0.000001], ["open", None]])
    assert keys == (b'"a",1e+21,0,"open",1]', b'"b\\"",100000000000000000000,0.000001,null,1]')


def test_rows_with_the_least_hashes_are_held_out() -> None:
    # The rule in the open: SHA-256 of [seed, label, inputs, weight], sorted; the first round(0.25 * 40) = 10.
    rows = different(40)
    digest = {
        k: hashlib.sha256(json.dumps([11, "a", k, 1], separators=(",", ":")).encode()).digest() for k in range(40)
    }
    first = sorted(range(40), key=digest.__getitem__)[:10]
    assert np.flatnonzero(held_out_rows(rows, Fraction(1, 4), 11)).tolist() == sorted(first)


def test_shuffled_file_holds_out_the_same_rows(tmp_path: Path) -> None:
    header, *lines = (EXAMPLE / "runs.csv").read_text(encoding="utf-8").splitlines(keepends=True)
    random.Random(3).shuffle(lines)
    (tmp_path / "runs.csv").write_text(header + "".join(lines), encoding="utf-8")
    (tmp_path / "plan.toml").write_bytes((EXAMPLE / "plan.toml").read_bytes())
    chosen = []
    for folder in (EXAMPLE, tmp_path):
        rows = read_rows(read_plan(folder / "plan.toml"))
        out = held_out_rows(rows, Fraction(1, 4), 11)
        assert out.sum() == 750
        chosen.append(sorted(key for key, held in zip(rows.keys, out, strict=True) if held))
    assert chosen[0] == chosen[1]


def test_another_seed_holds_out_other_rows() -> None:
    one, other = (held_out_rows(different(200), Fraction(1, 4), seed) for seed in (1, 2))
    assert (one != other).any()


@pytest.mark.parametrize(
    ("share", "n", "count"),
    [
        (Fraction(0), 10, 0),
        (Fraction(1, 4), 10, 2),  # 2.5: ties to even
        (Fraction(1, 100), 10, 1),  # at least one on each side
        (Fraction(99, 100), 10, 9),
        (Fraction(1, 3), 2, 1),
    ],
)
def test_count_is_the_rounded_share_with_one_row_on_each_side(share: Fraction, n: int, count: int) -> None:
    assert held_out_rows(different(n), share, 0).sum() == count


def test_equal_rows_stay_together() -> None:
    keys = [b'"a",%d,1]' % (index % 3) for index in range(30)]  # three rows, ten times each
    for seed in range(20):
        out = held_out_rows(rows_with(keys), Fraction(1, 4), seed)
        assert out.sum() == 10  # 8 wanted; 10 is the nearest whole group but none
        assert len({key for key, held in zip(keys, out, strict=True) if held}) == 1


def test_rows_that_are_all_equal_cannot_be_split() -> None:
    with pytest.raises(RowsError) as caught:
        held_out_rows(rows_with([b'"a",1,1]'] * 5), Fraction(1, 4), 0)
    assert str(caught.value) == (
        "[rows]: held_out: found no two different rows to hold out one of; write held_out = 0, or give more rows"
    )


@settings(max_examples=300, deadline=None)
@given(st.lists(st.floats(allow_nan=False, allow_infinity=False) | st.text(max_size=5) | st.none(), min_size=1))
def test_short_cut_to_canonical_numbers_changes_no_key(values: list[str | float | None]) -> None:
    try:
        expected = [f'"a",{canonical(value)},1]'.encode() for value in values]
    except ValueError:  # a lone surrogate has no canonical form
        return
    assert row_keys(["a"] * len(values), [values]) == tuple(expected)


# --- groups ----------------------------------------------------------------------------------------------------------


def grouped(groups: list[str]) -> Rows:
    rows = different(len(groups))
    return replace(rows, groups=tuple(groups))


def test_groups_with_the_least_hashes_are_held_out_whole() -> None:
    # The rule in the open: SHA-256 of [seed, group], sorted; the first round(0.25 * 12) = 3 of 12 groups.
    names = [f"pump {at}" for at in range(12)]
    digest = {name: hashlib.sha256(json.dumps([11, name], separators=(",", ":")).encode()).digest() for name in names}
    first = set(sorted(names, key=digest.__getitem__)[:3])
    groups = [names[(at * 5) % 12] for at in range(100)]
    out = held_out_rows(grouped(groups), Fraction(1, 4), 11)
    assert {group for group, held in zip(groups, out, strict=True) if held} == first
    assert {group for group, held in zip(groups, out, strict=True) if not held} == set(names) - first


@pytest.mark.parametrize(
    ("share", "count", "held"),
    [
        (Fraction(1, 4), 5, 1),  # 1.25
        (Fraction(1, 2), 5, 2),  # 2.5: ties to even
        (Fraction(1, 100), 5, 1),  # at least one on each side
        (Fraction(99, 100), 5, 4),
        (Fraction(1, 3), 2, 1),
        (Fraction(0), 5, 0),
    ],
)
def test_count_of_groups_is_the_rounded_share_whatever_their_sizes(share: Fraction, count: int, held: int) -> None:
    groups = [f"g{at}" for at in range(count) for _ in range(1 + at * at)]
    out = held_out_rows(grouped(groups), share, 3)
    assert len({group for group, is_out in zip(groups, out, strict=True) if is_out}) == held


def test_one_group_cannot_be_split() -> None:
    with pytest.raises(RowsError) as caught:
        held_out_rows(grouped(["a"] * 5), Fraction(1, 4), 0)
    assert str(caught.value) == (
        "[rows]: held_out: found no two groups to hold out one of; write held_out = 0, or give more groups"
    )


def test_column_of_held_out_rows_is_taken_as_it_is() -> None:
    column = np.array([True, False, True])
    rows = replace(different(3), held_out=column)
    assert held_out_rows(rows, "test", 0).tolist() == [True, False, True]
    with pytest.raises(ValueError, match="read without the column test"):
        held_out_rows(different(3), "test", 0)


def test_weight_of_a_row_is_part_of_its_key() -> None:
    assert row_keys(["a", "a"], [[1.0, 1.0]], [2.0, 0.5]) == (b'"a",1,2]', b'"a",1,0.5]')


# --- folds -----------------------------------------------------------------------------------------------------------


@settings(max_examples=100, deadline=None)
@given(st.lists(st.integers(0, 15), min_size=2, max_size=60), st.integers(2, 6), st.randoms(use_true_random=False))
def test_folds_keep_groups_whole_and_know_no_position(numbers: list[int], count: int, random: random.Random) -> None:
    groups = [f"g{number}" for number in numbers]
    different_groups = len(set(groups))
    everything = np.ones(len(groups), dtype=bool)
    if different_groups < 2:
        with pytest.raises(RowsError, match="found no two groups among the rows to fit"):
            folds(grouped(groups), everything, count, 7)
        return
    fold = folds(grouped(groups), everything, count, 7)
    of_group = {}
    for group, number in zip(groups, fold.tolist(), strict=True):
        assert of_group.setdefault(group, number) == number
    assert set(fold.tolist()) == set(range(min(count, different_groups)))
    # Longest-processing-time bound of dealing to the smallest: no fold exceeds another by more than one group.
    sizes = np.bincount(fold)
    assert sizes.max() - sizes.min() <= max(map(groups.count, groups))
    shuffled = list(groups)
    random.shuffle(shuffled)
    again = folds(grouped(shuffled), everything, count, 7)
    assert dict(zip(shuffled, again.tolist(), strict=True)) == of_group


def test_rows_are_dealt_in_turn_in_the_order_of_their_hashes() -> None:
    rows = different(23)
    digest = [hashlib.sha256(json.dumps([5, "a", k, 1], separators=(",", ":")).encode()).digest() for k in range(23)]
    expected = np.empty(23, int)
    expected[sorted(range(23), key=digest.__getitem__)] = np.arange(23) % 4
    assert folds(rows, np.ones(23, dtype=bool), 4, 5).tolist() == expected.tolist()


def test_each_fold_gets_its_share_of_a_rare_class() -> None:
    rows = different(1000)
    labels = np.zeros(1000, np.int64)
    labels[::100] = 1
    fold = folds(replace(rows, labels=labels), np.ones(1000, dtype=bool), 5, 0)
    assert np.bincount(fold[labels == 1]).tolist() == [2] * 5
    assert np.bincount(fold).tolist() == [200] * 5


def test_equal_rows_share_a_fold() -> None:
    keys = [b'"a",%d,1]' % (at % 7) for at in range(70)]
    fold = folds(rows_with(keys), np.ones(70, dtype=bool), 3, 0)
    assert all(len({number for key, number in zip(keys, fold, strict=True) if key == one}) == 1 for one in keys)
    assert sorted(np.bincount(fold).tolist()) == [20, 20, 30]


def test_folds_are_of_the_fitted_rows_alone() -> None:
    rows = different(100)
    out = held_out_rows(rows, Fraction(1, 4), 1)
    fold = folds(rows, ~out, 5, 1)
    assert len(fold) == 75
    assert np.bincount(fold).tolist() == [15] * 5


def test_rows_that_are_all_equal_have_no_folds() -> None:
    with pytest.raises(RowsError) as caught:
        folds(rows_with([b'"a",1,1]'] * 5), np.ones(5, dtype=bool), 5, 0)
    assert str(caught.value) == (
        "[prior]: sd: found no two different rows among the rows to fit, to choose sd by cross-validation; "
        "write a number for sd, or give more different rows"
    )
