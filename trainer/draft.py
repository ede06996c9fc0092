"""A commented plan from a data file: what each column seems to be, and why. The draft ships as it stands.

Every guess stands in the plan beside its reason, so that the reader can see what to change: the label, which class is
the event, what groups the rows, each input's name and unit, and above all the ranges, which the rows cannot know.
"""

from __future__ import annotations

import os
import re
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, Context, Decimal
from pathlib import Path

from runtime_min.errors import Problem, RowsError
from runtime_min.names import c_input_name, model_name_problem, name_and_unit, name_problem
from trainer.plan_checks import listed, shown
from trainer.profile import Profile, few_texts, profiles

# Common practice, no source: words in headers and classes.
LABEL_WORDS = ("label", "state", "status", "class", "outcome", "target", "result", "condition", "defect", "fault", "y")
GROUP_WORDS = ("id", "serial", "batch", "lot", "unit", "device", "machine", "run", "group", "subject", "site", "no")
EVENT_WORDS = ("1", "true", "yes", "y", "fault", "faulty", "fail", "failed", "bad", "nok", "defect", "alarm")
YES_WORDS = ("1", "true", "yes", "y")
UNIT_WORDS = {
    "kpa": "kPa", "pa": "Pa", "mpa": "MPa", "bar": "bar", "mbar": "mbar", "psi": "psi", "c": "°C", "degc": "°C",
    "k": "K", "f": "°F", "a": "A", "ma": "mA", "v": "V", "mv": "mV", "kv": "kV", "w": "W", "kw": "kW", "hz": "Hz",
    "khz": "kHz",
    "rpm": "rpm", "mm": "mm", "cm": "cm", "m": "m", "um": "µm", "g": "g", "kg": "kg", "n": "N", "nm": "Nm", "l": "l",
    "ml": "ml", "s": "s", "ms": "ms", "min": "min", "h": "h", "pct": "%", "percent": "%", "ppm": "ppm", "db": "dB",
    "ohm": "ohm", "lux": "lux", "m3": "m3", "deg": "°",
}  # fmt: skip
PER_WORDS = ("s", "ms", "min", "h", "m", "m2", "m3", "k", "v", "a")
GOOD_WORDS = ("ok", "good", "pass", "passed", "healthy", "normal", "valid")
"""In a label's header: what reads like an event among its classes then says that there is none."""
COUNT_WORDS = ("count", "counts", "freq", "frequency", "n")
GROUP_ROWS = 5
"""Fewest rows, on average, of each text in a column that may group the rows."""
NEAR_TEXTS = 8
"""Most texts of a column that is named where no column has two."""
SPLIT_ROWS = 12
"""Fewest rows of the rarer class for which a quarter of all rows is held out."""


@dataclass(frozen=True)
class Guess:
    """What a column was taken for, and why, in words."""

    column: str
    taken_for: str
    why: str


@dataclass(frozen=True)
class Draft:
    """The plan's text, and every guess in it."""

    text: str
    guesses: tuple[Guess, ...]


def draft(path: Path, folder: Path | None = None) -> Draft:
    """A plan for the rows in `path`, to stand in `folder`, by default beside them.

    Raises RowsError where the file cannot be read, no column has two values, or none is left for an input.
    """
    columns = profiles(path)
    label, others = _label(path, columns)
    classes, why_event = _classes(label)
    group = _group([column for column in columns if column is not label])
    guesses = [Guess(label.header, "label", _label_reason(label, others)), Guess(classes[1], "event", why_event)]
    if group:
        guesses.append(Guess(group.header, "group", f"{len(group.counts or ())} texts, each in many rows"))
    tables, names = [], set[str]()
    for column in columns:
        if column in (label, group):
            continue
        reason = _unfit(column)
        if reason:
            guesses.append(Guess(column.header, "left out", reason))
            continue
        name, unit, why = _name(column, names)
        guesses.append(Guess(column.header, "input", why))
        tables.append(_input_table(column, name, unit, why))
    if not tables:
        raise RowsError(Problem(str(path), "found no column that can be an input", "write the plan by hand"))
    rarer = min((label.counts or {}).values())
    left_out = [guess for guess in guesses if guess.taken_for == "left out"]
    parts = [
        _head(path),
        _rows_table(os.path.relpath(path, folder or path.parent), label, classes, why_event, others, group, rarer),
        *(f"# left out: {_comment(guess.column)}: {guess.why}" for guess in left_out),
        *tables,
        _TAIL,
    ]
    return Draft("\n\n".join(parts), tuple(guesses))


