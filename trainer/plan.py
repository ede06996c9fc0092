"""TOML -> frozen data classes, with every mistake of a plan reported at once.

Decimals are exact: `gain = 0.1` means one tenth. Keys that the design has and the tool has not yet are refused with a
sentence that says so, never ignored. This module reads tables; `plan_file` opens the plan, `table` the rows.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from itertools import combinations
from pathlib import Path

from runtime_min.errors import PlanError, Problem
from runtime_min.names import NAME_RULE, c_input_name, name_problem
from trainer.plan_checks import Section, decimal_text, exact, range_problem, shown
from trainer.plan_file import parsed, plan_bytes

LARGEST_SEED = 2**53 - 1
"""A seed goes into canonical JSON, which has no larger whole numbers."""

LEAST_SD = Fraction(1, 10_000)
"""Weights are kept in steps of 2^-30; a narrower prior would be lost in them."""

ARTEFACTS = ("python", "c", "onnx")


@dataclass(frozen=True)
class InputPlan:
    """One input. `levels` is empty for a number; `low` and `high` are None where the rows are to give them, and for
    levels; `assumed` says that the rows gave them."""

    name: str
    column: str
    unit: str
    low: Fraction | None
    high: Fraction | None
    outside: str
    missing: str
    levels: tuple[str, ...]
    assumed: bool


@dataclass(frozen=True)
class RowsPlan:
    """`classes` is None where the rows are to give them; `held_out` is a share, 0 included."""

    file: Path
    label: str
    classes: tuple[str, ...] | None
    held_out: Fraction
    seed: int


@dataclass(frozen=True)
class PriorPlan:
    """Sds of the standardised weights and of the intercept; None is flat."""

    sd: Fraction | None
    intercept_sd: Fraction | None


@dataclass(frozen=True)
class DecisionPlan:
    cost_false_alarm: Fraction
    cost_miss: Fraction


@dataclass(frozen=True)
class DevicePlan:
    """`tolerance`: the largest abs(log-odds error) allowed; None is no limit."""

    arithmetic: str
    tolerance: Fraction | None


@dataclass(frozen=True)
class Plan:
    """`inputs` is empty where they are to be read from the rows; `sha256` is of the file's bytes."""

    path: Path
    sha256: str
    model: str
    purpose: str
    rows: RowsPlan
    inputs: tuple[InputPlan, ...]
    prior: PriorPlan
    decision: DecisionPlan
    device: DevicePlan
    write: tuple[str, ...]


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
    if model and (problem := name_problem(model)):
        top.report("model", problem, NAME_RULE)
    rows = _rows(top.section("rows"), path.parent)
    device = _device(top.section("device"))
    inputs = tuple(_input(section, device.arithmetic) for section in _input_sections(top))
    _refuse_collisions(top, inputs, rows.label)
    plan = Plan(
        path=path,
        sha256=hashlib.sha256(content).hexdigest(),
        model=model,
        purpose=top.text("purpose", ""),
        rows=rows,
        inputs=inputs,
        prior=_prior(top.section("prior")),
        decision=_decision(top.section("decision")),
        device=device,
        write=_write(top.section("release")),
    )
    if problems:
        raise PlanError(problems)
    return plan


def _rows(section: Section, folder: Path) -> RowsPlan:
    section.refuse_other_keys(
        ("file", "label", "classes", "held_out", "seed"),
        {
            "weight": ("row weights are", "remove the key: every row counts once"),
            "group": ("splits by group are", "remove the key: rows are held out one by one"),
        },
    )
    file = section.text("file", None, "name the file of rows, a .csv")
    if "*" in file or "?" in file:
        section.report("file", f"found {shown(file)}: several files are not there yet", "put the rows into one .csv")
    elif file.lower().endswith((".npz", ".parquet")):
        section.report("file", f"found {shown(file)}: .npz and .parquet are not there yet", "write the rows as .csv")
    elif file and not file.lower().endswith(".csv"):
        section.report("file", f"found {shown(file)}", "name a .csv")
    return RowsPlan(
        file=folder / file,
        label=section.text("label", None, "name the column that holds the class"),
        classes=_classes(section),
        held_out=_held_out(section),
        seed=_seed(section),
    )


