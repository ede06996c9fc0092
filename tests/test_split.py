"""The split depends on what the rows hold and on the seed, and on nothing else."""

from __future__ import annotations

import hashlib
import json
import random
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from runtime_min.canonical import canonical
from runtime_min.errors import RowsError
from trainer.plan import read_plan
from trainer.split import held_out_rows, row_keys
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
