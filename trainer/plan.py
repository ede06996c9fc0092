"""TOML -> frozen data classes, with every mistake of a plan reported at once.

Decimals are exact: `gain = 0.1` means one tenth. Keys that the design has and the tool has not yet are refused with a
sentence that says so, never ignored. `plan_file` opens the plan, `plan_rows`, `plan_inputs` and `plan_prior` read its
larger tables, this module the others; `table` reads the rows.
"""

from __future__ import annotations

import hashlib
import re
from fractions import Fraction
from pathlib import Path

from runtime_min.errors import PlanError, Problem
from runtime_min.names import NAME_RULE, model_name_problem
from trainer.plan_checks import Section, decimal_text, shown
from trainer.plan_classes import (
    CountsPlan,
    DecisionPlan,
    DevicePlan,
    InputPlan,
    Plan,
    PriorPlan,
    RowsPlan,
    TablePlan,
    TermPrior,
)
from trainer.plan_file import parsed, plan_bytes
from trainer.plan_inputs import read_inputs, refuse_collisions
from trainer.plan_prior import read_prior, term_problems
from trainer.plan_rows import read_rows_table

__all__ = [
    "ARTEFACTS",
    "CountsPlan",
    "DecisionPlan",
    "DevicePlan",
    "InputPlan",
    "Plan",
    "PriorPlan",
    "RowsPlan",
    "TablePlan",
    "TermPrior",
    "read_plan",
]

ARTEFACTS = ("python", "c", "onnx", "table")
_WRITTEN_BY_DEFAULT = ("python", "c", "onnx")

PARTS = ("cortex-m0", "cortex-m3", "cortex-m4f", "atmega328p")
_ADDRESS_BITS = 32


def read_plan(path: Path) -> Plan:
    """The plan in the TOML file `path`. Raises PlanError with every problem."""
    content = plan_bytes(path)
    problems: list[Problem] = []
    top = Section(str(path), parsed(path, content), problems)
    top.refuse_other_keys(
        ("model", "purpose", "rows", "input", "prior", "decision", "device", "release"),
        {"term": ("functions of inputs are", "add them to the rows as columns and name these as inputs")},
    )
    model = top.text("model", None, 'name the model, for example model = "pump"')
    if model and (problem := model_name_problem(model)):
        top.report("model", problem, NAME_RULE)
    rows = read_rows_table(top.section("rows"), path.parent)
    device = _device(top.section("device"))
    inputs = read_inputs(top, device.arithmetic)
    refuse_collisions(top, inputs, rows)
    prior = read_prior(top.section("prior"))
    if inputs:
        problems += term_problems(str(path), prior, inputs)
    write, real_rows, table = _release(top.section("release"))
    plan = Plan(
        path=path,
        sha256=hashlib.sha256(content).hexdigest(),
        model=model,
        purpose=top.text("purpose", ""),
        rows=rows,
        inputs=inputs,
        prior=prior,
        decision=_decision(top.section("decision")),
        device=device,
        write=write,
        real_rows=real_rows,
        table=table,
    )
    if problems:
        raise PlanError(problems)
    return plan


def _decision(section: Section) -> DecisionPlan:
    section.refuse_other_keys(("cost_false_alarm", "cost_miss", "prevalence", "no_call"))
    prevalence = None
    if "prevalence" in section.table:
        todo = "write the event's share in the field, above 0 and below 1"
        prevalence = section.number("prevalence", Fraction(1, 2), todo)
        if not 0 < prevalence < 1:
            section.report("prevalence", f"found {decimal_text(prevalence)}", todo)
    todo = "write half the width of the undecided interval in log-odds, 0 or more"
    no_call = section.number("no_call", Fraction(0), todo)
    if not no_call >= 0:
        section.report("no_call", f"found {decimal_text(no_call)}", todo)
    return DecisionPlan(
        cost_false_alarm=section.positive("cost_false_alarm", Fraction(1)),
        cost_miss=section.positive("cost_miss", Fraction(1)),
        prevalence=prevalence,
        no_call=no_call,
    )


def _device(section: Section) -> DevicePlan:
    section.refuse_other_keys(("arithmetic", "tolerance", "compiler", "part"))
    return DevicePlan(
        arithmetic=section.choice("arithmetic", "binary32", ("binary32", "binary64", "int16", "int32")),
        tolerance=section.positive("tolerance", Fraction(1)) if "tolerance" in section.table else None,
        compiler=section.text("compiler", None) if "compiler" in section.table else None,
        part=section.choice("part", PARTS[0], PARTS) if "part" in section.table else None,
    )


def _release(section: Section) -> tuple[tuple[str, ...], bool, TablePlan]:
    """(the artefacts to write, whether real rows may be in them, where the table lies)."""
    section.refuse_other_keys(("write", "real_rows", "table"))
    write = _write(section)
    real_rows = section.table.get("real_rows", False)
    if not isinstance(real_rows, bool):
        section.report("real_rows", f"found {shown(real_rows)}", "write true or false")
        real_rows = False
    table = section.section("table")
    table.refuse_other_keys(("address", "byte_order"))
    if "table" in section.table and "table" not in write and "write" in section.table:
        section.report("table", 'found without "table" in write', "add it to write, or remove the table")
    elif "table" in section.table and "write" not in section.table:
        section.report("table", "found without write", 'add write = ["python", "c", "onnx", "table"]')
    return write, real_rows, TablePlan(_address(table), table.choice("byte_order", "little", ("little", "big")))


def _write(section: Section) -> tuple[str, ...]:
    if "write" not in section.table:
        return _WRITTEN_BY_DEFAULT
    todo = f"list some of {', '.join(ARTEFACTS)}"
    asked = section.texts("write", todo)
    for name in asked:
        if name not in ARTEFACTS:
            section.report("write", f"found {shown(name)}", todo)
    if section.table["write"] == []:
        section.report("write", "found an empty list", todo)
    return tuple(name for name in ARTEFACTS if name in asked)


def _address(section: Section) -> int:
    value = section.table.get("address", 0)
    if isinstance(value, str) and re.fullmatch("0[xX][0-9a-fA-F]{1,16}", value):
        value = int(value, 16)
    if isinstance(value, int) and not isinstance(value, bool) and 0 <= value < 2**_ADDRESS_BITS:
        return value
    section.report("address", f"found {shown(section.table['address'])}", 'write an address below 2^32, like "0x8000"')
    return 0