def _label(path: Path, columns: Sequence[Profile]) -> tuple[Profile, list[Profile]]:
    """The most likely label and the other candidates: a column with two values, by its header, then the last."""
    two = [c for c in columns if c.counts is not None and len(c.counts) == 2 and not c.missing]

    def rank(column: Profile) -> tuple[bool, bool, int]:
        words = _words(column)
        return any(word in LABEL_WORDS for word in words), not column.numeric, columns.index(column)

    if not two:
        found, todo = "found no column with exactly two values", "add the column with the class"
        near = [c for c in columns if 2 <= len(c.counts or ()) <= min(NEAR_TEXTS, c.rows // 2)]
        if near:
            best = max(near, key=rank)
            empty = f", and is empty in {best.missing:,} rows" if best.missing else ""
            found += f"; {shown(best.header)} has {listed(sorted(best.counts or ()))}{empty}"
            todo = "write one of two classes in each row, or add the column with the class"
        raise RowsError(Problem(str(path), found, todo))
    best = max(two, key=rank)
    return best, [column for column in two if column is not best]


def _words(column: Profile) -> list[str]:
    return re.findall(r"[a-z]+", column.header.lower())


def _label_reason(label: Profile, others: Sequence[Profile]) -> str:
    also = f"; others with two values: {', '.join(_comment(c.header) for c in others)}" if others else ""
    return f"it has two values in every row{also}"


def _classes(label: Profile) -> tuple[tuple[str, str], str]:
    """The two classes, the event last, and why."""
    counts = label.counts or {}
    first, second = sorted(counts)
    good = [word for word in _words(label) if word in GOOD_WORDS]
    for event, other in ((second, first), (first, second)):
        if event.lower() in EVENT_WORDS and other.lower() not in EVENT_WORDS:
            if event == "1" and other not in ("0", "-1"):
                continue  # a code: 1 and 2 say nothing
            if good and event.lower() in YES_WORDS:
                return (event, other), f'"{event}" stands for "{good[0]}" in the header'
            return (other, event), "it reads like one"
    rare, common = sorted(counts, key=lambda text: (counts[text], text))
    return (common, rare), f"it is the rarer class ({counts[rare]:,} of {label.rows:,} rows)"


def _group(columns: Sequence[Profile]) -> Profile | None:
    """A column whose texts each stand in many rows and are too many for levels, or that is called like one."""
    for column in columns:
        if column.counts is None or column.missing or len(column.counts) < 3:
            continue
        words = _words(column)
        many = column.rows >= GROUP_ROWS * len(column.counts)
        named = any(word in GROUP_WORDS for word in words) and (not column.numeric or column.whole)
        if many and (named or (not column.numeric and len(column.counts) > 8)):
            return column
    return None


def _unfit(column: Profile) -> str | None:
    """Why a column cannot be an input; None where it can."""
    if column.missing == column.rows:
        return "it is empty"
    if column.constant:
        return "it has one value"
    if column.missing * 2 > column.rows:
        return f"it is empty in {column.missing:,} of {column.rows:,} rows"
    if column.numeric and column.whole and column.runs and column.rows > 2:
        return "it counts the rows"
    if not column.numeric and not few_texts(column):
        if column.mixed is not None:
            return f"it has {shown(column.mixed)} beside numbers; leave the field empty where there is no value"
        return "its texts are too many for levels"
    if column.numeric and max(abs(column.low or 0.0), abs(column.high or 0.0)) > 1e300:
        return "its numbers are too large"
    return None


def _name(column: Profile, taken: set[str]) -> tuple[str, str, str]:
    """A free name, the unit, and where the unit comes from."""
    name, unit = name_and_unit(column.header)
    why = "the unit stands in the header" if unit else "the header names no unit"
    if not column.numeric:
        unit, why = "", "its texts are few: levels"
    elif not unit:
        words = name.split("_")
        for length in (2, 1):
            found = _unit_of(words[-length:]) if len(words) > length else None
            if found:
                name, unit = "_".join(words[:-length]), found
                why = f"the header ends in {'_'.join(words[-length:])}"
                break
    if column.whole and not unit and any(word in COUNT_WORDS for word in _words(column)):
        why += f"; if it counts equal rows, write weight = {shown(column.header)} in [rows] and remove this input"
    if name_problem(name):
        name = f"input_{name}".rstrip("_")
    if name_problem(name):
        name = "input"
    free, number = name, 2
    while free in taken or c_input_name(free, unit) in taken:
        free, number = f"{name}_{number}", number + 1
    taken |= {free, c_input_name(free, unit)}
    return free, unit, why


def _unit_of(words: Sequence[str]) -> str | None:
    if len(words) == 1:
        return UNIT_WORDS.get(words[0])
    over, under = words
    return f"{UNIT_WORDS[over]}/{under}" if over in UNIT_WORDS and under in PER_WORDS else None


def _head(path: Path) -> str:
    name = name_and_unit(path.stem)[0]
    model = name if not model_name_problem(name) else "model"
    first = f"# A draft from {_comment(path.name)}. Each guess stands beside its reason: look at all of them."
    return f"{first}\n\nmodel   = {_text(model)}\npurpose = {_text('')}"


def _rows_table(
    file: str,
    label: Profile,
    classes: tuple[str, str],
    why_event: str,
    others: Sequence[Profile],
    group: Profile | None,
    rarer: int,
) -> str:
    lines = [
        "[rows]",
        f"file     = {_text(file)}",
        f"label    = {_text(label.header)}  # {_label_reason(label, others)}",
        f"classes  = [{_text(classes[0])}, {_text(classes[1])}]  # the last is the event: {why_event}",
    ]
    if group:
        lines.append(f"group    = {_text(group.header)}  # its rows stay together: {len(group.counts or ())} of them")
    if rarer >= SPLIT_ROWS:
        lines.append("held_out = 0.25  # never fitted; the results come from these")
    else:
        lines.append(f"held_out = 0  # only {rarer} rows of one class: too few to hold any out")
    return "\n".join([*lines, "seed     = 1"])


def _input_table(column: Profile, name: str, unit: str, why: str) -> str:
    lines = ["[[input]]", f"name    = {_text(name)}", f"column  = {_text(column.header)}"]
    if not column.numeric:
        levels = ", ".join(_text(level) for level in sorted(column.counts or ()))
        lines.append(f"levels  = [{levels}]  # the device passes 0, 1, …; the first is the reference")
    else:
        low, high = _wide_range(column.low or 0.0, column.high or 0.0)
        lines.append(f"unit    = {_text(unit)}  # {why}")
        seen = f"the rows have {column.low!r} to {column.high!r}; write what the device can deliver"
        lines.append(f"range   = [{low}, {high}]  # {seen}")
    if column.missing:
        share = f"empty in {column.missing:,} of {column.rows:,} rows"
        lines.append(f'missing = "typical"  # {share}; the mean stands in, "fault" would drop the rows')
    return "\n".join(lines)


def _wide_range(low: float, high: float) -> tuple[str, str]:
    """The seen range, a tenth of its width wider on each side, in three digits of that width, outward."""
    least, most = Decimal(low), Decimal(high)
    margin = (most - least) / 10
    step = Decimal(1).scaleb((most - least).adjusted() - 2)
    ends = (((least - margin) / step, ROUND_FLOOR), ((most + margin) / step, ROUND_CEILING))
    return tuple(_plain(end.to_integral_value(rounding) * step) for end, rounding in ends)  # type: ignore[return-value]


def _plain(value: Decimal) -> str:
    """A TOML float: with a point or an exponent."""
    if not value:
        return "0.0"
    text = f"{value.normalize(Context(prec=60)):f}" if -7 < value.adjusted() < 16 else f"{value:e}"
    return text if "." in text or "e" in text.lower() else f"{text}.0"


_TAIL = """[prior]
sd = "cross-validation"  # chosen on the fitted rows

[decision]
cost_false_alarm = 1.0  # only the ratio of the two counts: put yours
cost_miss        = 1.0

[device]
arithmetic = "binary32"
# tolerance = 0.01  # the largest error allowed in the log-odds, anywhere in the ranges

[release]
write = ["python", "c", "onnx"]
"""


def _text(text: str) -> str:
    """A basic string of TOML 1.0: quotes, backslashes and what is not printable are escaped."""
    return '"' + "".join(c if c.isprintable() and c not in '"\\' else f"\\U{ord(c):08x}" for c in text) + '"'


def _comment(text: str) -> str:
    """Text of the file in a comment: on one line, and nothing that is not printable."""
    return "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)
