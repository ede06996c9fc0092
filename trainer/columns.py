"""Header + plan -> the columns to read; and, once all rows are read, what kind of input each is."""

from __future__ import annotations

import difflib
import math
from collections import Counter
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np

from runtime_min.errors import Problem, RowsError
from runtime_min.names import c_input_name, name_and_unit, name_problem
from trainer.cells import MOST_LEVELS, Column, Floats, Span, not_a_number
from trainer.plan import InputPlan, Plan
from trainer.plan_checks import shown
from trainer.plan_rows import named_columns

_SUGGESTIONS = 20  # a search among thousands of headers takes a while
_LEAVE_EMPTY = "leave the field empty where a value is missing"
_NAME_ALL = "name every input with [[input]] in the plan"


@dataclass(frozen=True)
class Columns:
    """The columns that the plan uses; `measured` in the order of `inputs`, the others None where it names none."""

    inputs: tuple[InputPlan, ...]
    measured: tuple[Column, ...]
    label: Column
    weight: Column | None
    group: Column | None
    held_out: Column | None

    def all(self) -> list[Column]:
        others = (self.label, self.weight, self.group, self.held_out)
        return [*(column for column in others if column), *self.measured]


def columns_of_plan(plan: Plan, header: list[str], place: str) -> Columns:
    """Raises RowsError with every column that is missing, there twice, or cannot be an input."""
    problems = repeated(header, place)
    named = named_columns(plan.rows)
    positions = {key: _position(column, header, place, _MEANING[key], problems) for key, column in named}
    inputs = plan.inputs or _inputs_of(header, [column for _, column in named], place, problems)
    places = [_position(entry.column, header, place, f"input {shown(entry.name)}", problems) for entry in inputs]
    if problems:
        raise RowsError(problems)
    classes = plan.rows.classes
    label = Column(
        plan.rows.label,
        positions["label"],
        "correct it, or remove the row",
        codes={text: index for index, text in enumerate(classes or ())},
        grows=classes is None,
        missing="write the class, or remove the row",
    )
    weight = group = held_out = None
    if plan.rows.weight is not None:
        todo = "write a weight of 0 or more, or remove the row"
        weight = Column(plan.rows.weight, positions["weight"], todo, least=0.0, missing=todo)
    if plan.rows.group is not None:
        todo = "write the group, or remove the row"
        group = Column(plan.rows.group, positions["group"], todo, codes={}, grows=True, missing=todo)
    if isinstance(plan.rows.held_out, str):
        todo = "write 1 to hold the row out, 0 to fit it"
        held_out = Column(plan.rows.held_out, positions["held_out"], todo, one_of=(0.0, 1.0), missing=todo)
    measured = tuple(_measured(plan, entry, at) for entry, at in zip(inputs, places, strict=True))
    return Columns(inputs, measured, label, weight, group, held_out)


def repeated(header: list[str], place: str) -> list[Problem]:
    """A problem for each name that several columns have."""
    return [
        Problem(place, f"found {count} columns named {shown(name)}", "rename all but one")
        for name, count in Counter(header).items()
        if count > 1 and name
    ]


def settled(columns: Columns, where: str) -> tuple[tuple[InputPlan, ...], list[Floats]]:
    """The inputs, and the values of each: of a column that the plan does not name, numbers, or levels as positions.

    Raises RowsError for each that is neither: texts beside numbers, or too many different ones.
    """
    problems: list[Problem] = []
    inputs, values = [], []
    for entry, column in zip(columns.inputs, columns.measured, strict=True):
        numbers = column.joined()
        if column.either and column.first_text is not None:
            codes = column.codes or {}
            if not np.isnan(numbers).all():
                place, text = column.first_text
                problems.append(Problem(place, *not_a_number(text, column.refusal, _LEAVE_EMPTY)))
            elif len(codes) > MOST_LEVELS:
                found = f"found more than {MOST_LEVELS} different texts"
                todo = f"remove the column, or {_NAME_ALL}"
                problems.append(Problem(f"{where}: column {shown(column.header)}", found, todo))
            levels = tuple(sorted(codes))
            ranks = np.array([levels.index(text) for text in codes], np.float64)
            texts = np.concatenate(column.text_blocks)
            numbers = np.full(len(texts), np.nan)
            numbers[~np.isnan(texts)] = ranks[texts[~np.isnan(texts)].astype(np.int64)]
            entry = replace(entry, levels=levels, assumed=True)
        inputs.append(entry)
        values.append(numbers)
    if problems:
        raise RowsError(problems)
    return tuple(inputs), values


_MEANING = {
    "label": "the label",
    "weight": "the weight",
    "group": "the group",
    "held_out": "the rows held out",
}


def _measured(plan: Plan, entry: InputPlan, position: int) -> Column:
    if entry.levels:
        codes = {text: index for index, text in enumerate(entry.levels)}
        return Column(entry.column, position, "correct it, or add it to levels", codes=codes)
    if plan.inputs:
        limits = None
        if entry.outside == "fault" and entry.low is not None and entry.high is not None:
            limits = (entry.low, entry.high)
        todo = "correct it, or leave the field empty where a value is missing"
        return Column(entry.column, position, todo, limits=limits, span=_span(entry))
    return Column(entry.column, position, f"correct it, or {_NAME_ALL}, text with levels", either=True)


def _span(entry: InputPlan) -> Span | None:
    """What rows may hold of an input in counts: what counts can stand for, and one count more at each end.

    A converter of 12 bits whose full scale is 4096 counts reaches that scale less one count, and a row may say the
    full scale. Beyond that, a limit that clamps may stand between the rows and the counts' end.
    """
    if entry.counts is None:
        return None
    low, high = entry.counts.span
    least, most = low - abs(entry.counts.gain), high + abs(entry.counts.gain)
    clamped = entry.outside == "clamp" and entry.low is not None and entry.high is not None
    clamped = entry.outside == "clamp"
    below = clamped and entry.low is not None and entry.low >= least
    above = clamped and entry.high is not None and entry.high <= most
    return Span(low, high, -math.inf if below else _nearest(least), math.inf if above else _nearest(most))


def _nearest(value: Fraction) -> float:
    try:
        return float(value)
    except OverflowError:
        return math.inf if value > 0 else -math.inf


def _position(name: str, header: list[str], place: str, what: str, problems: list[Problem]) -> int:
    if name in header:
        return header.index(name)
    near = difflib.get_close_matches(name, header, n=1) if len(problems) < _SUGGESTIONS else []
    todo = f"write {shown(near[0])} in the plan if that is meant" if near else "name a column of the file in the plan"
    problems.append(Problem(place, f"found no column {shown(name)} for {what}", todo))
    return -1


def _inputs_of(header: list[str], named: list[str], place: str, problems: list[Problem]) -> tuple[InputPlan, ...]:
    """Every column but those that [rows] names: for a plan that names no input."""
    inputs: list[InputPlan] = []
    spelled: dict[str, str] = {}
    for column in header:
        if column in named:
            continue
        name, unit = name_and_unit(column)
        in_c = c_input_name(name, unit)
        if problem := name_problem(name):
            problems.append(Problem(place, f"{problem}, for the header {shown(column)}", _NAME_ALL))
        elif spelled.setdefault(in_c, column) != column:
            found = f"found the headers {shown(spelled[in_c])} and {shown(column)}, both {in_c} in C"
            problems.append(Problem(place, found, _NAME_ALL))
        inputs.append(InputPlan(name, column, unit, None, None, "fault", "fault", (), assumed=True))
    if not inputs:
        problems.append(Problem(place, "found no column but the label", "give a column for each input"))
    return tuple(inputs)
