"""Weights, groups, single priors, prevalence, counts, origins, the table: what is read, and each mistake's sentence."""

from __future__ import annotations

import time
from fractions import Fraction
from pathlib import Path

import pytest
from test_plan import NEED_OWN_SD, plan_of, problems_of

from runtime_min.model import Counts
from trainer.plan import CountsPlan, Plan, PriorPlan, TablePlan, TermPrior
from trainer.request import request_of
from trainer.table import read_rows

WHOLE = """
model   = "pump_cavitation"
purpose = "Early warning of cavitation in irrigation pumps"
[rows]
file     = "runs.csv"
label    = "state"
classes  = ["sound", "cavitating"]
weight   = "hours"
group    = "pump"
held_out = "test"
seed     = 11
[[input]]
name    = "suction"
column  = "Suction pressure"
unit    = "kPa"
range   = [-95.0, 250.0]
missing = "typical"
counts  = { bits = 12, gain = 0.1, offset = -95.0 }
[[input]]
name    = "head"
range   = [101, 102]
outside = "clamp"
origin  = 101.325
[[input]]
name    = "impeller"
levels  = ["closed", "semi_open", "open"]
missing = "typical"
[prior]
sd = "cross-validation"
intercept_sd = inf
[prior.term.suction]
mean = -0.1
sd   = 0.5
per  = "unit"
[prior.term."impeller=open"]
sd = inf
[prior.term.head]
mean = 1
[decision]
cost_miss  = 25.0
prevalence = 0.02
no_call    = 0.1
[device]
arithmetic = "int16"
tolerance  = 0.01
compiler   = "arm-none-eabi-gcc -mcpu=cortex-m4 -Os"
part       = "cortex-m0"
[release]
write     = ["table", "c"]
real_rows = true
[release.table]
address    = "0x0800F000"
byte_order = "big"
"""


def test_every_key_of_a_whole_plan_is_read_as_it_is_written(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, WHOLE)
    assert (plan.rows.weight, plan.rows.group, plan.rows.held_out) == ("hours", "pump", "test")
    suction, head, impeller = plan.inputs
    assert suction.counts == CountsPlan(12, Fraction(1, 10), Fraction(-95), signed=False)
    assert (suction.origin, head.origin, head.counts) == (None, Fraction(101325, 1000), None)
    assert (impeller.levels[0], impeller.missing) == ("closed", "typical")
    assert plan.prior == PriorPlan(
        "cross-validation",
        None,
        None,
        (
            TermPrior("suction", Fraction(-1, 10), "fixed", Fraction(1, 2), "unit"),
            TermPrior("impeller=open", Fraction(0), "fixed", None, "spread"),
            TermPrior("head", Fraction(1), "shared", None, "spread"),
        ),
    )
    assert (plan.decision.prevalence, plan.decision.no_call) == (Fraction(1, 50), Fraction(1, 10))
    assert (plan.device.arithmetic, plan.device.part) == ("int16", "cortex-m0")
    assert plan.device.compiler == "arm-none-eabi-gcc -mcpu=cortex-m4 -Os"
    assert (plan.write, plan.real_rows, plan.table) == (("c", "table"), True, TablePlan(0x0800F000, "big"))


def test_request_carries_what_sealing_needs_exactly(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, WHOLE)
    (tmp_path / "runs.csv").write_text(
        "Suction pressure,head,impeller,state,hours,pump,test\n"
        "1,101.5,open,sound,1,a,0\n2,101.6,closed,cavitating,1,b,0\n3,101.7,closed,sound,1,c,1\n"
    )
    request = request_of(plan, read_rows(plan))
    suction, head, impeller = request.inputs
    assert suction.counts == Counts(12, "1/10", "-95", signed=False, chosen=False)
    assert (suction.origin, head.origin, impeller.low) == (None, "4053/40", None)
    assert request.decision.no_call == "1/10"
    assert (request.compiler, request.part, request.real_rows) == (plan.device.compiler, "cortex-m0", True)


def test_no_call_of_zero_is_no_request(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, WHOLE.replace("no_call    = 0.1", "no_call = 0.0"))
    assert plan.decision.no_call == 0


def test_flat_and_fixed_priors_are_told_from_cross_validation(tmp_path: Path) -> None:
    def prior(sd: str) -> PriorPlan:
        return plan_of(tmp_path, WHOLE.replace('"cross-validation"', sd)).prior

    assert (prior("inf").method, prior("inf").sd) == ("fixed", None)
    assert (prior("0.25").method, prior("0.25").sd) == ("fixed", Fraction(1, 4))


