"""What a user or a file can get wrong: `ship` ends with exit 2 and one sentence, and writes nothing.

The sentences are this project's own; what makes each input wrong is a construction.
"""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from export.commands import main
from runtime_min.names import NAME_RULE

PLAN = """
model = "pump"
[rows]
file = "runs.csv"
label = "state"
classes = ["sound", "bad"]
held_out = 0
[[input]]
name = "flow"
range = [0, 100]
[[input]]
name = "wheel"
levels = ["closed", "open"]
[prior]
sd = 1.0
"""
WHEEL = '"wheel"\nlevels = ["closed", "open"]'
HEADER = "flow,wheel,state,hours\n"
LINES = [
    "10,closed,sound,1\n", "20,open,bad,2\n", "30,closed,bad,1\n", "40,open,sound,0.5\n",
    "50,closed,sound,1\n", "60,open,bad,3\n", "70,closed,bad,1\n", "80,open,sound,1\n",
]  # fmt: skip
CSV = HEADER + "".join(LINES)

TWO_FLOWS = PLAN.partition("[[input]]")[0] + "[[input]]\nname='a'\n[[input]]\nname='b'\n[prior]\nsd = inf"
FLAT = PLAN.replace("sd = 1.0", "sd = inf")
WEIGHED = PLAN.replace("held_out = 0", 'held_out = 0\nweight = "hours"')
WIDEN = 'correct it, widen the range, or write outside = "clamp"'
EMPTY = "correct it, or leave the field empty where a value is missing"
NO_NUMBER = 'write "cross-validation", a number above 0, or inf for a flat prior'
ROWS = "{rows}: "
PLAN_ = "{plan}: "


SCATTER = ((1, 5), (2, 3), (3, 9), (4, 1), (5, 5), (6, 7), (7, 2), (8, 8), (9, 4), (10, 6))


def two(*rows: tuple[float, float, str]) -> str:
    return "a,b,state\n" + "".join(f"{a},{b},{state}\n" for a, b, state in rows)


def shipped(folder: Path, plan: str | bytes, rows: str | bytes | None, capsys: pytest.CaptureFixture[str]) -> str:
    """What `ship` prints on standard error where it ends with exit 2, having written nothing."""
    (folder / "plan.toml").write_bytes(plan.encode() if isinstance(plan, str) else plan)
    if rows is not None:
        (folder / "runs.csv").write_bytes(rows.encode() if isinstance(rows, str) else rows)
    before = sorted(os.listdir(folder))
    assert main(["ship", str(folder / "plan.toml")]) == 2
    assert sorted(os.listdir(folder)) == before
    printed = capsys.readouterr()
    assert printed.out == ""
    return printed.err


