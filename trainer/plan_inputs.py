"""The plan's [[input]] tables: names, units, ranges, policies, levels, and what the device delivers."""

from __future__ import annotations

import math
from fractions import Fraction

from runtime_min.names import NAME_RULE, c_input_name, name_problem
from trainer.plan_checks import Section, decimal_text, exact, range_problem, shown
from trainer.plan_classes import CountsPlan, InputPlan, RowsPlan
from trainer.plan_rows import named_columns

_KEYS = ("name", "column", "unit", "range", "outside", "missing", "levels", "counts", "origin")
_COUNTS_TODO = "write counts = { bits = 12, gain = 0.1, offset = -95.0 }"
_OF_NUMBERS = ("range", "unit", "counts", "origin")
_BESIDE_LEVELS = "remove one of the two: a level is a position in the list"
LONGEST_UNIT = 40


def read_inputs(top: Section, arithmetic: str) -> tuple[InputPlan, ...]:
    """The plan's inputs; none where the rows are to give them."""
    return tuple(_input(section, arithmetic) for section in _sections(top))


def _sections(top: Section) -> list[Section]:
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
    section.refuse_other_keys(_KEYS)
    name = section.text("name", None, "name the input")
    if name and (problem := name_problem(name)):
        section.report("name", problem, NAME_RULE)
    unit = section.text("unit", "")
    if len(unit) > LONGEST_UNIT:
        section.report("unit", f"found {len(unit)} characters", f"write a unit of at most {LONGEST_UNIT}")
    column = section.text("column", name) if "column" in section.table or name else name
    levels: tuple[str, ...] = ()
    low = high = origin = counts = None
    outside = section.choice("outside", "fault", ("fault", "clamp"))
    if "levels" in section.table:
        levels = _levels(section, outside)
    else:
        counts = _counts(section)
        origin = _origin(section)
        if "range" in section.table:
            low, high = _range(section)
    if low is not None and high is not None:
        narrow = device_range_problem(low, high, origin, counts, arithmetic)
        if narrow:
            section.report("range", *narrow)
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
        origin=origin,
        counts=counts,
    )


def _levels(section: Section, outside: str) -> tuple[str, ...]:
    todo = "list two levels or more, the reference first"
    value = section.table["levels"]
    levels = section.texts("levels", todo)
    if isinstance(value, list) and len(value) < 2:
        section.report("levels", f"found {len(value)}", todo)
    for key in _OF_NUMBERS:
        if key in section.table:
            section.report(key, "found beside levels", _BESIDE_LEVELS)
    if outside == "clamp":
        section.report("outside", 'found "clamp" beside levels', "remove it: what is not a level is a fault")
    return levels


def _range(section: Section) -> tuple[Fraction | None, Fraction | None]:
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
    return low, high


def _origin(section: Section) -> Fraction | None:
    if "origin" not in section.table:
        return None
    if "counts" in section.table:
        section.report("origin", "found beside counts", "remove one of the two: counts have an offset of their own")
    return section.number("origin", Fraction(0))


def _counts(section: Section) -> CountsPlan | None:
    if "counts" not in section.table:
        return None
    if not isinstance(section.table["counts"], dict):
        section.report("counts", f"found {shown(section.table['counts'])}", _COUNTS_TODO)
        return None
    counts = section.section("counts", mark="counts")
    counts.refuse_other_keys(("bits", "gain", "offset", "signed"))
    bits = counts.table.get("bits")
    if bits is None:
        counts.report("bits", "found nothing", _COUNTS_TODO)
    if not isinstance(bits, int) or isinstance(bits, bool) or not 2 <= bits <= 32:
        if bits is not None:
            counts.report("bits", f"found {shown(bits)}", "write a whole number from 2 to 32")
        bits = 2
    todo = "write the value of one count, other than 0"
    gain = Fraction(1)
    if "gain" not in counts.table:
        counts.report("gain", "found nothing", todo)
    else:
        gain = counts.number("gain", gain, todo)
        if gain == 0:
            counts.report("gain", "found 0", todo)
            gain = Fraction(1)
    signed = counts.table.get("signed", False)
    if not isinstance(signed, bool):
        counts.report("signed", f"found {shown(signed)}", "write true or false")
        signed = False
    return CountsPlan(bits, gain, counts.number("offset", Fraction(0), "write the value of the count 0"), signed)


def device_range_problem(
    low: Fraction, high: Fraction, origin: Fraction | None, counts: CountsPlan | None, arithmetic: str
) -> tuple[str, str] | None:
    """(found, what to do) where a range holds fewer than two of the numbers that the device can deliver; else None."""
    if counts is None or not low < high:
        return range_problem(low, high, arithmetic, origin or Fraction(0))
    least, most = counts.whole
    ends = sorted((limit - counts.offset) / counts.gain for limit in (low, high))
    first, last = max(math.ceil(ends[0]), least), min(math.floor(ends[1]), most)
    if first < last:
        return None
    spans = " to ".join(decimal_text(value) for value in counts.span)
    holds = "one count" if first == last else "no count"
    found = f"found {decimal_text(low)} to {decimal_text(high)}, which holds {holds}: all counts span {spans}"
    return found, "widen the range, or correct bits, gain and offset"


def refuse_collisions(top: Section, inputs: tuple[InputPlan, ...], rows: RowsPlan) -> None:
    """Report inputs that share a name, a column or a spelling, or take a column that [rows] has given a meaning."""
    taken = {column: key for key, column in reversed(named_columns(rows)) if key != "group" and column}
    for entry in inputs:
        if entry.column and entry.column in taken:
            found = f"found {shown(entry.column)}, which is the {_MEANING[taken[entry.column]]}"
            top.report(f"[[input]] {shown(entry.name)}: column", found, "name a measured column")
    names: set[str] = set()
    spellings: dict[str, InputPlan] = {}
    columns: dict[str, InputPlan] = {}
    for entry in inputs:
        if not entry.name:
            continue
        if entry.name in names:
            top.report(f"[[input]] {shown(entry.name)}", "found twice", "name each input once")
            continue
        names.add(entry.name)
        spelled = c_input_name(entry.name, entry.unit)
        if (one := spellings.setdefault(spelled, entry)) is not entry:
            pair = f"[[input]] {shown(one.name)} and {shown(entry.name)}"
            top.report(pair, f"found two inputs that C would call {spelled}", "rename one of them")
        if (one := columns.setdefault(entry.column, entry)) is not entry:
            pair = f"[[input]] {shown(one.name)} and {shown(entry.name)}"
            top.report(pair, f"found the column {shown(entry.column)} in both", "give each input a column of its own")


_MEANING = {"label": "label", "weight": "weight", "held_out": "column of held-out rows"}