SUCTION = '[[input]] "suction": '
NEED_COUNTS = "write counts = { bits = 12, gain = 0.1, offset = -95.0 }"
NEED_SHARE = "write the event's share in the field, above 0 and below 1"
PARTS = 'write "cortex-m0", "cortex-m3", "cortex-m4f" or "atmega328p"'
TERMS = 'name one of the terms, "suction", "head", "impeller=semi_open", "impeller=open"'


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        ("bits = 12", "bits = 1", f"{SUCTION}counts: bits: found 1; write a whole number from 2 to 32"),
        ("bits = 12", "bits = 33", f"{SUCTION}counts: bits: found 33; write a whole number from 2 to 32"),
        ("bits = 12", "bits = 12.0", f"{SUCTION}counts: bits: found 12.0; write a whole number from 2 to 32"),
        ("bits = 12, ", "", f"{SUCTION}counts: bits: found nothing; {NEED_COUNTS}"),
        ("gain = 0.1", "gain = 0", f"{SUCTION}counts: gain: found 0; write the value of one count, other than 0"),
        (", gain = 0.1", "", f"{SUCTION}counts: gain: found nothing; write the value of one count, other than 0"),
        (
            "offset = -95.0",
            'offset = "low"',
            f'{SUCTION}counts: offset: found "low", not a number; write the value of the count 0',
        ),
        ("gain", "gian = 2, gain", f"{SUCTION}counts: gian: found an unknown key; write gain if that is meant"),
        ("gain", "signed = 1, gain", f"{SUCTION}counts: signed: found 1; write true or false"),
        ("{ bits = 12, gain = 0.1, offset = -95.0 }", "12", f"{SUCTION}counts: found 12; {NEED_COUNTS}"),
        (
            "gain = 0.1, offset = -95.0",
            "gain = 0.1, offset = 1000",
            f"{SUCTION}range: found -95 to 250, which holds no count: all counts span 1000 to 1409.5; "
            "widen the range, or correct bits, gain and offset",
        ),
        (
            "gain = 0.1, offset = -95.0",
            "gain = 500, offset = 0",
            f"{SUCTION}range: found -95 to 250, which holds one count: all counts span 0 to 2047500; "
            "widen the range, or correct bits, gain and offset",
        ),
        (
            "gain = 0.1",
            "gain = -0.1",
            f"{SUCTION}range: found -95 to 250, which holds one count: all counts span -504.5 to -95; "
            "widen the range, or correct bits, gain and offset",
        ),
        (
            "counts  =",
            "origin = 3\ncounts =",
            f"{SUCTION}origin: found beside counts; remove one of the two: counts have an offset of their own",
        ),
        (
            "origin  = 101.325",
            "origin = inf",
            '[[input]] "head": origin: found inf, which is not finite; write a number',
        ),
        (
            'levels  = ["closed"',
            'origin = 1\nlevels = ["closed"',
            '[[input]] "impeller": origin: found beside levels; '
            "remove one of the two: a level is a position in the list",
        ),
        (
            'levels  = ["closed"',
            'counts = { bits = 2, gain = 1 }\nlevels = ["closed"',
            '[[input]] "impeller": counts: found beside levels; '
            "remove one of the two: a level is a position in the list",
        ),
        # prior
        (
            "[prior.term.suction]",
            "[prior.term.suktion]",
            f'[prior.term]: "suktion": found no term of this name; {TERMS}',
        ),
        (
            '"impeller=open"',
            "impeller",
            '[prior.term]: "impeller": found no weight of its own; '
            'name one of its levels, "impeller=semi_open", "impeller=open"',
        ),
        (
            '"impeller=open"',
            '"impeller=closed"',
            '[prior.term]: "impeller=closed": found no weight of its own; '
            'remove it: "closed" is the reference level and has no weight',
        ),
        ("mean = -0.1", "mean = inf", '[prior.term]: "suction": mean: found inf, which is not finite; write a number'),
        ("sd   = 0.5", "sd = 0", f'[prior.term]: "suction": sd: found 0; {NEED_OWN_SD}'),
        (
            "sd   = 0.5\n",
            "",
            '[prior.term]: "suction": sd: found nothing beside per = "unit"; '
            "write the sd of the weight per unit: that of [prior] is per spread",
        ),
        ('per  = "unit"', 'per = "count"', '[prior.term]: "suction": per: found "count"; write "spread" or "unit"'),
        (
            "mean = 1",
            "mean = 1\nsd = 0.00001",
            '[prior.term]: "head": sd: found 1e-05, too narrow for weights kept in steps of 2^-30; '
            "write 0.0001 or more",
        ),
        (
            "mean = 1",
            "meann = 1",
            '[prior.term]: "head": meann: found an unknown key; write mean if that is meant',
        ),
        # decision, device, release
        ("prevalence = 0.02", "prevalence = 0", f"[decision]: prevalence: found 0; {NEED_SHARE}"),
        ("prevalence = 0.02", "prevalence = 1.0", f"[decision]: prevalence: found 1; {NEED_SHARE}"),
        (
            "no_call    = 0.1",
            "no_call = -0.1",
            "[decision]: no_call: found -0.1; write half the width of the undecided interval in log-odds, 0 or more",
        ),
        (
            '"arm-none-eabi-gcc -mcpu=cortex-m4 -Os"',
            '""',
            "[device]: compiler: found an empty text; write a text in quotes",
        ),
        ('"cortex-m0"', '"cortex-m7"', f'[device]: part: found "cortex-m7"; {PARTS}'),
        ("real_rows = true", 'real_rows = "yes"', '[release]: real_rows: found "yes"; write true or false'),
        (
            '["table", "c"]',
            '["c"]',
            '[release]: table: found without "table" in write; add it to write, or remove the table',
        ),
        (
            'write     = ["table", "c"]',
            "",
            '[release]: table: found without write; add write = ["python", "c", "onnx", "table"]',
        ),
        (
            '"0x0800F000"',
            '"8000h"',
            '[release.table]: address: found "8000h"; write an address below 2^32, like "0x8000"',
        ),
        (
            '"0x0800F000"',
            "4294967296",
            '[release.table]: address: found 4294967296; write an address below 2^32, like "0x8000"',
        ),
        ('"big"', '"middle"', '[release.table]: byte_order: found "middle"; write "little" or "big"'),
    ],
)
def test_each_mistake_is_named_in_one_sentence(tmp_path: Path, old: str, new: str, sentence: str) -> None:
    assert old in WHOLE
    assert problems_of(tmp_path, WHOLE.replace(old, new, 1)) == [sentence]


