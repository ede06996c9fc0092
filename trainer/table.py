"""Rows from a CSV file, checked against the plan, in blocks: one pass, every mistake reported at once.

A problem names the line on which its row starts. `records` knows the file format, `cells` what is a number; here stand
the header, what the rows give where the plan is silent, and which rows are kept.
"""

from __future__ import annotations

import difflib
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import islice

import numpy as np
import numpy.typing as npt

from runtime_min.errors import Problem, RowsError
from runtime_min.names import c_input_name, name_and_unit, name_problem
from trainer.cells import Column, Findings, Floats, read_block, shown_number
from trainer.plan import InputPlan, Plan
from trainer.plan_checks import listed, range_problem, shown
from trainer.records import Lines, opened, records
from trainer.split import row_keys

_BLOCK_RECORDS = 4096
_NAME_ALL = "name every input with [[input]] in the plan"


@dataclass(frozen=True)
class Rows:
    """The rows that were kept, in file order: n rows, p inputs in the plan's order.

    `inputs`: the plan's, completed with ranges read from the kept rows where the plan has none.
    `values`: (n, p); the measured value in the plan's unit, clamped where the plan says so; a level's index. NaN only
    where a value is missing and the plan says `missing = "typical"`: the fit puts in what is typical of its rows.
    `labels`: (n,) class index.
    `keys`: what `split` tells rows apart by, without the seed; from values as parsed, before clamping.
    `dropped`: rows left out for a value missing under `missing = "fault"`; `total`: rows in the file.
    `sha256`: of the file's bytes; of several files, of the lines of their digests in the order of their names.
    `weights`: (n,) > 0; a row of weight 0 is read and counted in `total`, then left out, so that it has no influence.
    `groups`: (n,) the group's text. `held_out`: (n,) True where the plan's column of held-out rows has 1.
    Each of the three is None where the plan names no column. The arrays are read-only.
    """

    inputs: tuple[InputPlan, ...]
    classes: tuple[str, ...]
    values: Floats
    labels: npt.NDArray[np.int64]
    keys: tuple[bytes, ...]
    dropped: int
    total: int
    sha256: str
    weights: Floats | None = None
    groups: tuple[str, ...] | None = None
    held_out: npt.NDArray[np.bool_] | None = None


def read_rows(plan: Plan) -> Rows:
    """The rows of the plan's file. Raises RowsError with every problem; of many, the first 20 and a count."""
    where = str(plan.rows.file)
    with opened(plan.rows.file) as stream:
        lines = Lines(stream, where)
        table = records(lines)
        _, header = next(table, (1, []))
        if not header:
            raise RowsError(Problem(where, "found no header", "give a .csv with a header and rows"))
        inputs, label, measured = _columns(plan, header, where)
        findings = Findings(where)
        total = 0
        try:
            while block := list(islice(table, _BLOCK_RECORDS)):
                total += len(block)
                read_block(block, len(header), [label, *measured], findings)
        except RowsError as broken:
            findings.add_last(broken.problems)
    findings.raise_any()
    if not total:
        raise RowsError(Problem(where, "found a header and no rows", "give a .csv with rows"))

    values = np.column_stack([column.joined() for column in measured])
    at_fault = np.array([entry.missing == "fault" for entry in inputs])
    kept = ~np.any(np.isnan(values) & at_fault, axis=1)
    values = values[kept]
    classes, labels = _labels(plan, label, kept, where)
    inputs = _completed(plan, inputs, values, where)
    parsed = [_parsed(entry, column) for entry, column in zip(inputs, values.T, strict=True)]
    keys = row_keys([classes[index] for index in labels], parsed)
    for position, entry in enumerate(inputs):
        if entry.outside == "clamp" and entry.low is not None and entry.high is not None:
            values[:, position] = np.clip(values[:, position], float(entry.low), float(entry.high))
    values.flags.writeable = labels.flags.writeable = False
    return Rows(inputs, classes, values, labels, keys, int(np.sum(~kept)), total, lines.sha256)


def _columns(plan: Plan, header: list[str], where: str) -> tuple[tuple[InputPlan, ...], Column, list[Column]]:
    """(the inputs, the label's column, one column an input)."""
    place = f"{where}: line 1"
    problems = [
        Problem(place, f"found {count} columns named {shown(name)}", "rename all but one")
        for name, count in Counter(header).items()
        if count > 1 and name
    ]
    label_position = _position(plan.rows.label, header, place, "the label", problems)
    inputs = plan.inputs or _inputs_of(header, plan.rows.label, place, problems)
    positions = [_position(entry.column, header, place, f"input {shown(entry.name)}", problems) for entry in inputs]
    if problems:
        raise RowsError(problems)
    classes = plan.rows.classes
    label = Column(
        plan.rows.label,
        label_position,
        "correct it, or remove the row",
        codes={text: index for index, text in enumerate(classes or ())},
        grows=classes is None,
        may_be_missing=False,
    )
    named = bool(plan.inputs)
    measured = [_measured(entry, position, named) for entry, position in zip(inputs, positions, strict=True)]
    return inputs, label, measured


