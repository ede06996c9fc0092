"""How C writes a number, a word of bits, a comment and a name, so that no text from a plan can become code.

Everything written is printable ASCII: compilers disagree on other characters in names and comments, and some of them
(right-to-left marks) make code read otherwise than it compiles.
"""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Sequence
from decimal import Decimal
from fractions import Fraction

from runtime_min.arithmetic import raw_bits
from runtime_min.errors import Problem, ReleaseError
from runtime_min.model import SealedModel
from runtime_min.names import c_position_name, name_problem
from runtime_min.sealing import round_to

LINE_WIDTH = 110
REAL = {"binary32": "float", "binary64": "double"}
SUFFIX = {"binary32": "f", "binary64": ""}
MOST_DIGITS = {"binary32": 9, "binary64": 17}  # enough to tell all numbers apart (IEEE 754-2019, 5.12.2)

# Characters that units and names are full of, as they are commonly typed where only ASCII will do.
_TYPED = str.maketrans(
    {"⁰": "^0", "¹": "^1", "²": "^2", "³": "^3", "°": "deg ", "µ": "u", "μ": "u", "Ω": "Ohm", "·": "*", "×": "x"}
    | {"–": "-", "—": "-", "−": "-", "‘": "'", "’": "'", "“": '"', "”": '"', "…": "...", "\u00a0": " "}
    | {"\n": " ", "\r": " ", "\t": " "}
)


def decimal_text(value: float, arithmetic: str) -> str:
    """The shortest correctly rounded decimal that reads back as `value` in the arithmetic: "0.1", "-95.0", "1e-30"."""
    if not math.isfinite(value):
        raise ValueError(f"C has no literal for {value!r}")
    for digits in range(1, MOST_DIGITS[arithmetic] + 1):
        text = f"{value:.{digits - 1}e}"
        if round_to(arithmetic, Fraction(Decimal(text))) == value:
            # Python's repr of a decimal with at most 17 digits that it reads back: the same digits, without padding.
            plain = repr(float(text))
            return plain if Decimal(plain) == Decimal(text) else text
    raise ValueError(f"{value!r} is not a {arithmetic} number")


def number(value: float, arithmetic: str) -> str:
    """The literal of a finite number of the arithmetic; never a hexadecimal one, which older C++ refuses."""
    return decimal_text(value, arithmetic) + SUFFIX[arithmetic]


def integer(value: int, bits: int) -> str:
    """The literal of a signed integer of so many bits. The least has none: C negates a number that is too large."""
    return f"-{(1 << (bits - 1)) - 1} - 1" if value == -(1 << (bits - 1)) else str(value)


def words(value: float, arithmetic: str) -> list[str]:
    """The bits of a number, NaN and infinities included, as literals of 32 bits, least significant word first."""
    bits = raw_bits(value, arithmetic)
    return words_of_bits(bits, arithmetic)


def words_of_bits(bits: int, arithmetic: str) -> list[str]:
    """The same for bits that are there already."""
    count = 1 if arithmetic == "binary32" else 2
    return [f"0x{bits >> 32 * k & 0xFFFFFFFF:08X}UL" for k in range(count)]


def comment(text: str) -> str:
    """`text` for the inside of a comment: it can neither end nor open one, nor be a trigraph or splice lines.

    Whatever could, and every character that is not printable ASCII, is written as an escape: \\x2f, \\u202e.
    """
    text = text.translate(_TYPED)
    # A backslash could end its line; of "*/", "/*" and "??" the second character is escaped.
    return re.sub(r"\\|(?<=\*)/|(?<=/)\*|(?<=\?)\?|[^ -~]", lambda match: _escape(match[0]), text).strip()


def comment_lines(text: str, prefix: str = " * ") -> str:
    """`comment(text)`, broken into lines that each start with `prefix`; a word that is too long keeps its line."""
    lines = textwrap.wrap(comment(text), LINE_WIDTH - len(prefix), break_long_words=False, break_on_hyphens=False)
    return "\n".join((prefix + line).rstrip() for line in lines or [""])


def wrapped(items: Sequence[str], first: str, other: str) -> str:
    """A list of literals, separated by commas, broken into lines between items; `first` and `other` begin them."""
    whole = ", ".join(item.replace(" ", "\0") for item in items)
    return textwrap.fill(whole, LINE_WIDTH, initial_indent=first, subsequent_indent=other).replace("\0", " ")


def table(cells: list[str], labels: list[str]) -> str:
    """The rows of a table, one a line, each with its label in a comment."""
    ended = [cell + "," for cell in cells[:-1]] + cells[-1:]
    width = max(len(cell) for cell in ended)
    return "\n".join(f"    {cell:{width}} /* {comment(label)} */" for cell, label in zip(ended, labels, strict=True))


def input_names(sealed: SealedModel) -> list[str]:
    """The enumerator of each input after MODEL_IN_. No two are the same: a sealed model is valid only so."""
    return [c_position_name(entry) for entry in sealed.inputs]


def model_name(sealed: SealedModel) -> str:
    """The prefix of every name. Raises ReleaseError where it is none that C and C++ take."""
    problem = name_problem(sealed.name)
    if problem:
        raise ReleaseError(Problem("model", problem, "seal the model again under another name"))
    return sealed.name


def _escape(character: str) -> str:
    code = ord(character)
    if code <= 0xFF:
        return f"\\x{code:02x}"
    return f"\\u{code:04x}" if code <= 0xFFFF else f"\\U{code:08x}"
