"""One table of a plan, read key by key: every mistake becomes one sentence, and reading goes on.

A method that finds a mistake reports it and returns a stand-in of the right type. Nothing sees the stand-ins, because a
plan with a problem is never returned.
"""

from __future__ import annotations

import datetime
import difflib
import json
import math
from collections.abc import Iterable, Mapping, Sequence
from decimal import Decimal
from fractions import Fraction

from runtime_min.errors import Problem
from runtime_min.model import INTEGERS
from runtime_min.sealing import round_to

# Fraction(Decimal("1e30000000")) never returns; no measured quantity needs more than this.
LARGEST_EXPONENT = 400
MOST_DIGITS = 400
_LONGEST_SHOWN = 60
_NOTHING: Mapping[str, tuple[str, str]] = {}


class Unreadable(str):
    """A number in the file that even Decimal cannot hold, as it was written."""

    __slots__ = ()


class Section:
    """A table and where it stands; `problems` is shared by all sections of one plan."""

    def __init__(self, where: str, table: Mapping[str, object], problems: list[Problem]) -> None:
        self.where = where
        self.table = table
        self.problems = problems

    def report(self, key: str, found: str, todo: str) -> None:
        self.problems.append(Problem(f"{self.where}: {key}", found, todo))

    def refuse_other_keys(self, known: Iterable[str], later: Mapping[str, tuple[str, str]] = _NOTHING) -> None:
        """Report each key that is neither known nor ours, with the nearest one, and each that is `later`'s.

        `later`: key -> (what is not there yet, what to do instead).
        """
        ours = [*known, *later]
        for key in self.table:
            if key in later:
                what, todo = later[key]
                self.report(key, f"{what} not there yet", todo)
            elif key not in ours:
                near = difflib.get_close_matches(key, ours, n=1)
                todo = f"write {near[0]} if that is meant" if near else f"the keys here are {', '.join(ours)}"
                self.report(key if key.isprintable() else shown(key), "found an unknown key", todo)

    def section(self, key: str, mark: str = "") -> Section:
        """The table under `key`; an empty one if there is none. `mark`: what it is called where that is not [key]."""
        value = self.table.get(key, {})
        if not isinstance(value, dict):
            self.report(key, f"found {shown(value)}, not a table", "write it as a table, with keys and values")
            value = {}
        if not mark and self.where.endswith("]"):  # of a table: [release], [release.table]
            return Section(f"{self.where[:-1]}.{key}]", value, self.problems)
        return Section(f"{self.where}: {mark or f'[{key}]'}", value, self.problems)

    def text(self, key: str, default: str | None, todo: str = "write a text in quotes") -> str:
        """A text, empty only where `default` is; None: the key is needed."""
        value = self.table.get(key, default)
        if value is None:
            self.report(key, "found nothing", todo)
        elif not isinstance(value, str):
            self.report(key, f"found {shown(value)}, not a text", todo)
        elif default != "" and not value.strip():
            self.report(key, "found an empty text", todo)
        else:
            return value
        return ""

    def texts(self, key: str, todo: str) -> tuple[str, ...]:
        """A list of different texts, none of them empty; () if it is anything else."""
        value = self.table[key]
        if not isinstance(value, list):
            self.report(key, f"found {shown(value)}, not a list", todo)
            return ()
        before = len(self.problems)
        seen: set[str] = set()
        for text in value:
            if not isinstance(text, str):
                self.report(key, f"found {shown(text)}, not a text", "write it in quotes, as it stands in the file")
            elif not text.strip():
                self.report(key, "found an empty text", "name it: an empty field is a missing value")
            elif text in seen:
                self.report(key, f"found {shown(text)} twice", "name it once")
            else:
                seen.add(text)
        return tuple(value) if len(self.problems) == before else ()

    def choice(self, key: str, default: str, choices: Sequence[str]) -> str:
        value = self.table.get(key, default)
        if isinstance(value, str) and value in choices:
            return value
        self.report(key, f"found {shown(value)}", f"write {either(choices)}")
        return default

    def number(self, key: str, default: Fraction, todo: str = "write a number") -> Fraction:
        """The number under `key`, exactly as its decimals say."""
        value = exact(self.table[key]) if key in self.table else default
        if isinstance(value, Fraction):
            return value
        self.report(key, value, todo)
        return default

    def positive(self, key: str, default: Fraction) -> Fraction:
        todo = "write a number above 0"
        value = self.number(key, default, todo)
        if not value > 0:
            self.report(key, f"found {decimal_text(value)}", todo)
        return value


