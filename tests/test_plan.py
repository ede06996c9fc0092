"""Plans: what is read, and the whole sentence for each mistake.

Expected values are the plan's own decimals; the exponent and digit cases are constructions.
"""

from __future__ import annotations

import hashlib
import time
from fractions import Fraction
from pathlib import Path

import pytest

from runtime_min.errors import PlanError
from trainer.plan import InputPlan, Plan, PriorPlan, read_plan

EXAMPLE = Path(__file__).parent.parent / "examples" / "pump_alarm" / "plan.toml"

GOOD = """
model = "pump"
[rows]
file = "runs.csv"
label = "state"
[[input]]
name = "flow"
unit = "m3/h"
range = [0, 120.5]
[prior]
sd = 1.0
"""


def plan_of(folder: Path, text: str | bytes) -> Plan:
    path = folder / "plan.toml"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return read_plan(path)


def problems_of(folder: Path, text: str | bytes) -> list[str]:
    """Every problem's sentence, without the path of the plan."""
    with pytest.raises(PlanError) as caught:
        plan_of(folder, text)
    prefix = f"{folder / 'plan.toml'}: "
    assert all(str(problem).startswith(prefix) for problem in caught.value.problems)
    return [str(problem).removeprefix(prefix) for problem in caught.value.problems]


def test_example_plan_is_read_as_it_is_written() -> None:
    plan = read_plan(EXAMPLE)
    assert plan.model == "pump_cavitation"
    assert plan.sha256 == hashlib.sha256(EXAMPLE.read_bytes()).hexdigest()
    assert (plan.rows.file, plan.rows.label) == (EXAMPLE.parent / "runs.csv", "State")
    assert plan.rows.classes == ("sound", "cavitating")
    assert (plan.rows.held_out, plan.rows.seed) == (Fraction(1, 4), 11)
    assert [entry.name for entry in plan.inputs] == ["suction", "flow", "current", "vibration", "water", "impeller"]
    assert plan.inputs[3] == InputPlan(
        "vibration", "Vibration", "mm/s", Fraction(0), Fraction(25), "clamp", "fault", (), assumed=False
    )
    assert plan.inputs[5].levels == ("closed", "semi_open", "open")
    assert (plan.prior.sd, plan.prior.intercept_sd) == (Fraction(1), None)
    assert (plan.decision.cost_false_alarm, plan.decision.cost_miss) == (Fraction(1), Fraction(10))
    assert (plan.device.arithmetic, plan.device.tolerance) == ("binary32", Fraction(1, 1000))
    assert plan.write == ("python", "c", "onnx")


def test_least_plan_has_the_documented_defaults(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, 'model = "m"\nrows = { file = "a.csv", label = "y" }\n')
    assert plan.inputs == ()
    assert (plan.rows.classes, plan.rows.held_out, plan.rows.seed) == (None, Fraction(1, 4), 0)
    assert plan.prior == PriorPlan("cross-validation", None, None, ())
    assert plan.purpose == ""
    assert (plan.decision.cost_false_alarm, plan.decision.cost_miss) == (1, 1)
    assert (plan.device.arithmetic, plan.device.tolerance) == ("binary32", None)
    assert plan.write == ("python", "c", "onnx")


def test_decimals_are_exact(tmp_path: Path) -> None:
    # 40 digits: more than Decimal's arithmetic keeps.
    text = GOOD.replace("120.5", "0.1234567890123456789012345678901234567891")
    assert plan_of(tmp_path, text).inputs[0].high == Fraction(1234567890123456789012345678901234567891, 10**40)
    assert plan_of(tmp_path, GOOD.replace("120.5", "0.1")).inputs[0].high == Fraction(1, 10)


def test_byte_order_mark_and_crlf_are_fine(tmp_path: Path) -> None:
    text = b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode()
    assert plan_of(tmp_path, text).model == "pump"