@pytest.mark.parametrize(
    ("counts", "limits", "fits"),
    [
        # 12 bits of 1/10 from -95: the counts 0 … 4095 are -95 … 314.5.
        ("{ bits = 12, gain = 0.1, offset = -95 }", "[-95, -94.9]", True),
        ("{ bits = 12, gain = 0.1, offset = -95 }", "[-95, -94.95]", False),
        ("{ bits = 12, gain = 0.1, offset = -95 }", "[314.4, 400]", True),
        ("{ bits = 12, gain = 0.1, offset = -95 }", "[314.45, 400]", False),
        # Signed, the counts are -2048 … 2047; a gain below 0 turns the span round: -195.7 … 203.8 less 99.
        ("{ bits = 12, gain = -0.1, offset = 0, signed = true }", "[-204.7, -204.6]", True),
        ("{ bits = 12, gain = -0.1, offset = 0, signed = true }", "[204.7, 204.8]", True),
        ("{ bits = 12, gain = -0.1, offset = 0, signed = true }", "[204.75, 300]", False),
    ],
)
def test_range_must_hold_two_counts(tmp_path: Path, counts: str, limits: str, fits: bool) -> None:
    text = WHOLE.replace("{ bits = 12, gain = 0.1, offset = -95.0 }", counts).replace("[-95.0, 250.0]", limits)
    if fits:
        assert plan_of(tmp_path, text).inputs[0].low is not None
    else:
        assert "holds" in problems_of(tmp_path, text)[0]


def test_range_far_from_zero_is_held_against_what_the_device_delivers(tmp_path: Path) -> None:
    # 1e9 and 1e9 + 1 are one binary32 number; less the origin they are 0 and 1.
    text = WHOLE.replace('"int16"', '"binary32"').replace("[101, 102]", "[1e9, 1000000001]")
    assert plan_of(tmp_path, text.replace("101.325", "1e9")).inputs[1].origin == 10**9
    assert problems_of(tmp_path, text.replace("origin  = 101.325", "")) == [
        '[[input]] "head": range: found 1000000000 and 1000000001, one and the same number in binary32; '
        "write limits farther apart"
    ]


@pytest.mark.parametrize("text", ["*/", '"""', "a\nb", "\a", "??/", "{{ 1 }}", "‮", "\\"])
def test_text_is_taken_whatever_its_characters(tmp_path: Path, text: str) -> None:
    quoted = '"' + "".join(f"\\u{ord(character):04x}" for character in text) + '"'
    plan: Plan = plan_of(
        tmp_path,
        f"""model = "m"
        purpose = {quoted}
        rows = {{ file = "a.csv", label = "y", classes = [{quoted}, "b"], group = {quoted} }}
        input = [{{ name = "x", column = {quoted}, unit = {quoted} }}, {{ name = "z", levels = ["a", {quoted}] }}]""",
    )
    assert plan.purpose == plan.rows.group == plan.inputs[0].unit == plan.inputs[0].column == text
    assert plan.inputs[1].levels[1] == (plan.rows.classes or ())[0] == text


def test_plan_of_ten_thousands_of_inputs_is_read_in_time(tmp_path: Path) -> None:
    # A plan may have a million bytes. Comparing every pair would take minutes; measured 2 s.
    inputs = "".join(f"[[input]]\nname = 'x{at}'\n" for at in range(20_000))
    levels = ",".join(f"'{at}'" for at in range(20_000))
    terms = "".join(f"[prior.term.y{at}]\n" for at in range(2_000))
    twice = f"[[input]]\nname = 'x7'\nlevels = [{levels}]\n"
    text = f"model = 'm'\nrows = {{ file = 'a.csv', label = 'y' }}\n{inputs}{twice}{terms}"
    start = time.monotonic()
    found = problems_of(tmp_path, text)
    assert time.monotonic() - start <= 30.0
    assert found[0] == '[[input]] "x7": found twice; name each input once'
    assert len(found) == 2_001