def exact(value: object) -> Fraction | str:
    """A TOML number as a Fraction, or what was found instead ("found …"). Answers at once, whatever the number."""
    if isinstance(value, Unreadable):
        return _too_large(value)
    if isinstance(value, Decimal):
        if not value.is_finite():
            return f"found {shown(value)}, which is not finite"
        if abs(value.adjusted()) > LARGEST_EXPONENT:
            return _too_large(str(value))
        digits = len(value.as_tuple().digits)
        return Fraction(value) if digits <= MOST_DIGITS else _too_long(digits)
    if isinstance(value, int) and not isinstance(value, bool):
        digits = int(value.bit_length() * math.log10(2)) + 1
        return Fraction(value) if digits <= MOST_DIGITS else _too_long(digits)
    return f"found {shown(value)}, not a number"


def range_problem(
    low: Fraction, high: Fraction, arithmetic: str, origin: Fraction = Fraction(0)
) -> tuple[str, str] | None:
    """(found, what to do) where an input's range has no width in the device's arithmetic or leaves it; else None.

    The device delivers value - origin. In integers the range itself sets the scaling: any width will do.
    """
    if low > high:
        return f"found {decimal_text(low)} before {decimal_text(high)}", "put the lower limit first"
    if low == high:
        return f"found {decimal_text(low)} twice, a range without width", "write two different limits"
    delivered = "binary64" if arithmetic in INTEGERS else arithmetic
    rounded = [round_to(delivered, limit - origin) for limit in (low, high)]
    for limit, number in zip((low, high), rounded, strict=True):
        if not math.isfinite(number):
            return f"found {decimal_text(limit)}, too large for {delivered}", "write a limit that the device can hold"
    if not rounded[0] < rounded[1]:
        return (
            f"found {decimal_text(low)} and {decimal_text(high)}, one and the same number in {delivered}",
            "write limits farther apart",
        )
    return None


def decimal_text(value: Fraction) -> str:
    """`value` as a reader wants it: 250, -0.05, 1e+30."""
    try:
        text = repr(float(value))
    except OverflowError:
        return f"{Decimal(value.numerator) / Decimal(value.denominator):.6g}"
    return text.removesuffix(".0")


def either(choices: Sequence[str]) -> str:
    """ "a", "b" or "c"."""
    quoted = [f'"{choice}"' for choice in choices]
    return " or ".join([", ".join(quoted[:-1]), quoted[-1]]) if len(quoted) > 1 else quoted[0]


def listed(texts: Iterable[str]) -> str:
    """ "a", "b", "c": at most five of them, and how many more."""
    texts = list(texts)
    more = f" and {len(texts) - 5} more" if len(texts) > 5 else ""
    return ", ".join(shown(text) for text in texts[:5]) + more


def shown(value: object) -> str:
    """What a file holds, in one short line."""
    if isinstance(value, str) and not isinstance(value, Unreadable):
        quoted = json.dumps(shortened(value), ensure_ascii=False)
        return quoted if quoted.isprintable() else "".join(map(_printable, quoted))
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value) if value.bit_length() < 128 else "a very long integer"
    if isinstance(value, Decimal):
        return {"Infinity": "inf", "-Infinity": "-inf", "NaN": "nan"}.get(str(value), shortened(str(value)))
    if isinstance(value, datetime.date | datetime.time):
        return f"the {'time' if isinstance(value, datetime.time) else 'date'} {value}"
    if isinstance(value, list):
        return f"a list of {len(value)}"
    return "a table" if isinstance(value, dict) else shortened(str(value))


def _printable(character: str) -> str:
    return character if character.isprintable() else json.dumps(character)[1:-1].replace("\x7f", "\\u007f")


def shortened(text: str) -> str:
    return text if len(text) <= _LONGEST_SHOWN else text[: _LONGEST_SHOWN - 1] + "…"


def _too_large(text: str) -> str:
    return f"found {shortened(text)}, whose exponent is beyond the {LARGEST_EXPONENT} that a plan may use"


def _too_long(digits: int) -> str:
    return f"found a number of {digits} digits, more than {MOST_DIGITS}"
