"""Columns with a meaning of their own: weights, groups, held-out rows, and inputs that the plan does not name."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from test_table import INPUTS, changed, problems_of, rows_of

from trainer.split import held_out_rows

HEADER = "flow,wheel,state,hours,pump,test\n"
FILE = HEADER + (
    "1,closed,sound,1,p1,0\n"
    "2,open,bad,0.5,p2,1\n"
    "3,open,sound,0,p3,1\n"
    ",open,bad,7,p1,0\n"
    "5,closed,bad,1e12,p1,0\n"
)  # fmt: skip
NAMED = 'classes = ["sound", "bad"]\nweight = "hours"\ngroup = "pump"\nheld_out = "test"'


def test_weights_groups_and_held_out_rows_go_with_their_rows(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, FILE, rows=NAMED)
    assert rows.values[:, 0].tolist() == [1, 2, 5]
    assert rows.weights is not None
    assert rows.weights.tolist() == [1, 0.5, 1e12]
    assert rows.groups == ("p1", "p2", "p1")
    assert rows.held_out is not None
    assert rows.held_out.tolist() == [False, True, False]
    assert rows.keys == (b'"sound",1,"closed",1]', b'"bad",2,"open",0.5]', b'"bad",5,"closed",1000000000000]')
    assert (rows.total, rows.dropped) == (5, 1)
    for array in (rows.weights, rows.held_out):
        assert not array.flags.writeable


def test_columns_that_the_plan_does_not_name_are_none(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, FILE)
    assert (rows.weights, rows.groups, rows.held_out) == (None, None, None)
    assert len(rows.values) == 4


def test_split_takes_the_column_or_the_share_alike(tmp_path: Path) -> None:
    assert held_out_rows(rows_of(tmp_path, FILE, rows=NAMED), "test", 0).tolist() == [False, True, False]
    by_group = rows_of(tmp_path, FILE, rows=NAMED.replace('"test"', "0.5"))
    assert held_out_rows(by_group, Fraction(1, 2), 0).tolist() in ([True, False, True], [False, True, False])


def test_row_of_weight_zero_is_left_out_but_read(tmp_path: Path) -> None:
    named = NAMED.replace('held_out = "test"', "")
    rows = rows_of(tmp_path, FILE, INPUTS.replace("range = [0, 100]", ""), rows=named)
    # 1, 2 and 5 give the range, 3 no more than a row of weight 0 beyond it would: 4 / 10 on each side.
    wider = rows_of(tmp_path, FILE + "90,open,bad,0,p4,0\n", INPUTS.replace("range = [0, 100]", ""), rows=named)
    assert rows.inputs == wider.inputs
    assert (rows.inputs[0].low, rows.inputs[0].high) == (Fraction(6, 10), Fraction(54, 10))
    assert problems_of(tmp_path, FILE + "x,open,bad,0,p4,0\n", rows=named)[0].startswith('line 7, column "flow": ')


def test_rows_that_are_left_out_give_no_level_and_no_class(tmp_path: Path) -> None:
    more = "7,ajar,sound,0,p1,0\n8,shut,worse,0,p1,0\n,half,worst,1,p1,0\n"
    named = 'weight = "hours"\ngroup = "pump"\nheld_out = "test"'
    rows = rows_of(tmp_path, FILE.replace("p1,0\n5", "p1,0\n6,bent,bad,0,p1,0\n5") + more, "", rows=named)
    assert (rows.inputs[1].levels, rows.classes) == (("closed", "open"), ("bad", "sound"))
    assert rows.values.tolist() == [[1, 0], [2, 1], [5, 0]]
    assert rows.labels.tolist() == [1, 0, 0]


def test_held_out_column_may_spell_its_numbers_in_any_way(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, FILE.replace(",1\n", ",1.0\n").replace(",0\n", ",0e0\n"), rows=NAMED)
    assert rows.held_out is not None
    assert rows.held_out.tolist() == [False, True, False]


def test_group_may_be_an_input_too(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, FILE, rows='classes = ["sound", "bad"]\ngroup = "wheel"')
    assert rows.groups == ("closed", "open", "open", "closed")


def test_each_unknown_text_is_reported_once(tmp_path: Path) -> None:
    text = FILE + "6,ajar,worse,1,p1,0\n" * 3 + "6,shut,worse,1,p1,0\n"
    assert [sentence.partition(", not")[0] for sentence in problems_of(tmp_path, text)] == [
        'line 7, column "wheel": found "ajar"',
        'line 7, column "state": found "worse"',
        'line 10, column "wheel": found "shut"',
    ]


def test_level_that_is_missing_stays_nan_under_typical(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, FILE + "4,,bad,1,p1,0\n", changed("wheel", 'missing = "typical"'))
    assert np.isnan(rows.values[-1, 1])
    assert rows.keys[-1] == b'"bad",4,null,1]'


# --- a plan that names no input --------------------------------------------------------------------------------------


def test_texts_become_levels_sorted_and_numbers_inputs(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, FILE, "", rows=NAMED)
    flow, wheel = rows.inputs
    assert (flow.name, flow.levels, flow.assumed) == ("flow", (), True)
    assert (wheel.name, wheel.levels, wheel.low, wheel.assumed) == ("wheel", ("closed", "open"), None, True)
    assert rows.values.tolist() == [[1, 0], [2, 1], [5, 0]]
    assert rows.keys[1] == b'"bad",2,"open",0.5]'


def test_columns_that_rows_names_are_no_inputs(tmp_path: Path) -> None:
    assert [entry.name for entry in rows_of(tmp_path, FILE, "", rows='group = "pump"').inputs] == [
        "flow", "wheel", "hours", "test",
    ]  # fmt: skip


def test_levels_of_a_late_first_text_are_all_found(tmp_path: Path) -> None:
    # Empty fields for longer than one block of records, then texts.
    empty = "".join(f"{at % 50},,{('x', 'y')[at % 3 == 0]}\n" for at in range(9000))
    rows = rows_of(tmp_path, "a,b,state\n" + empty + "1,up,x\n2,down,y\n3,up,y\n", "", rows="held_out = 0")
    assert rows.inputs[1].levels == ("down", "up")
    assert rows.values[:, 1].tolist() == [1, 0, 1]
    assert (rows.total, rows.dropped) == (9003, 9000)


def test_twenty_texts_are_levels_and_twenty_one_are_not(tmp_path: Path) -> None:
    def text(count: int) -> str:
        return "a,b,state\n" + "".join(f"{at},t{at % count},{'xy'[at % 2]}\n" for at in range(200))

    assert len(rows_of(tmp_path, text(20), "", rows="").inputs[1].levels) == 20
    assert problems_of(tmp_path, text(21), "", rows="") == [
        'column "b": found more than 20 different texts; '
        "remove the column, or name every input with [[input]] in the plan"
    ]


def test_prior_of_a_term_that_the_rows_do_not_give_is_named(tmp_path: Path) -> None:
    (tmp_path / "runs.csv").write_text(FILE)
    plan = tmp_path / "plan.toml"
    plan.write_text(
        'model = "m"\n[rows]\nfile = "runs.csv"\nlabel = "state"\n[prior.term."wheel=ajar"]\nmean = 1\n',
        encoding="utf-8",
    )
    from runtime_min.errors import RowsError
    from trainer.plan import read_plan
    from trainer.table import read_rows

    with pytest.raises(RowsError) as caught:
        read_rows(read_plan(plan))
    assert str(caught.value) == (
        f'{plan}: [prior.term]: "wheel=ajar": found no term of this name; '
        'name one of the terms, "flow", "wheel=open", "hours", "pump=p2", "pump=p3" and 1 more'
    )
