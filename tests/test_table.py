"""Rows: what is read, and the whole sentence for each thing that cannot be."""

from __future__ import annotations

import hashlib
import io
import json
import subprocess
import sys
import time
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from runtime_min.errors import RowsError
from trainer.plan import read_plan
from trainer.records import Lines, records
from trainer.table import Rows, read_rows

HERE = Path(__file__).parent
EXAMPLE = HERE.parent / "examples" / "pump_alarm"
FACTS = json.loads((HERE / "check_values" / "facts" / "rfc4180.json").read_text())

INPUTS = """
[[input]]
name = "flow"
range = [0, 100]
[[input]]
name = "wheel"
levels = ["closed", "open"]
"""
HEADER = "flow,wheel,state\n"
GOOD = HEADER + "1.5,closed,sound\n2.5,open,bad\n"


def rows_of(folder: Path, text: str | bytes, inputs: str = INPUTS, rows: str = 'classes = ["sound", "bad"]') -> Rows:
    (folder / "runs.csv").write_bytes(text.encode() if isinstance(text, str) else text)
    plan = f'model = "m"\n[rows]\nfile = "runs.csv"\nlabel = "state"\n{rows}\n{inputs}\n[prior]\nsd = 1'
    (folder / "plan.toml").write_text(plan)
    return read_rows(read_plan(folder / "plan.toml"))


def problems_of(folder: Path, text: str | bytes, inputs: str = INPUTS, **options: str) -> list[str]:
    """Every problem's sentence, without the path of the file."""
    with pytest.raises(RowsError) as caught:
        rows_of(folder, text, inputs, **options)
    where = f"{folder / 'runs.csv'}: "
    assert all(str(problem).startswith(where) for problem in caught.value.problems)
    return [str(problem).removeprefix(where) for problem in caught.value.problems]


def changed(entry: str, what: str) -> str:
    return INPUTS.replace(f'name = "{entry}"', f'name = "{entry}"\n{what}')


# --- what is read ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("fact", FACTS["values"], ids=lambda fact: f"rule {fact['rule']}")
def test_records_follow_rfc4180(fact: dict[str, object]) -> None:
    stream = io.BytesIO(str(fact["text"]).encode())
    assert [fields for _, fields in records(Lines(stream, "x"))] == fact["rows"]


def test_values_are_the_plans_units_and_the_positions_of_levels(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, GOOD)
    assert rows.values.tolist() == [[1.5, 0.0], [2.5, 1.0]]
    assert rows.labels.tolist() == [0, 1]
    assert rows.classes == ("sound", "bad")
    assert (rows.total, rows.dropped) == (2, 0)
    assert rows.sha256 == hashlib.sha256(GOOD.encode()).hexdigest()
    with pytest.raises(ValueError, match="read-only"):
        rows.values[0, 0] = 3.0


@pytest.mark.parametrize(
    "text",
    [
        b"\xef\xbb\xbf" + GOOD.encode(),
        GOOD.replace("\n", "\r\n").encode(),
        GOOD.rstrip("\n").encode(),
        GOOD.replace("\n", "\n\n").encode(),
        GOOD.replace("closed", '"closed"').replace("flow", '"flow"').encode(),
        GOOD.replace("1.5", " +15e-1 ").encode(),
    ],
    ids=["byte order mark", "CRLF", "no last line end", "empty lines", "quotes", "another spelling"],
)
def test_one_table_in_many_dresses_is_the_same_table(tmp_path: Path, text: bytes) -> None:
    assert rows_of(tmp_path, text).values.tolist() == [[1.5, 0.0], [2.5, 1.0]]


def test_quoted_commas_and_line_breaks_belong_to_the_text(tmp_path: Path) -> None:
    inputs = INPUTS.replace('"closed"', '"clo,sed"').replace('"flow"', '"flow"\ncolumn = "flow,\\nm3"')
    rows = rows_of(tmp_path, '"flow,\nm3",wheel,state\n1,"clo,sed",sound\n2,open,bad\n', inputs)
    assert rows.values.tolist() == [[1.0, 0.0], [2.0, 1.0]]