def _measured(entry: InputPlan, position: int, named: bool) -> Column:
    if entry.levels:
        codes = {text: index for index, text in enumerate(entry.levels)}
        return Column(entry.column, position, "correct it, or add it to levels", codes=codes)
    if named:
        limits = None
        if entry.outside == "fault" and entry.low is not None and entry.high is not None:
            limits = (entry.low, entry.high)
        todo = "correct it, or leave the field empty where a value is missing"
        return Column(entry.column, position, todo, limits=limits)
    return Column(entry.column, position, f"{_NAME_ALL}, text with levels", refuse_once=True)


def _position(name: str, header: list[str], place: str, what: str, problems: list[Problem]) -> int:
    if name in header:
        return header.index(name)
    near = difflib.get_close_matches(name, header, n=1)
    todo = f"write {shown(near[0])} in the plan if that is meant" if near else "name a column of the file in the plan"
    problems.append(Problem(place, f"found no column {shown(name)} for {what}", todo))
    return -1


def _inputs_of(header: list[str], label: str, place: str, problems: list[Problem]) -> tuple[InputPlan, ...]:
    """Every column but the label as a number: for a plan that names no input."""
    inputs: list[InputPlan] = []
    spelled: dict[str, str] = {}
    for column in header:
        if column == label:
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


def _labels(
    plan: Plan, label: Column, kept: npt.NDArray[np.bool_], where: str
) -> tuple[tuple[str, ...], npt.NDArray[np.int64]]:
    """(the class names, the class of each kept row). Classes that the plan does not name are sorted."""
    place = f"{where}: column {shown(label.header)}"
    found_names = list(label.codes or ())
    classes = plan.rows.classes or tuple(sorted(found_names))
    if len(classes) > 2:
        found = f"found {len(classes)} classes, {listed(classes)}: more than two are not there yet"
        raise RowsError(Problem(place, found, "name two with classes, and remove the rows of the others"))
    places = np.array([classes.index(name) for name in found_names], np.int64)
    labels = places[label.joined().astype(np.int64)][kept]
    if not len(labels):
        found = f"found a value missing in each of {len(kept)} rows"
        raise RowsError(Problem(where, found, 'write missing = "typical" for the inputs that are often missing'))
    missing = [name for index, name in enumerate(classes) if not np.any(labels == index)]
    if len(classes) < 2:
        raise RowsError(Problem(place, f"found only the class {shown(classes[0])}", "give rows of two classes"))
    if missing:
        found = f"found no row of the class {listed(missing)} among the {len(labels)} that miss no value"
        raise RowsError(Problem(place, found, "give rows of both classes"))
    return classes, labels


def _completed(plan: Plan, inputs: Sequence[InputPlan], values: Floats, where: str) -> tuple[InputPlan, ...]:
    """The inputs with a range for each number: where the plan has none, what the rows span and a tenth on each side."""
    problems: list[Problem] = []
    completed = []
    for entry, column in zip(inputs, values.T, strict=True):
        if entry.levels or entry.low is not None:
            completed.append(entry)
            continue
        place = f"{where}: column {shown(entry.column)}"
        present = column[~np.isnan(column)]
        if not len(present):
            problems.append(Problem(place, "found no value", "remove the input"))
            continue
        least, largest = float(present.min()), float(present.max())
        if least == largest:
            found = f"found {shown_number(least)} in every row"
            problems.append(Problem(place, found, "remove the input: a constant says nothing of the class"))
            continue
        tenth = (Fraction(largest) - Fraction(least)) / 10
        low, high = Fraction(least) - tenth, Fraction(largest) + tenth
        if problem := range_problem(low, high, plan.device.arithmetic):
            problems.append(Problem(place, problem[0], "write a range in the plan, or another arithmetic"))
        completed.append(replace(entry, low=low, high=high, assumed=True))
    if problems:
        raise RowsError(problems)
    return tuple(completed)


def _parsed(entry: InputPlan, column: Floats) -> list[str | float | None]:
    """What a split tells rows apart by: a number as parsed, a level's text, None where it is missing."""
    if entry.levels:
        return [None if value != value else entry.levels[int(value)] for value in column.tolist()]
    return [None if value != value else value for value in column.tolist()]