def test_held_out_may_be_none_and_write_keeps_its_own_order(tmp_path: Path) -> None:
    plan = plan_of(
        tmp_path, GOOD.replace('label = "state"', 'label = "state"\nheld_out = 0') + '[release]\nwrite = ["onnx", "c"]'
    )
    assert plan.rows.held_out == 0
    assert plan.write == ("c", "onnx")


NAME_RULE = "write lower-case letters, digits and single underscores, from a letter on, at most 63"
NEED_CLASSES = "list two classes, the event last"
NEED_SHARE = "write a share from 0 to below 1, or the name of a column of 0 and 1"
NEED_SD = 'write "cross-validation", a number above 0, or inf for a flat prior'
NEED_OWN_SD = "write a number above 0, or inf for a flat prior"
NEED_FILE = "name a .csv, a .npz or a .parquet"
FLOW = '[[input]] "flow": '
INPUT_KEYS = "the keys here are name, column, unit, range, outside, missing, levels, counts, origin"


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        # names
        ('"pump"', '"Pump"', f'model: found "Pump", which is not an identifier of lower-case letters; {NAME_RULE}'),
        ('"pump"', '"new"', f'model: found "new", a keyword of C++; {NAME_RULE}'),
        ('"pump"', '"math"', f'model: found "math", a module that the Python artefact imports; {NAME_RULE}'),
        (
            '"pump"',
            '"vectors"',
            f'model: found "vectors", whose header would take the place of vectors.h; {NAME_RULE}',
        ),
        ('"pump"', '"a__b"', f'model: found "a__b", whose double underscore is reserved in C++; {NAME_RULE}'),
        ('"pump"', "3", 'model: found 3, not a text; name the model, for example model = "pump"'),
        ('model = "pump"', "", 'model: found nothing; name the model, for example model = "pump"'),
        (
            'name = "flow"',
            'name = "while"',
            f'[[input]] "while": name: found "while", a keyword of Python and C and C++; {NAME_RULE}',
        ),
        ('name = "flow"', "", "[[input]] 1: name: found nothing; name the input"),
        # keys
        ("unit =", "untt =", f"{FLOW}untt: found an unknown key; write unit if that is meant"),
        ("unit =", '"a\\nb" = 1\nunit =', f'{FLOW}"a\\nb": found an unknown key; {INPUT_KEYS}'),
        ('name = "flow"', 'name = "flow"\ncolumn = ""', f"{FLOW}column: found an empty text; write a text in quotes"),
        (
            "sd = 1.0",
            "sd = 1.0\nqqq = 1",
            "[prior]: qqq: found an unknown key; the keys here are sd, intercept_sd, term",
        ),
        ("[prior]", "[piror]\nsd = 2\n[prior]", "piror: found an unknown key; write prior if that is meant"),
        # rows
        ('file = "runs.csv"', "", f"[rows]: file: found nothing; {NEED_FILE}"),
        ('"runs.csv"', '"runs.xls"', f'[rows]: file: found "runs.xls"; {NEED_FILE}'),
        ('"runs.csv"', '"runs*"', f'[rows]: file: found "runs*"; {NEED_FILE}'),
        ('"state"', '"state"\nweight = ""', "[rows]: weight: found an empty text; name the column of row weights"),
        ('"state"', '"state"\nweight = 2', "[rows]: weight: found 2, not a text; name the column of row weights"),
        (
            '"state"',
            '"state"\ngroup = "state"',
            '[rows]: group: found "state", which is the label; name another column',
        ),
        (
            '"state"',
            '"state"\nweight = "h"\nheld_out = "h"',
            '[rows]: held_out: found "h", which is the weight; name another column',
        ),
        (
            '"state"',
            '"state"\nweight = "flow"',
            f'{FLOW}column: found "flow", which is the weight; name a measured column',
        ),
        (
            '"state"',
            '"state"\nheld_out = "flow"',
            f'{FLOW}column: found "flow", which is the column of held-out rows; name a measured column',
        ),
        ('label = "state"', "", "[rows]: label: found nothing; name the column that holds the class"),
        ('"state"', '"flow"', f'{FLOW}column: found "flow", which is the label; name a measured column'),
        ('"state"', '"state"\nclasses = ["a"]', f"[rows]: classes: found 1; {NEED_CLASSES}"),
        ('"state"', '"state"\nclasses = "a"', f'[rows]: classes: found "a", not a list; {NEED_CLASSES}'),
        (
            '"state"',
            '"state"\nclasses = ["a", "b", "c"]',
            f"[rows]: classes: found 3: more than two are not there yet; {NEED_CLASSES}",
        ),
        ('"state"', '"state"\nclasses = ["a", "a"]', '[rows]: classes: found "a" twice; name it once'),
        (
            '"state"',
            '"state"\nclasses = [0, "1"]',
            "[rows]: classes: found 0, not a text; write it in quotes, as it stands in the file",
        ),
        (
            '"state"',
            '"state"\nclasses = ["", "1"]',
            "[rows]: classes: found an empty text; name it: an empty field is a missing value",
        ),
        ('"state"', '"state"\nheld_out = 1', f"[rows]: held_out: found 1; {NEED_SHARE}"),
        ('"state"', '"state"\nheld_out = -0.5', f"[rows]: held_out: found -0.5; {NEED_SHARE}"),
        ('"state"', '"state"\nheld_out = nan', f"[rows]: held_out: found nan, which is not finite; {NEED_SHARE}"),
        ('"state"', '"state"\nheld_out = ""', f"[rows]: held_out: found an empty text; {NEED_SHARE}"),
        ('"state"', '"state"\nseed = -1', "[rows]: seed: found -1; write a whole number from 0 to 9007199254740991"),
        (
            '"state"',
            '"state"\nseed = true',
            "[rows]: seed: found true; write a whole number from 0 to 9007199254740991",
        ),
        ('"state"', '"state"\nseed = 1.0', "[rows]: seed: found 1.0; write a whole number from 0 to 9007199254740991"),
        # ranges
        ("[0, 120.5]", "[250, -95.0]", f"{FLOW}range: found 250 before -95; put the lower limit first"),
        ("[0, 120.5]", "[5, 5.0]", f"{FLOW}range: found 5 twice, a range without width; write two different limits"),
        ("[0, 120.5]", "[1]", f"{FLOW}range: found a list of 1; write [lowest, highest]"),
        ("[0, 120.5]", '[0, "1"]', f'{FLOW}range: found "1", not a number; write [lowest, highest]'),
        ("[0, 120.5]", "[0, true]", f"{FLOW}range: found true, not a number; write [lowest, highest]"),
        ("[0, 120.5]", "[0, inf]", f"{FLOW}range: found inf, which is not finite; write [lowest, highest]"),
        (
            "[0, 120.5]",
            "[0, 2024-05-01]",
            f"{FLOW}range: found the date 2024-05-01, not a number; write [lowest, highest]",
        ),
        (
            "[0, 120.5]",
            "[0, 1e39]",
            f"{FLOW}range: found 1e+39, too large for binary32; write a limit that the device can hold",
        ),
        (
            "[0, 120.5]",
            "[16777216, 16777217]",
            f"{FLOW}range: found 16777216 and 16777217, one and the same number in binary32; "
            "write limits farther apart",
        ),
        # inputs
        ('unit = "m3/h"', 'outside = "warp"', f'{FLOW}outside: found "warp"; write "fault" or "clamp"'),
        ('unit = "m3/h"', 'missing = "mean"', f'{FLOW}missing: found "mean"; write "fault" or "typical"'),
        ('"m3/h"', f'"{"m" * 41}"', f"{FLOW}unit: found 41 characters; write a unit of at most 40"),
        (
            'unit = "m3/h"',
            'outside = "\\u0007\\u202e"',
            f'{FLOW}outside: found "\\u0007\\u202e"; write "fault" or "clamp"',
        ),
        (
            "range = [0, 120.5]",
            'levels = ["a", "b"]',
            f"{FLOW}unit: found beside levels; remove one of the two: a level is a position in the list",
        ),
        (
            'unit = "m3/h"',
            'levels = ["a", "b"]',
            f"{FLOW}range: found beside levels; remove one of the two: a level is a position in the list",
        ),
        ("[[input]]", "[input]", "input: found one table; write [[input]], in two brackets, before each input"),
        # prior, decision, device, release
        (
            "sd = 1.0",
            'sd = "evidence"',
            f'[prior]: sd: found "evidence", which is not there yet; {NEED_SD}',
        ),
        ("sd = 1.0", 'sd = "wide"', f'[prior]: sd: found "wide", not a number; {NEED_SD}'),
        ("sd = 1.0", "sd = 0.0", f"[prior]: sd: found 0; {NEED_SD}"),
        ("sd = 1.0", "sd = -inf", f"[prior]: sd: found -inf, which is not finite; {NEED_SD}"),
        ("sd = 1.0", "sd = nan", f"[prior]: sd: found nan, which is not finite; {NEED_SD}"),
        (
            "sd = 1.0",
            "sd = 9e-5",
            "[prior]: sd: found 9e-05, too narrow for weights kept in steps of 2^-30; write 0.0001 or more",
        ),
        ("sd = 1.0", "sd = 1.0\nintercept_sd = 0", f"[prior]: intercept_sd: found 0; {NEED_OWN_SD}"),
        ("sd = 1.0", "sd = 1.0\n[decision]\ncost_miss = 0", "[decision]: cost_miss: found 0; write a number above 0"),
        ("sd = 1.0", "sd = 1.0\n[device]\ntolerance = -1", "[device]: tolerance: found -1; write a number above 0"),
        (
            "sd = 1.0",
            'sd = 1.0\n[device]\narithmetic = "int8"',
            '[device]: arithmetic: found "int8"; write "binary32", "binary64", "int16" or "int32"',
        ),
        (
            "sd = 1.0",
            'sd = 1.0\n[release]\nwrite = ["rust"]',
            '[release]: write: found "rust"; list some of python, c, onnx, table',
        ),
        (
            "sd = 1.0",
            "sd = 1.0\n[release]\nwrite = []",
            "[release]: write: found an empty list; list some of python, c, onnx, table",
        ),
    ],
)
def test_each_mistake_is_named_in_one_sentence(tmp_path: Path, old: str, new: str, sentence: str) -> None:
    assert old in GOOD
    assert problems_of(tmp_path, GOOD.replace(old, new, 1)) == [sentence]