def test_row_that_misses_a_value_is_dropped_and_counted_under_fault(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, GOOD + ",open,bad\n3,,bad\n")
    assert (rows.total, rows.dropped, len(rows.values), len(rows.keys)) == (4, 2, 2, 2)


def test_missing_value_stays_nan_under_typical_and_null_in_the_key(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, GOOD + ",open,bad\n3,,bad\n", changed("flow", 'missing = "typical"'))
    assert (rows.total, rows.dropped) == (4, 1)
    assert np.isnan(rows.values[2, 0])
    assert rows.keys == (b'"sound",1.5,"closed",1]', b'"bad",2.5,"open",1]', b'"bad",null,"open",1]')


def test_clamp_holds_in_training_and_leaves_the_key_as_parsed(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, GOOD + "-1e3,open,bad\n250,open,bad\n", changed("flow", 'outside = "clamp"'))
    assert rows.values[:, 0].tolist() == [1.5, 2.5, 0.0, 100.0]
    assert rows.keys[2:] == (b'"bad",-1000,"open",1]', b'"bad",250,"open",1]')


def test_row_is_in_range_when_its_binary64_lies_within_the_rounded_limits(tmp_path: Path) -> None:
    # The decimal 0.1 is not a binary64 number; the nearest one is larger (0.1000000000000000055…), and still in range.
    text = HEADER + "0.1,closed,sound\n0.05,open,bad\n"
    assert len(rows_of(tmp_path, text, INPUTS.replace("[0, 100]", "[0, 0.1]")).values) == 2


def test_range_read_from_rows_is_a_tenth_of_the_span_wider_and_marked(tmp_path: Path) -> None:
    rows = rows_of(tmp_path, HEADER + "-2,closed,sound\n8,open,bad\n", INPUTS.replace("range = [0, 100]\n", ""))
    assert (rows.inputs[0].low, rows.inputs[0].high, rows.inputs[0].assumed) == (Fraction(-3), Fraction(9), True)


def test_plan_without_inputs_takes_every_numeric_column(tmp_path: Path) -> None:
    text = "Flow [m³/h],state,Motor current (A)\n1,sound,3\n2,bad,5\n"
    rows = rows_of(tmp_path, text, "", rows="")
    assert [(entry.name, entry.column, entry.unit, entry.assumed) for entry in rows.inputs] == [
        ("flow", "Flow [m³/h]", "m³/h", True),
        ("motor_current", "Motor current (A)", "A", True),
    ]
    assert rows.classes == ("bad", "sound")  # as found, sorted
    assert rows.labels.tolist() == [1, 0]
    assert rows.values.tolist() == [[1.0, 3.0], [2.0, 5.0]]


def test_example_rows_are_what_their_script_writes(tmp_path: Path) -> None:
    script = tmp_path / "make_rows.py"
    script.write_bytes((EXAMPLE / "make_rows.py").read_bytes())
    subprocess.run([sys.executable, str(script)], check=True, timeout=60)
    assert (tmp_path / "runs.csv").read_bytes() == (EXAMPLE / "runs.csv").read_bytes()


def test_example_rows_fit_their_plan() -> None:
    rows = read_rows(read_plan(EXAMPLE / "plan.toml"))
    assert (rows.total, rows.dropped) == (3000, 0)
    assert 0.15 <= rows.labels.mean() <= 0.25
    assert np.isnan(rows.values).any(axis=0).tolist() == [False, False, False, False, True, False]


# --- what cannot be read ---------------------------------------------------------------------------------------------

