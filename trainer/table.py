"""Rows from files, checked against the plan, in blocks: one pass, every mistake reported at once.

`sources` knows the files, `columns` which of their columns the plan uses, `cells` what is a number; here stands which
rows are kept, and what they give where the plan is silent.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
import numpy.typing as npt

from runtime_min.errors import Problem, RowsError
from trainer.cells import Findings, Floats, read_block, shown_number
from trainer.columns import Columns, columns_of_plan, settled
from trainer.plan import InputPlan, Plan
from trainer.plan_checks import listed, shown
from trainer.plan_inputs import device_range_problem
from trainer.plan_prior import term_problems
from trainer.sources import digest_of, opened, row_files
from trainer.split import row_keys

_MOST_WEIGHT = 2.0**1000
"""Sums of weights up to this do not overflow."""


@dataclass(frozen=True)
class Rows:
    """The rows that were kept, in file order: n rows, p inputs in the plan's order.

    `inputs`: the plan's, completed with ranges read from the kept rows where the plan has none.
    `values`: (n, p); the measured value in the plan's unit, clamped where the plan says so; a level's index. NaN only
    where a value is missing and the plan says `missing = "typical"`: the fit puts in what is typical of its rows.
    `labels`: (n,) class index.
    `keys`: what `split` tells rows apart by, without the seed; from values as parsed, before clamping.
    `dropped`: rows left out for a value missing under `missing = "fault"`; `total`: rows in the files.
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
    """The rows of the plan's files. Raises RowsError with every problem; of many, the first 20 and a count."""
    where = str(plan.rows.file)
    try:
        columns, total, sha256 = _read(plan, where)
        return _kept(plan, columns, total, sha256, where)
    except MemoryError:
        raise RowsError(Problem(where, "found more rows than memory holds", "give fewer rows")) from None


def _read(plan: Plan, where: str) -> tuple[Columns, int, str]:
    """(the columns that the plan uses, read; the number of rows; the digest)."""
    findings = Findings()
    columns: Columns | None = None
    header: list[str] = []
    digests = []
    total = 0
    for path in row_files(plan.rows.file, plan.path.parent):
        with opened(path) as source:
            findings.begin(source.where, source.place)
            if columns is None:
                header = source.header
                columns = columns_of_plan(plan, header, _header_place(source.where, source.place))
            elif source.header != header:
                found, todo = _difference(header, source.header)
                findings.add_last([Problem(_header_place(source.where, source.place), found, todo)])
                continue
            try:
                for block in source.blocks(findings):
                    total += len(block.lines)
                    read_block(block, columns.all(), findings)
            except RowsError as broken:
                findings.add_last(broken.problems)
                continue
            digests.append(source.sha256())
    findings.raise_any()
    if not total or columns is None:
        raise RowsError(Problem(where, "found a header and no rows", "give rows below it"))
    return columns, total, digest_of(digests)


def _header_place(where: str, place: str) -> str:
    return f"{where}: line 1" if place == "line" else where


def _difference(first: Sequence[str], other: Sequence[str]) -> tuple[str, str]:
    todo = "give files with the same columns in the same order"
    if missing := [name for name in first if name not in other]:
        return f"found no column {listed(missing)}, which the first file has", todo
    if more := [name for name in other if name not in first]:
        return f"found the column {listed(more)}, which the first file has not", todo
    return "found the columns of the first file in another order", todo


def _kept(plan: Plan, columns: Columns, total: int, sha256: str, where: str) -> Rows:
    inputs, measured = settled(columns, where)
    values = np.column_stack(measured)
    at_fault = np.array([entry.missing == "fault" for entry in inputs])
    present = ~np.any(np.isnan(values) & at_fault, axis=1)
    kept = present
    weights = None
    if columns.weight:
        weights = _weights(columns.weight.joined(), f"{where}: column {shown(columns.weight.header)}", present)
        kept = present & (weights > 0)
        weights = weights[kept]
    values = values[kept]
    classes, labels = _labels(plan, columns, present, kept, where)
    inputs = _completed(plan, _with_levels_seen(inputs, values), values, where)
    if problems := term_problems(str(plan.path), plan.prior, inputs):
        raise RowsError(problems)
    parsed = [_parsed(entry, column) for entry, column in zip(inputs, values.T, strict=True)]
    keys = row_keys([classes[index] for index in labels], parsed, None if weights is None else weights.tolist())
    for position, entry in enumerate(inputs):
        if entry.outside == "clamp" and entry.low is not None and entry.high is not None:
            values[:, position] = np.clip(values[:, position], float(entry.low), float(entry.high))
    groups = None
    if columns.group:
        names = list(columns.group.codes or ())
        groups = tuple(names[int(code)] for code in columns.group.joined()[kept])
    held_out = None
    if columns.held_out:
        held_out = columns.held_out.joined()[kept] == 1
        _refuse_bad_split(held_out, groups, f"{where}: column {shown(columns.held_out.header)}")
    for array in (values, labels, weights, held_out):
        if array is not None:
            array.flags.writeable = False
    dropped = int(np.sum(~present))
    return Rows(inputs, classes, values, labels, keys, dropped, total, sha256, weights, groups, held_out)