@pytest.mark.parametrize(
    ("table", "sentence"),
    [
        (
            "[[term]]\nname = 'x'",
            "term: functions of inputs are not there yet; add them to the rows as columns and name these as inputs",
        ),
        (
            "[prior.term.a]\nsign = 'negative'",
            '[prior.term]: "a": sign: signs of weights are not there yet; '
            "remove the key: mean and sd can keep a weight on one side",
        ),
        (
            "[prior]\nsd = 'evidence'",
            f'[prior]: sd: found "evidence", which is not there yet; {NEED_SD}',
        ),
        (
            "[rows]\nclasses = ['a', 'b', 'c']",
            f"[rows]: classes: found 3: more than two are not there yet; {NEED_CLASSES}",
        ),
    ],
)
def test_what_is_not_there_yet_is_refused_and_never_ignored(tmp_path: Path, table: str, sentence: str) -> None:
    assert sentence in problems_of(tmp_path, table)


def test_number_where_a_table_belongs_is_refused(tmp_path: Path) -> None:
    assert problems_of(tmp_path, "prior = 3\n" + GOOD.partition("[prior]")[0]) == [
        "prior: found 3, not a table; write it as a table, with keys and values",
    ]


def test_all_mistakes_of_a_plan_come_at_once(tmp_path: Path) -> None:
    text = GOOD.replace('"pump"', '"Pump"').replace("unit", "unti").replace("120.5", "-1").replace("sd = 1.0", "sd = 0")
    assert [sentence.partition(": found")[0] for sentence in problems_of(tmp_path, text)] == [
        "model", '[[input]] "flow": unti', '[[input]] "flow": range', "[prior]: sd",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("first", "second", "sentences"),
    [
        ("name = 'flow'", "name = 'flow'", ['[[input]] "flow": found twice; name each input once']),
        (
            "name = 'flow'\ncolumn = 'Q'",
            "name = 'q'\ncolumn = 'Q'",
            ['[[input]] "flow" and "q": found the column "Q" in both; give each input a column of its own'],
        ),
        (
            "name = 'flow_m3'\nunit = '/h'",
            "name = 'flow'\nunit = 'm³/h'",
            ['[[input]] "flow_m3" and "flow": found two inputs that C would call FLOW_M3_PER_H; rename one of them'],
        ),
    ],
)
def test_inputs_that_collide_are_named_in_pairs(tmp_path: Path, first: str, second: str, sentences: list[str]) -> None:
    text = GOOD.partition("[[input]]")[0] + f"[[input]]\n{first}\n[[input]]\n{second}\n[prior]\nsd = 1"
    assert [one.replace("]: found", ": found") for one in problems_of(tmp_path, text)] == sentences