WIDEN = 'correct it, widen the range, or write outside = "clamp"'
EMPTY = "correct it, or leave the field empty where a value is missing"
NO_INPUTS = "name every input with [[input]] in the plan"
HUGE = "found a row of more than 1000000 bytes; look for missing line ends, or for a quote that is never closed"


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("", "found no header; give a .csv with a header and rows"),
        (HEADER, "found a header and no rows; give rows below it"),
        (
            "flow,wheel\n1,open\n",
            'line 1: found no column "state" for the label; name a column of the file in the plan',
        ),
        (
            GOOD.replace("wheel", "whel"),
            'line 1: found no column "wheel" for input "wheel"; write "whel" in the plan if that is meant',
        ),
        ("flow,wheel,state,flow\n1,open,bad,2\n", 'line 1: found 2 columns named "flow"; rename all but one'),
        (
            GOOD + "1,open\n",
            "line 4: found 2 fields where the header has 3; "
            "give each row one field a column, in quotes where a field holds a comma",
        ),
        (
            GOOD + "1\n",
            "line 4: found 1 field where the header has 3; "
            "give each row one field a column, in quotes where a field holds a comma",
        ),
        (
            GOOD + '1,"open,bad\n',
            "line 4: found a quote that is never closed; close it, or double it inside a quoted field",
        ),
        (
            GOOD + '1,"op"en",bad\n',
            'line 4: found text after a closing quote; double the quotes inside a quoted field: "a ""b"" c"',
        ),
        (GOOD + "1,open\rbad\n", "line 4: found a carriage return alone; save the file with LF or CRLF line ends"),
        (GOOD.encode() + b"1,op\xe9n,bad\n", "line 4: found text that is not UTF-8; save the file as UTF-8"),
        (GOOD.encode("utf-16"), "line 1: found text that is not UTF-8; save the file as UTF-8"),
        (GOOD + "n/a,open,bad\n", f'line 4, column "flow": found "n/a", not a number; {EMPTY}'),
        (GOOD + "1_000,open,bad\n", f'line 4, column "flow": found "1_000", not a number; {EMPTY}'),
        (GOOD + "١,open,bad\n", f'line 4, column "flow": found "١", not a number; {EMPTY}'),
        (GOOD + " ,open,bad\n", f'line 4, column "flow": found " ", not a number; {EMPTY}'),
        (
            GOOD + "NaN,open,bad\n",
            'line 4, column "flow": found "NaN", not a finite number; leave the field empty where a value is missing',
        ),
        (
            GOOD + "-inf,open,bad\n",
            'line 4, column "flow": found "-inf", not a finite number; leave the field empty where a value is missing',
        ),
        (GOOD + "1e999,open,bad\n", 'line 4, column "flow": found "1e999", too large for binary64; correct it'),
        (GOOD + "100.5,open,bad\n", f'line 4, column "flow": found 100.5, outside the range 0 to 100; {WIDEN}'),
        (
            GOOD + "1,ajar,bad\n",
            'line 4, column "wheel": found "ajar", not one of "closed", "open"; correct it, or add it to levels',
        ),
        (
            GOOD + "1,open,worse\n",
            'line 4, column "state": found "worse", not one of "sound", "bad"; correct it, or remove the row',
        ),
        (GOOD + "1,open,\n", 'line 4, column "state": found an empty field; write the class, or remove the row'),
        (
            HEADER + "1,open,bad\n2,open,bad\n",
            'column "state": found no row of the class "sound" among the 2 that miss no value; '
            "give rows of both classes",
        ),
        (
            HEADER + ",open,bad\n,open,sound\n",
            'found a value missing in each of 2 rows; write missing = "typical" for the inputs that are often missing',
        ),
        (GOOD + "1" * 1_000_000 + ",open,bad\n", f"line 4: {HUGE}"),
        (
            GOOD + '1,"' + "open\n" * 30_000 + '",bad\n',
            "line 4: found a field that is too long; look for a quote that is never closed",
        ),
        (GOOD + "," * 5000 + "\n", "line 4: found 5001 fields, more than 4096; keep the columns that the plan names"),
    ],
    ids=lambda value: str(value)[:60] if isinstance(value, str) and "; " in value else "rows",
)
def test_each_bad_file_is_named_in_one_sentence(tmp_path: Path, text: str | bytes, sentence: str) -> None:
    assert problems_of(tmp_path, text) == [sentence]


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("a,state\n1,x\n2,x\n", 'column "state": found only the class "x"; give rows of two classes'),
        (
            "a,state\n1,x\n2,y\n3,z\n",
            'column "state": found 3 classes, "x", "y", "z": more than two are not there yet; '
            "name two with classes, and remove the rows of the others",
        ),
        ("state\nx\ny\n", "line 1: found no column but the label; give a column for each input"),
        (
            "a,b,state\n1,2,x\n2,3,y\n3,n/a,y\n",
            f'line 4, column "b": found "n/a", not a number; correct it, or {NO_INPUTS}, text with levels',
        ),
        (
            "a,b,state\n1,2,x\n2,NaN,y\n3,3,y\n",
            'line 3, column "b": found "NaN", not a finite number; leave the field empty where a value is missing',
        ),
        (
            "a,b,state\n" + "".join(f"{at},text {at},{'xy'[at % 2]}\n" for at in range(21)),
            f'column "b": found more than 20 different texts; remove the column, or {NO_INPUTS}',
        ),
        (
            "a,state\n3,x\n3,y\n",
            'column "a": found 3 in every row; '
            "remove the column, or name the others with [[input]]: a constant says nothing",
        ),
        (
            "a,b,state\n1,on,x\n2,on,y\n",
            'column "b": found "on" in every row; '
            "remove the column, or name the others with [[input]]: a constant says nothing",
        ),
        (
            "2nd,state\n1,x\n2,y\n",
            'line 1: found "2nd", which is not an identifier of lower-case letters, for the header "2nd"; ' + NO_INPUTS,
        ),
        (
            "a b,a-b,state\n1,2,x\n2,2,y\n",
            f'line 1: found the headers "a b" and "a-b", both A_B in C; {NO_INPUTS}',
        ),
        (
            "a,state\n1e39,x\n2e39,y\n",
            'column "a": found 9e+38, too large for binary32, a tenth beyond the rows; '
            "write a range in the plan, or another arithmetic",
        ),
    ],
)
def test_what_rows_cannot_tell_a_plan_without_inputs_is_named(tmp_path: Path, text: str, sentence: str) -> None:
    assert problems_of(tmp_path, text, "", rows="") == [sentence]


