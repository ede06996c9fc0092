"""Rows of an input in counts: a value that no count of the device can stand for is refused, whatever the range says."""

from __future__ import annotations

from pathlib import Path

import pytest
from test_table import INPUTS, problems_of, rows_of

HEADER = "flow,wheel,state\n"
TENTHS = "counts = { bits = 8, gain = 0.1 }"
"""0 … 255 of 1/10 are 0 … 25.5; a row may have one count more at each end, -0.1 … 25.6."""


def rows_with(*flows: str) -> str:
    lines = [f"{flow},{'open' if at % 2 else 'closed'},{'bad' if at % 2 else 'sound'}" for at, flow in enumerate(flows)]
    return HEADER + "\n".join(lines) + "\n"


def counted(limits: str, counts: str = TENTHS, outside: str = "fault") -> str:
    return INPUTS.replace("range = [0, 100]", f'{limits}\n{counts}\noutside = "{outside}"')


NO_COUNT = "which no count gives: all counts span {}; correct it, or correct bits, gain and offset"


@pytest.mark.parametrize("outside", ["fault", "clamp"])
@pytest.mark.parametrize("limits", ["range = [0, 100]", ""])
def test_value_beyond_all_counts_is_refused(tmp_path: Path, limits: str, outside: str) -> None:
    found = problems_of(tmp_path, rows_with("1", "72.3", "2", "3"), counted(limits, outside=outside))
    assert found == [f'line 3, column "flow": found 72.3, {NO_COUNT.format("0 to 25.5")}']


def test_full_scale_of_one_count_more_is_accepted(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, rows_with("1", "25.6", "0", "3"), counted("range = [0, 100]"))
    assert rows.values[:, 0].tolist() == [1, 25.6, 0, 3]


def test_gain_below_zero_and_signed_counts_span_both_ways(tmp_path: Path) -> None:
    counts = "counts = { bits = 8, gain = -0.5, offset = 10, signed = true }"  # 10 - 0.5 * (-128 … 127)
    span = NO_COUNT.format("-53.5 to 74")
    found = problems_of(tmp_path, rows_with("-54.1", "74", "-53.5", "75"), counted("range = [-90, 90]", counts))
    assert found == [
        f'line 2, column "flow": found -54.1, {span}',
        f'line 5, column "flow": found 75, {span}',
    ]


def test_limit_that_clamps_within_the_counts_lets_any_row_pass(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, rows_with("1", "72.3", "2", "3"), counted("range = [0, 20]", outside="clamp"))
    assert rows.values[:, 0].tolist() == [1, 20, 2, 3]


def test_row_outside_the_range_and_the_counts_is_told_once(tmp_path: Path) -> None:
    found = problems_of(tmp_path, rows_with("1", "172.3", "2", "3"), counted("range = [0, 100]"))
    assert len(found) == 1
    assert "outside the range 0 to 100" in found[0]


def test_span_beyond_binary64_is_no_limit(tmp_path: Path) -> None:
    counts = "counts = { bits = 32, gain = 1e305, signed = true }"
    text = rows_with("-1e308", "1e308", "2", "3")
    assert rows_of(tmp_path, text, counted("range = [-1e308, 1e308]", counts)).total == 4
