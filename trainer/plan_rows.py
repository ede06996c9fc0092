"""The plan's [rows]: which file, which columns mean what, what is held out."""

from __future__ import annotations

import re
from fractions import Fraction
from itertools import combinations
from pathlib import Path

from trainer.plan_checks import Section, decimal_text, shown
from trainer.plan_classes import RowsPlan

LARGEST_SEED = 2**53 - 1
"""A seed goes into canonical JSON, which has no larger whole numbers."""

SUFFIXES = (".csv", ".npz", ".parquet")
_FILE_TODO = "name a .csv, a .npz or a .parquet"


def read_rows_table(section: Section, folder: Path) -> RowsPlan:
    """The table; paths in it are relative to `folder`."""
    section.refuse_other_keys(("file", "label", "classes", "weight", "group", "held_out", "seed"))
    file = section.text("file", None, _FILE_TODO)
    if file and not file.lower().endswith(SUFFIXES):
        section.report("file", f"found {shown(file)}", _FILE_TODO)
    rows = RowsPlan(
        file=folder / file,
        label=section.text("label", None, "name the column that holds the class"),
        classes=_classes(section),
        held_out=_held_out(section),
        seed=_seed(section),
        weight=_column(section, "weight", "name the column of row weights"),
        group=_column(section, "group", "name the column whose rows stay together"),
    )
    for (one, column), (other, same) in combinations(named_columns(rows), 2):
        if column and column == same:
            section.report(other, f"found {shown(same)}, which is the {one}", "name another column")
    return rows


def named_columns(rows: RowsPlan) -> list[tuple[str, str]]:
    """(key, column) of each column that [rows] names."""
    columns = [("label", rows.label), ("weight", rows.weight), ("group", rows.group)]
    columns.append(("held_out", rows.held_out if isinstance(rows.held_out, str) else None))
    return [(key, column) for key, column in columns if column is not None]


def is_pattern(file: str) -> bool:
    return bool(re.search(r"[*?\[]", file))


def _column(section: Section, key: str, todo: str) -> str | None:
    return section.text(key, None, todo) if key in section.table else None


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


def _held_out(section: Section) -> Fraction | str:
    default = Fraction(1, 4)
    todo = "write a share from 0 to below 1, or the name of a column of 0 and 1"
    if isinstance(section.table.get("held_out"), str):
        return section.text("held_out", None, todo)
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