def test_problems_come_in_the_order_of_the_lines_and_many_are_counted(tmp_path: Path) -> None:
    text = HEADER + "x,ajar,sound\n" + "1,open\n" + "999,open,bad\n" * 5000
    found = problems_of(tmp_path, text)
    assert [sentence.partition(": found")[0] for sentence in found[:5]] == [
        'line 2, column "flow"', 'line 2, column "wheel"', "line 3", 'line 4, column "flow"', 'line 5, column "flow"',
    ]  # fmt: skip
    assert len(found) == 21
    assert found[20] == "found 4983 more problems; mend these first"  # 1 + 1 + 1 + 5000, less the 20 shown


def test_line_of_a_problem_is_where_its_row_starts(tmp_path: Path) -> None:
    text = 'flow,wheel,state,note\n1,open,bad,"two\nlines"\nx,open,bad,"two\nlines"\n'
    assert problems_of(tmp_path, text) == [f'line 4, column "flow": found "x", not a number; {EMPTY}']


def test_no_file_and_a_folder_are_told_apart(tmp_path: Path) -> None:
    rows_of(tmp_path, GOOD)
    plan = read_plan(tmp_path / "plan.toml")
    plan.rows.file.unlink()
    with pytest.raises(RowsError, match=r"runs\.csv: found no such file; give the path of the rows$"):
        read_rows(plan)
    plan.rows.file.mkdir()
    with pytest.raises(RowsError, match=r"runs\.csv: found a folder; give the path of the rows$"):
        read_rows(plan)


def test_endless_line_is_refused_in_bounded_memory() -> None:
    class Endless(io.RawIOBase):
        read_bytes = 0

        def readline(self, size: int | None = -1, /) -> bytes:
            assert size is not None
            assert 0 < size <= 2_000_000
            self.read_bytes += size
            return (b"1," * size)[:size]

    stream = Endless()
    with pytest.raises(RowsError, match="found a row of more than 1000000 bytes"):
        list(records(Lines(stream, "x")))  # type: ignore[arg-type]
    assert stream.read_bytes <= 4_000_000


def test_hundred_thousand_rows_are_read_in_seconds(tmp_path: Path) -> None:
    # Measured 0.8 s on two cores; the limit leaves room for a busy machine, and none for quadratic time.
    lines = [f"{i % 999 / 10},{('open', 'closed')[i % 2]},{('bad', 'sound')[i % 5 == 0]}\n" for i in range(100_000)]
    start = time.monotonic()
    rows = rows_of(tmp_path, HEADER + "".join(lines))
    assert len(rows.values) == 100_000
    assert time.monotonic() - start <= 10.0