@pytest.mark.parametrize(
    ("number", "sentence"),
    [
        (
            "1e30000000",
            "[prior]: sd: found 1E+30000000, whose exponent is beyond the 400 that a plan may use; " + NEED_SD,
        ),
        (
            "1e-30000000",
            "[prior]: sd: found 1E-30000000, whose exponent is beyond the 400 that a plan may use; " + NEED_SD,
        ),
        (
            "1e99999999999999999999",
            "[prior]: sd: found 1e99999999999999999999, whose exponent is beyond the 400 that a plan may use; "
            "" + NEED_SD,
        ),
        ("1" * 5000, "line 11: found a whole number of more than 4300 digits; write a number of ordinary size"),
        ("0." + "1" * 5000, "[prior]: sd: found a number of 5000 digits, more than 400; " + NEED_SD),
        ("0x" + "f" * 100_000, "[prior]: sd: found a number of 120412 digits, more than 400; " + NEED_SD),
    ],
)
def test_monstrous_numbers_are_refused_at_once(tmp_path: Path, number: str, sentence: str) -> None:
    start = time.monotonic()
    assert problems_of(tmp_path, GOOD.replace("sd = 1.0", f"sd = {number}")) == [sentence]
    assert time.monotonic() - start <= 2.0


def test_text_that_is_not_toml_is_placed(tmp_path: Path) -> None:
    (sentence,) = problems_of(tmp_path, 'model = "pump"\nwhat is this\n')
    assert sentence.startswith("found text that is not TOML: ")
    assert sentence.endswith("(at line 2, column 6); correct it there")


def test_text_that_is_not_utf8_is_placed(tmp_path: Path) -> None:
    assert problems_of(tmp_path, b'model = "pump"\npurpose = "\xe9"\n') == [
        "line 2: found text that is not UTF-8; save it as UTF-8"
    ]


def test_deep_brackets_and_huge_files_end_in_a_sentence(tmp_path: Path) -> None:
    (sentence,) = problems_of(tmp_path, "a = " + "[" * 100_000)
    assert sentence.endswith(("; write a plan of ordinary shape", "; correct it there"))
    assert problems_of(tmp_path, "#" * 1_000_001) == [
        "found more than 1000000 bytes; give a plan, and name the rows in it"
    ]


def test_no_file_and_a_folder_are_told_apart(tmp_path: Path) -> None:
    with pytest.raises(PlanError, match=r"none\.toml: found no such file; give the path of a plan$"):
        read_plan(tmp_path / "none.toml")
    with pytest.raises(PlanError, match=r"found a folder; give the path of a plan$"):
        read_plan(tmp_path)
