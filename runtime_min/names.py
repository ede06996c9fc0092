"""The names that a plan may use, and the spelling that they take in C.

A plan's name goes into Python, C and C++ unchanged, so it must be an identifier in all three, and no keyword in any.
In C an input's position is an enumerator, `MODEL_IN_` followed by `c_position_name`: `PUMP_IN_FLOW_M3_PER_H`. It says
what the device delivers: `PUMP_IN_SUCTION_KPA_ABOVE_101_325`, `PUMP_IN_LEVEL_COUNTS`.
"""

from __future__ import annotations

import re
import unicodedata
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from fractions import Fraction

    from runtime_min.model import Input, InputRequest

# C99 5.2.4.1: a compiler need only tell apart the first 63 characters of an internal identifier.
LONGEST_NAME = 63

LONGEST_DECIMAL = 24

NAME_RULE = f"write lower-case letters, digits and single underscores, from a letter on, at most {LONGEST_NAME}"

# Python 3.13 reference, 2.3.1; the names that start with a capital cannot be plan names and are left out.
_PYTHON_KEYWORDS = """
    and as assert async await break class continue def del elif else except finally for from global if import in is
    lambda nonlocal not or pass raise return try while with yield
"""

# ISO C23, 6.4.1, which contains those of C99; names with a leading underscore cannot be plan names.
_C_KEYWORDS = """
    alignas alignof auto bool break case char const constexpr continue default do double else enum extern false float
    for goto if inline int long nullptr register restrict return short signed sizeof static static_assert struct switch
    thread_local true typedef typeof typeof_unqual union unsigned void volatile while
"""

# ISO C++23, [lex.key] and the alternative tokens of [lex.digraph].
_CPP_KEYWORDS = """
    alignas alignof and and_eq asm auto bitand bitor bool break case catch char char8_t char16_t char32_t class compl
    concept const consteval constexpr constinit const_cast continue co_await co_return co_yield decltype default delete
    do double dynamic_cast else enum explicit export extern false float for friend goto if inline int long mutable
    namespace new noexcept not not_eq nullptr operator or or_eq private protected public register reinterpret_cast
    requires return short signed sizeof static static_assert static_cast struct switch template this thread_local throw
    true try typedef typeid typename union unsigned using virtual void volatile wchar_t while xor xor_eq
"""

# What the Python artefact imports: an artefact of that name would import itself.
_IMPORTED = ("math", "struct")

# Headers of a release that are called the same whatever the model.
_FILES = ("vectors",)

_LANGUAGES = (
    ("Python", frozenset(_PYTHON_KEYWORDS.split())),
    ("C", frozenset(_C_KEYWORDS.split())),
    ("C++", frozenset(_CPP_KEYWORDS.split())),
)
_NAME = re.compile(r"[a-z][a-z0-9_]*")
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹", "0123456789")
# MICRO SIGN and GREEK SMALL LETTER MU look alike, and both are typed.
_UNIT_WORDS = (
    ("/", "_PER_"),
    ("°", "DEG_"),
    ("%", "PERCENT"),
    ("\N{MICRO SIGN}", "U"),
    ("\N{GREEK SMALL LETTER MU}", "U"),
)
_HEADER = re.compile(r"(?P<name>.*\S)\s*(?:\[(?P<square>[^\[\]]*)\]|\((?P<round>[^()]*)\))\s*", re.DOTALL)


def name_problem(name: str) -> str | None:
    """What is wrong with `name` as the name of a model or an input, as a phrase ("found …"), or None; see NAME_RULE."""
    if len(name) > LONGEST_NAME:
        return f"found a name of {len(name)} characters"
    if not _NAME.fullmatch(name):
        return f'found "{_printable(name)}", which is not an identifier of lower-case letters'
    if "__" in name:
        return f'found "{name}", whose double underscore is reserved in C++'
    if name.endswith("_"):
        # MODEL + "_IN_…" and INPUT + "_UNIT" would hold a double underscore.
        return f'found "{name}", whose last underscore would be doubled in C'
    languages = [language for language, keywords in _LANGUAGES if name in keywords]
    if languages:
        return f'found "{name}", a keyword of {" and ".join(languages)}'
    if name in _IMPORTED:
        return f'found "{name}", a module that the Python artefact imports'
    return None