def _classes(section: Section) -> tuple[str, ...] | None:
    if "classes" not in section.table:
        return None
    todo = "list two classes, the event last"
    classes = section.texts("classes", todo)
    value = section.table["classes"]
    if isinstance(value, list) and len(value) > 2:
        section.report("classes", f"found {len(value)}: more than two are not there yet", todo)
    elif isinstance(value, list) and len(value) < 2:
        section.report("classes", f"found {len(value)}", todo)
    return classes


def _held_out(section: Section) -> Fraction:
    default = Fraction(1, 4)
    todo = "write a share of the rows from 0 to below 1"
    if isinstance(section.table.get("held_out"), str):
        found = f"found {shown(section.table['held_out'])}: a column that says which rows is not there yet"
        section.report("held_out", found, todo)
        return default
    share = section.number("held_out", default, todo)
    if not 0 <= share < 1:
        section.report("held_out", f"found {decimal_text(share)}", todo)
    return share


def _seed(section: Section) -> int:
    value = section.table.get("seed", 0)
    if isinstance(value, int) and not isinstance(value, bool) and 0 <= value <= LARGEST_SEED:
        return value
    section.report("seed", f"found {shown(value)}", f"write a whole number from 0 to {LARGEST_SEED}")
    return 0


def _input_sections(top: Section) -> list[Section]:
    tables = top.table.get("input", [])
    if not isinstance(tables, list) or not all(isinstance(table, dict) for table in tables):
        found = "one table" if isinstance(tables, dict) else shown(tables)
        top.report("input", f"found {found}", "write [[input]], in two brackets, before each input")
        return []
    sections = []
    for position, table in enumerate(tables, start=1):
        name = table.get("name")
        mark = shown(name) if isinstance(name, str) else str(position)
        sections.append(Section(f"{top.where}: [[input]] {mark}", table, top.problems))
    return sections


def _input(section: Section, arithmetic: str) -> InputPlan:
    section.refuse_other_keys(
        ("name", "column", "unit", "range", "outside", "missing", "levels"),
        {
            "counts": ("inputs in counts are", "remove the key: the device passes the value in its unit"),
            "origin": ("origins are", "remove the key: the device passes the value itself"),
        },
    )
    name = section.text("name", None, "name the input")
    if name and (problem := name_problem(name)):
        section.report("name", problem, NAME_RULE)
    unit = section.text("unit", "")
    if len(unit) > 40 or "\n" in unit:
        section.report("unit", f"found {shown(unit)}", "write a unit in one line of at most 40 characters")
    column = section.text("column", name) if "column" in section.table or name else name
    levels: tuple[str, ...] = ()
    low = high = None
    outside = section.choice("outside", "fault", ("fault", "clamp"))
    if "levels" in section.table:
        levels = _levels(section, outside)
    elif "range" in section.table:
        low, high = _range(section, arithmetic)
    return InputPlan(
        name=name,
        column=column,
        unit=unit,
        low=low,
        high=high,
        outside=outside,
        missing=section.choice("missing", "fault", ("fault", "typical")),
        levels=levels,
        assumed=False,
    )


def _levels(section: Section, outside: str) -> tuple[str, ...]:
    todo = "list two levels or more, the reference first"
    value = section.table["levels"]
    levels = section.texts("levels", todo)
    if isinstance(value, list) and len(value) < 2:
        section.report("levels", f"found {len(value)}", todo)
    for key in ("range", "unit"):
        if key in section.table:
            section.report(key, "found beside levels", "remove one of the two: a level is a position in the list")
    if outside == "clamp":
        section.report("outside", 'found "clamp" beside levels', "remove it: what is not a level is a fault")
    return levels


def _range(section: Section, arithmetic: str) -> tuple[Fraction | None, Fraction | None]:
    todo = "write [lowest, highest]"
    value = section.table["range"]
    if not isinstance(value, list) or len(value) != 2:
        section.report("range", f"found {shown(value)}", todo)
        return None, None
    limits = [exact(limit) for limit in value]
    for limit in limits:
        if isinstance(limit, str):
            section.report("range", limit, todo)
    low, high = limits
    if isinstance(low, str) or isinstance(high, str):
        return None, None
    if problem := range_problem(low, high, arithmetic):
        section.report("range", *problem)
    return low, high