CASES: dict[str, tuple[str | bytes, str | bytes | None, str]] = {
    # the file
    "no such file": (PLAN, None, ROWS + "found no such file; give the path of the rows"),
    "no file that matches": (
        PLAN.replace("runs.csv", "log*.csv"),
        None,
        "{folder}/log*.csv: found no file that matches; give the path of the rows",
    ),
    "empty file": (PLAN, "", ROWS + "found no header; give a .csv with a header and rows"),
    "header only": (PLAN, HEADER, ROWS + "found a header and no rows; give rows below it"),
    "ragged rows": (
        PLAN,
        CSV + "90,open\n",
        ROWS + "line 10: found 2 fields where the header has 4; "
        "give each row one field a column, in quotes where a field holds a comma",
    ),
    "unbalanced quotes": (
        PLAN,
        CSV + '90,"open,bad,1\n',
        ROWS + "line 10: found a quote that is never closed; close it, or double it inside a quoted field",
    ),
    "duplicate column names": (
        PLAN,
        "flow,wheel,state,flow\n1,open,bad,1\n",
        ROWS + 'line 1: found 2 columns named "flow"; rename all but one',
    ),
    "bytes that are not UTF-8": (
        PLAN,
        CSV.encode() + b"90,op\xe9n,bad,1\n",
        ROWS + "line 10: found text that is not UTF-8; save the file as UTF-8",
    ),
    "no column for the label": (
        PLAN,
        CSV.replace("state", "stato"),
        ROWS + 'line 1: found no column "state" for the label; write "stato" in the plan if that is meant',
    ),
    "no column for an input": (
        PLAN,
        CSV.replace("flow", "speed"),
        ROWS + 'line 1: found no column "flow" for input "flow"; name a column of the file in the plan',
    ),
    "no column for the weight": (
        WEIGHED,
        CSV.replace("hours", "time"),
        ROWS + 'line 1: found no column "hours" for the weight; name a column of the file in the plan',
    ),
    # the label
    "one class named, one found": (
        PLAN,
        HEADER + LINES[0] + LINES[3],
        ROWS + 'column "state": found no row of the class "bad" among the 2 that miss no value; '
        "give rows of both classes",
    ),
    "one class, none named": (
        PLAN.replace('classes = ["sound", "bad"]\n', ""),
        HEADER + LINES[0] + LINES[3],
        ROWS + 'column "state": found only the class "sound"; give rows of two classes',
    ),
    "more classes than named": (
        PLAN,
        CSV + "15,open,worse,1\n" * 50,
        ROWS + 'line 10, column "state": found "worse", not one of "sound", "bad"; correct it, or remove the row',
    ),
    "three classes, none named": (
        PLAN.replace('classes = ["sound", "bad"]\n', ""),
        CSV + "15,open,worse,1\n",
        ROWS + 'column "state": found 3 classes, "bad", "sound", "worse": more than two are not there yet; '
        "name two with classes, and remove the rows of the others",
    ),
    "empty label": (
        PLAN,
        CSV + "15,open,,1\n",
        ROWS + 'line 10, column "state": found an empty field; write the class, or remove the row',
    ),
    # values
    "text in a numeric column": (
        PLAN, CSV + "n/a,open,bad,1\n", ROWS + f'line 10, column "flow": found "n/a", not a number; {EMPTY}',
    ),
    "NaN": (
        PLAN,
        CSV + "nan,open,bad,1\n",
        ROWS + 'line 10, column "flow": found "nan", not a finite number; '
        "leave the field empty where a value is missing",
    ),
    "infinity": (
        PLAN,
        CSV + "-Infinity,open,bad,1\n",
        ROWS + 'line 10, column "flow": found "-Infinity", not a finite number; '
        "leave the field empty where a value is missing",
    ),
    "a number too large": (
        PLAN, CSV + "1e400,open,bad,1\n",
        ROWS + 'line 10, column "flow": found "1e400", too large for binary64; correct it',
    ),
    "a value out of its range": (
        PLAN,
        CSV + "-0.5,open,bad,1\n",
        ROWS + f'line 10, column "flow": found -0.5, outside the range 0 to 100; {WIDEN}',
    ),
    "a level that is not named": (
        PLAN,
        CSV + "15,ajar,bad,1\n",
        ROWS + 'line 10, column "wheel": found "ajar", not one of "closed", "open"; '
        "correct it, or add it to levels",
    ),
    "every row misses a value": (
        PLAN,
        HEADER + ",open,bad,1\n3,,sound,1\n",
        ROWS + "found a value missing in each of 2 rows; "
        'write missing = "typical" for the inputs that are often missing',
    ),
    "a constant column": (
        PLAN,
        HEADER + "5,open,bad,1\n5,closed,sound,1\n5,open,sound,1\n",
        ROWS + 'column "flow": found 5 in every row; remove the input: a constant says nothing',
    ),
    "a level constant": (
        PLAN,
        HEADER + "5,open,bad,1\n6,open,sound,1\n7,open,sound,1\n",
        ROWS + 'column "wheel": found "open" in every row; remove the input: a constant says nothing',
    ),
    # weights, groups, held-out rows
    "a negative weight": (
        WEIGHED,
        CSV + "15,open,bad,-1\n",
        ROWS + 'line 10, column "hours": found -1; write a weight of 0 or more, or remove the row',
    ),
    "a weight that is not finite": (
        WEIGHED,
        CSV + "15,open,bad,inf\n",
        ROWS + 'line 10, column "hours": found "inf", not a finite number; '
        "write a weight of 0 or more, or remove the row",
    ),
    "a weight that is text": (
        WEIGHED,
        CSV + "15,open,bad,two\n",
        ROWS + 'line 10, column "hours": found "two", not a number; write a weight of 0 or more, or remove the row',
    ),
    "no weight": (
        WEIGHED,
        CSV + "15,open,bad,\n",
        ROWS + 'line 10, column "hours": found an empty field; write a weight of 0 or more, or remove the row',
    ),
    "all weights zero": (
        WEIGHED,
        HEADER + "".join(line.rpartition(",")[0] + ",0\n" for line in LINES),
        ROWS + 'column "hours": found 0 in each of 8 rows; give some rows a weight',
    ),
    "weights too large to be summed": (
        WEIGHED,
        CSV + "15,open,bad,1e305\n",
        ROWS + 'column "hours": found 1e+305, too large to be summed; scale the weights down',
    ),
    "a class of weight 0": (
        WEIGHED,
        HEADER + "1,open,bad,0\n2,open,sound,1\n3,closed,sound,1\n",
        ROWS + 'column "state": found no row of the class "bad" among the 2 that miss no value and have a weight '
        "above 0; give rows of both classes",
    ),
    "no group": (
        PLAN.replace("held_out = 0", 'group = "pump"'),
        "flow,wheel,state,pump\n1,open,bad,p1\n2,closed,sound,\n",
        ROWS + 'line 3, column "pump": found an empty field; write the group, or remove the row',
    ),
    "one group to split": (
        PLAN.replace("held_out = 0", 'held_out = 0.25\ngroup = "pump"'),
        "flow,wheel,state,pump\n1,open,bad,p1\n2,closed,sound,p1\n",
        "[rows]: held_out: found no two groups to hold out one of; write held_out = 0, or give more groups",
    ),
    "a held-out column of other numbers": (
        PLAN.replace("held_out = 0", 'held_out = "test"'),
        "flow,wheel,state,test\n1,open,bad,0\n2,closed,sound,2\n",
        ROWS + 'line 3, column "test": found 2; write 1 to hold the row out, 0 to fit it',
    ),
    "all rows held out": (
        PLAN.replace("held_out = 0", 'held_out = "test"'),
        "flow,wheel,state,test\n1,open,bad,1\n2,closed,sound,1\n",
        ROWS + 'column "test": found 1 in each of 2 rows; write 0 for the rows to fit',
    ),
    "a group on both sides": (
        PLAN.replace("held_out = 0", 'held_out = "test"\ngroup = "pump"'),
        "flow,wheel,state,test,pump\n1,open,bad,1,p1\n2,closed,sound,0,p1\n3,closed,sound,0,p2\n",
        ROWS + 'column "test": found 0 and 1 in the group "p1"; hold out whole groups',
    ),
    # the plan
    "an input listed twice": (
        PLAN.replace(WHEEL, '"flow"'),
        CSV,
        PLAN_ + '[[input]] "flow": found twice; name each input once',
    ),
    "a name reserved in Python": (
        PLAN.replace('"pump"', '"lambda"'), CSV, PLAN_ + f'model: found "lambda", a keyword of Python; {NAME_RULE}',
    ),
    "a name reserved in C": (
        PLAN.replace('"flow"', '"signed"'), CSV,
        PLAN_ + f'[[input]] "signed": name: found "signed", a keyword of C and C++; {NAME_RULE}',
    ),
    "a name reserved in C++": (
        PLAN.replace('"pump"', '"template"'), CSV, PLAN_ + f'model: found "template", a keyword of C++; {NAME_RULE}',
    ),
    "names that collide in C": (
        PLAN.replace('"flow"', '"flow"\nunit = "m/s"').replace(WHEEL, '"flow_m"\nunit = "/s"'),
        CSV,
        PLAN_ + '[[input]] "flow" and "flow_m": found two inputs that C would call FLOW_M_PER_S; rename one of them',
    ),
    "a range upside down": (
        PLAN.replace("[0, 100]", "[100, 0]"), CSV,
        PLAN_ + '[[input]] "flow": range: found 100 before 0; put the lower limit first',
    ),
    "a range of no width": (
        PLAN.replace("[0, 100]", "[7, 7]"), CSV,
        PLAN_ + '[[input]] "flow": range: found 7 twice, a range without width; write two different limits',
    ),
    "an unknown key": (
        PLAN.replace("held_out", "heldout"), CSV,
        PLAN_ + "[rows]: heldout: found an unknown key; write held_out if that is meant",
    ),
    "text that is not TOML": (
        PLAN.replace("[prior]", "prior"), CSV,
        PLAN_ + "found text that is not TOML: Expected '=' after a key in a key/value pair (at line 14, column 6); "
        "correct it there",
    ),
    "a date for a number": (
        PLAN.replace("1.0", "2024-05-01"), CSV,
        PLAN_ + f"[prior]: sd: found the date 2024-05-01, not a number; {NO_NUMBER}",
    ),
    "nan for a number": (
        PLAN.replace("1.0", "nan"), CSV, PLAN_ + f"[prior]: sd: found nan, which is not finite; {NO_NUMBER}",
    ),
    "a number of 5,000 digits": (
        PLAN.replace("1.0", "9" * 5000), CSV,
        PLAN_ + "line 15: found a whole number of more than 4300 digits; write a number of ordinary size",
    ),
    "an exponent of thirty million": (
        PLAN.replace("1.0", "1e30000000"), CSV,
        PLAN_ + f"[prior]: sd: found 1E+30000000, whose exponent is beyond the 400 that a plan may use; {NO_NUMBER}",
    ),
    "a prior for no term": (
        PLAN + "[prior.term.fow]\nmean = 1", CSV,
        PLAN_ + '[prior.term]: "fow": found no term of this name; name one of the terms, "flow", "wheel=open"',
    ),
    # what the rows cannot answer under a flat prior
    "complete separation": (
        FLAT,
        HEADER + "1,open,sound,1\n2,closed,sound,1\n3,open,bad,1\n4,closed,bad,1\n",
        'rows: column "flow": separates the classes "sound" and "bad", so that no finite weight fits best; '
        "give it a prior with a finite sd, or add rows where the classes overlap",
    ),
    "quasi separation": (
        FLAT,
        HEADER + "1,open,sound,1\n2,closed,sound,1\n2,closed,bad,1\n3,open,bad,1\n",
        'rows: column "flow": separates the classes "sound" and "bad", so that no finite weight fits best; '
        "give it a prior with a finite sd, or add rows where the classes overlap",
    ),
    "collinear columns": (
        TWO_FLOWS.replace("[[input]]\nname='b'", "[[input]]\nname='b'\n[[input]]\nname='c'"),
        "a,b,c,state\n" + "".join(f"{a},{b},{a + b},{('sound', 'bad')[a % 2]}\n" for a, b in SCATTER),
        'rows: column "c": a sum of multiples of "a", "b", which a flat prior cannot tell apart; '
        "remove it, or give these columns a prior with a finite sd",
    ),
    "duplicated columns": (
        TWO_FLOWS,
        two((1, 1, "sound"), (2, 2, "bad"), (3, 3, "sound"), (4, 4, "bad")),
        'rows: column "b": repeats column "a", which a flat prior cannot tell apart; '
        "remove it, or give these columns a prior with a finite sd",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_each_mistake_ends_in_one_sentence_and_writes_nothing(
    case: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan, rows, sentence = CASES[case]
    places = {"rows": tmp_path / "runs.csv", "plan": tmp_path / "plan.toml", "folder": tmp_path}
    for name, place in places.items():
        sentence = sentence.replace("{" + name + "}", str(place))
    assert shipped(tmp_path, plan, rows, capsys) == sentence + "\n"


def test_folder_where_the_rows_should_be(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "runs.csv").mkdir()
    assert shipped(tmp_path, PLAN, None, capsys) == (
        f"{tmp_path / 'runs.csv'}: found a folder; give the path of the rows\n"
    )


def test_all_problems_of_the_rows_come_at_once(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    found = shipped(tmp_path, WEIGHED, CSV + "x,ajar,worse,-1\n101,open\n", capsys).splitlines()
    assert [line.removeprefix(f"{tmp_path / 'runs.csv'}: ").partition(": found")[0] for line in found] == [
        'line 10, column "flow"', 'line 10, column "wheel"', 'line 10, column "state"', 'line 10, column "hours"',
        "line 11",
    ]  # fmt: skip