def model_name_problem(name: str) -> str | None:
    """What is wrong with `name` as the name of a model, as `name_problem` says it: it also names files."""
    if name in _FILES:
        return f'found "{name}", whose header would take the place of {name}.h'
    return name_problem(name)


def unit_suffix(unit: str) -> str:
    """`unit` in the letters that an enumerator may hold: "m³/h" is "M3_PER_H", "°C" is "DEG_C", no unit is "".

    Superscripts become digits, "/" "_PER_", "°" "DEG_", "%" "PERCENT", "µ" "U"; any other character is dropped.
    """
    text = unit.translate(_SUPERSCRIPTS)
    for character, word in _UNIT_WORDS:
        text = text.replace(character, word)
    text = re.sub(r"[^A-Za-z0-9_]", "", text).upper()
    return re.sub(r"__+", "_", text).strip("_")


def c_input_name(name: str, unit: str) -> str:
    """What follows `MODEL_IN_` for an input: "flow" in "m3/h" is "FLOW_M3_PER_H"; without a unit, "FLOW"."""
    suffix = unit_suffix(unit)
    return f"{name.upper()}_{suffix}" if suffix else name.upper()


def c_position_name(entry: Input | InputRequest) -> str:
    """What follows `MODEL_IN_` for an input as the device delivers it: with an origin, or as counts, it says so.

    "suction" in "kPa" above 101.325 is "SUCTION_KPA_ABOVE_101_325", above -40 "SUCTION_KPA_ABOVE_MINUS_40"; as counts
    it is "SUCTION_COUNTS".
    """
    if entry.counts is not None:
        return f"{entry.name.upper()}_COUNTS"
    name = c_input_name(entry.name, entry.unit)
    if entry.origin is None:
        return name
    words = exact_decimal(_fraction(entry.origin)).upper()
    for sign, word in (("E-", "E_MINUS_"), ("-", "MINUS_"), (".", "_"), ("/", "_OVER_")):
        words = words.replace(sign, word)
    return f"{name}_ABOVE_{words}"


def delivered_unit(entry: Input | InputRequest) -> str:
    """What the device delivers, in words: "kPa", "kPa above 101.325", "counts of 0.1 kPa from -95"; "" for no unit."""
    if entry.counts is not None:
        gain, offset = (exact_decimal(_fraction(text)) for text in (entry.counts.gain, entry.counts.offset))
        return f"counts of {gain} {entry.unit}".rstrip() + f" from {offset}"
    if entry.origin is None:
        return entry.unit
    return f"{entry.unit} above {exact_decimal(_fraction(entry.origin))}".lstrip()


def exact_decimal(value: Fraction) -> str:
    """`value` without rounding: as a decimal where it has one ("101.325", very long ones as "1e-30"), else "1/3"."""
    rest, twos, fives = value.denominator, 0, 0
    while rest % 2 == 0:
        rest, twos = rest // 2, twos + 1
    while rest % 5 == 0:
        rest, fives = rest // 5, fives + 1
    if rest != 1:
        return str(value)
    places = max(twos, fives)
    digits = str(abs(value.numerator) * 10**places // value.denominator).rjust(places + 1, "0")
    sign = "-" if value < 0 else ""
    if len(digits) <= LONGEST_DECIMAL:
        return sign + digits[: len(digits) - places] + ("." + digits[-places:] if places else "")
    digits = digits.lstrip("0")
    exponent = len(digits) - 1 - places
    digits = digits.rstrip("0")
    return f"{sign}{digits[0]}{'.' if digits[1:] else ''}{digits[1:]}e{exponent}"


def _fraction(text: str) -> Fraction:
    from fractions import Fraction  # loading a model without origins needs no rationals

    return Fraction(text)


def name_and_unit(header: str) -> tuple[str, str]:
    """A name and a unit from a column's header: "Motor current [A]" is ("motor_current", "A").

    The unit is what stands last, in brackets. The name is not certain to be free of problems: ask `name_problem`.
    """
    match = _HEADER.fullmatch(header)
    words, unit = (match["name"], (match["square"] or match["round"] or "").strip()) if match else (header, "")
    plain = unicodedata.normalize("NFKD", words).encode("ascii", "ignore").decode()
    return re.sub(r"[^a-z0-9]+", "_", plain.lower()).strip("_"), unit


def _printable(text: str) -> str:
    return "".join(character if character.isprintable() else "\N{REPLACEMENT CHARACTER}" for character in text)