def _weights(weights: Floats, place: str, present: npt.NDArray[np.bool_]) -> Floats:
    if not weights[present].any() and present.any():
        raise RowsError(Problem(place, f"found 0 in each of {int(present.sum())} rows", "give some rows a weight"))
    if not float(weights.max()) * len(weights) <= _MOST_WEIGHT:
        found = f"found {shown_number(weights.max())}, too large to be summed"
        raise RowsError(Problem(place, found, "scale the weights down"))
    return weights


def _refuse_bad_split(held_out: npt.NDArray[np.bool_], groups: tuple[str, ...] | None, place: str) -> None:
    if held_out.all():
        raise RowsError(Problem(place, f"found 1 in each of {len(held_out)} rows", "write 0 for the rows to fit"))
    if groups is not None:
        sides = [{group for group, out in zip(groups, held_out, strict=True) if out == side} for side in (True, False)]
        if both := sorted(sides[0] & sides[1]):
            found = f"found 0 and 1 in the group {listed(both)}"
            raise RowsError(Problem(place, found, "hold out whole groups"))


def _labels(
    plan: Plan, columns: Columns, present: npt.NDArray[np.bool_], kept: npt.NDArray[np.bool_], where: str
) -> tuple[tuple[str, ...], npt.NDArray[np.int64]]:
    """(the class names, the class of each kept row). Classes that the plan does not name are sorted."""
    label = columns.label
    place = f"{where}: column {shown(label.header)}"
    codes = label.joined().astype(np.int64)[kept]
    found_names = list(label.codes or ())
    seen = {found_names[code] for code in np.unique(codes)}
    classes = plan.rows.classes or tuple(sorted(seen))
    if not present.any():
        found = f"found a value missing in each of {len(kept)} rows"
        raise RowsError(Problem(where, found, 'write missing = "typical" for the inputs that are often missing'))
    if len(classes) > 2:
        found = f"found {len(classes)} classes, {listed(classes)}: more than two are not there yet"
        raise RowsError(Problem(place, found, "name two with classes, and remove the rows of the others"))
    missing = [name for name in classes if name not in seen]
    if len(classes) < 2:
        raise RowsError(Problem(place, f"found only the class {shown(classes[0])}", "give rows of two classes"))
    if missing:
        weighed = "" if columns.weight is None else " and have a weight above 0"
        found = f"found no row of the class {listed(missing)} among the {len(codes)} that miss no value{weighed}"
        raise RowsError(Problem(place, found, "give rows of both classes"))
    places = {name: index for index, name in enumerate(classes)}
    return classes, np.array([places.get(name, -1) for name in found_names], np.int64)[codes]


def _with_levels_seen(inputs: Sequence[InputPlan], values: Floats) -> tuple[InputPlan, ...]:
    """The inputs with those levels alone, of the levels that rows gave, that kept rows have; `values` follow."""
    changed = []
    for position, entry in enumerate(inputs):
        column = values[:, position]
        seen, ranks = np.unique(column[~np.isnan(column)], return_inverse=True)
        if entry.assumed and 0 < len(seen) < len(entry.levels):
            entry = replace(entry, levels=tuple(entry.levels[int(index)] for index in seen))
            column[~np.isnan(column)] = ranks
        changed.append(entry)
    return tuple(changed)


def _completed(plan: Plan, inputs: Sequence[InputPlan], values: Floats, where: str) -> tuple[InputPlan, ...]:
    """The inputs with a range for each number: where the plan has none, what the rows span and a tenth on each side."""
    problems: list[Problem] = []
    completed = []
    for entry, column in zip(inputs, values.T, strict=True):
        place = f"{where}: column {shown(entry.column)}"
        seen = column[~np.isnan(column)]
        remove = "remove the input" if plan.inputs else "remove the column, or name the others with [[input]]"
        if not len(seen):
            problems.append(Problem(place, "found no value", remove))
            continue
        least, largest = float(seen.min()), float(seen.max())
        if least == largest:
            same = shown(entry.levels[int(least)]) if entry.levels else shown_number(least)
            problems.append(Problem(place, f"found {same} in every row", f"{remove}: a constant says nothing"))
            continue
        if entry.levels or entry.low is not None:
            completed.append(entry)
            continue
        tenth = (Fraction(largest) - Fraction(least)) / 10
        low, high = Fraction(least) - tenth, Fraction(largest) + tenth
        if problem := device_range_problem(low, high, entry.origin, entry.counts, plan.device.arithmetic):
            todo = "write a range in the plan, or another arithmetic"
            problems.append(Problem(place, f"{problem[0]}, a tenth beyond the rows", todo))
        completed.append(replace(entry, low=low, high=high, assumed=True))
    if problems:
        raise RowsError(problems)
    return tuple(completed)


def _parsed(entry: InputPlan, column: Floats) -> list[str | float | None]:
    """What a split tells rows apart by: a number as parsed, a level's text, None where it is missing."""
    if entry.levels:
        return [None if value != value else entry.levels[int(value)] for value in column.tolist()]
    return [None if value != value else value for value in column.tolist()]
