"""How Python writes a number, a string, a comment, a name: so that no text from a plan can become code.

What is written is ASCII. Text keeps its meaning as escapes: printed by `help` or read as a string it is what the plan
says; as source it can end no string, no docstring, no comment and no line, and turn no reading direction.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from fractions import Fraction

LINE_LENGTH = 100
INLINE_LENGTH = 70  # what is longer gets lines of its own


def number(value: float) -> str:
    """A finite binary64 number in its shortest decimal that reads back as the same bits.

    Raises ValueError for NaN and infinities: no device number is one.
    """
    if not math.isfinite(value):
        raise ValueError(f"no literal stands for {value}")
    return repr(float(value))


def integer(value: float) -> str:
    """A whole number in decimal. Raises ValueError for any other: in integers every device number is whole."""
    if value != int(value):
        raise ValueError(f"no whole number is {value}")
    return str(int(value))


def pair(value: Fraction) -> str:
    """A rational as a tuple of its numerator and denominator."""
    return f"({value.numerator}, {value.denominator})"


def value(x: float) -> str:
    """An input or output: a number, or one of the module's names NAN and INFINITY."""
    if math.isnan(x):
        return "NAN"
    if math.isinf(x):
        return "INFINITY" if x > 0 else "-INFINITY"
    return number(x)


def string(text: str) -> str:
    """`text` as a string literal."""
    return f'"{_escaped(text, also=chr(34))}"'


def docstring(text: str) -> str:
    """`text` for the inside of a docstring in three double quotes, on one line."""
    return _escaped(text, also='"')


def comment(text: str) -> str:
    """`text` for a comment, on one line."""
    return _escaped(text)


def constant(kind: str, input_name: str) -> str:
    """The module's name for one number of an input: constant("LOW", "suction") is "LOW_SUCTION".

    Distinct for distinct (kind, input_name): no kind holds an underscore, and no name of a plan a capital.
    """
    return f"{kind}_{input_name.upper()}"


def local(kind: str, input_name: str) -> str:
    """The functions' name for a value of an input: local("x", "suction") is "x_suction"; never a name of Python's."""
    return f"{kind}_{input_name}"


def target(names: Sequence[str], indent: int = 4) -> str:
    """Names to unpack into: "a, b", of one name "(a,)"; in brackets where that is too long for a line."""
    if len(names) == 1:
        return f"({names[0]},)"
    text = listed(names, indent)
    return f"({text})" if "\n" in text else text


def listed(entries: Iterable[str], indent: int = 4) -> str:
    """What stands between the brackets of a call or a tuple of several, in lines of its own where it is too long."""
    items = list(entries)
    text = ", ".join(items)
    if indent + len(text) <= INLINE_LENGTH:
        return text
    pad = "\n" + " " * (indent + 4)
    lines = [""]
    for item in items:
        if lines[-1] and indent + 4 + len(lines[-1]) + len(item) + 2 > LINE_LENGTH:
            lines.append("")
        lines[-1] += f" {item}," if lines[-1] else f"{item},"
    return pad + pad.join(lines) + "\n" + " " * indent


def _escaped(text: str, also: str = "") -> str:
    return "".join(_escape(character) if _unsafe(character, also) else character for character in text)


def _unsafe(character: str, also: str) -> bool:
    return not " " <= character <= "~" or character == "\\" or character in also


def _escape(character: str) -> str:
    code = ord(character)
    if " " <= character <= "~":
        return "\\" + character
    if code < 0x100:
        return f"\\x{code:02x}"
    return f"\\u{code:04x}" if code < 0x10000 else f"\\U{code:08x}"