def _refuse_collisions(top: Section, inputs: tuple[InputPlan, ...], label: str) -> None:
    for entry in inputs:
        if entry.column and entry.column == label:
            found = f"found {shown(label)}, which is the label"
            top.report(f"[[input]] {shown(entry.name)}: column", found, "name a measured column")
    for one, other in combinations(inputs, 2):
        pair = f"[[input]] {shown(one.name)} and {shown(other.name)}"
        if not one.name or not other.name:
            continue
        if one.name == other.name:
            top.report(f"[[input]] {shown(one.name)}", "found twice", "name each input once")
        elif c_input_name(one.name, one.unit) == c_input_name(other.name, other.unit):
            spelled = c_input_name(one.name, one.unit)
            top.report(pair, f"found two inputs that C would call {spelled}", "rename one of them")
        if one.name != other.name and one.column == other.column:
            top.report(pair, f"found the column {shown(one.column)} in both", "give each input a column of its own")


def _prior(section: Section) -> PriorPlan:
    section.refuse_other_keys(
        ("sd", "intercept_sd"),
        {"term": ("priors of single terms are", "remove the table: sd holds for every weight")},
    )
    if "sd" not in section.table:
        todo = "write sd = 1.0, a moderate prior on standardised weights, or another number, or inf"
        section.report("sd", "found nothing: choosing it from the rows is not there yet", todo)
    return PriorPlan(sd=_sd(section, "sd"), intercept_sd=_sd(section, "intercept_sd"))


def _sd(section: Section, key: str) -> Fraction | None:
    value = section.table.get(key, Decimal("inf"))
    todo = "write a number above 0, or inf for a flat prior"
    if value in ("cross-validation", "evidence"):
        section.report(key, f"found {shown(value)}, which is not there yet", todo)
        return None
    if isinstance(value, Decimal) and value == Decimal("inf"):
        return None
    sd = section.number(key, Fraction(1), todo)
    if not sd > 0:
        section.report(key, f"found {decimal_text(sd)}", todo)
    elif sd < LEAST_SD:
        found = f"found {decimal_text(sd)}, too narrow for weights kept in steps of 2^-30"
        section.report(key, found, f"write {decimal_text(LEAST_SD)} or more")
    return sd


def _decision(section: Section) -> DecisionPlan:
    section.refuse_other_keys(
        ("cost_false_alarm", "cost_miss"),
        {
            "prevalence": ("a prevalence in the field is", "remove the key: the share of events in the rows holds"),
            "no_call": ("a no-call is", "remove the key: every row is decided"),
        },
    )
    return DecisionPlan(
        cost_false_alarm=section.positive("cost_false_alarm", Fraction(1)),
        cost_miss=section.positive("cost_miss", Fraction(1)),
    )


def _device(section: Section) -> DevicePlan:
    section.refuse_other_keys(
        ("arithmetic", "tolerance"),
        {"compiler": ("a compiler of your own is", "remove the key: the C header is checked with gcc and clang")},
    )
    return DevicePlan(
        arithmetic=section.choice("arithmetic", "binary32", ("binary32", "binary64"), later=("int16", "int32")),
        tolerance=section.positive("tolerance", Fraction(1)) if "tolerance" in section.table else None,
    )


def _write(section: Section) -> tuple[str, ...]:
    section.refuse_other_keys(
        ("write",),
        {"real_rows": ("real rows in a release are", "remove the key: vectors are invented within the ranges")},
    )
    if "write" not in section.table:
        return ARTEFACTS
    todo = f"list some of {', '.join(ARTEFACTS)}"
    asked = section.texts("write", todo)
    for name in asked:
        if name not in ARTEFACTS:
            section.report("write", f"found {shown(name)}", todo)
    if section.table["write"] == []:
        section.report("write", "found an empty list", todo)
    return tuple(name for name in ARTEFACTS if name in asked)
