"""Canonical JSON by RFC 8785: one text for one value, so that a hash of the text is a hash of the value."""

from __future__ import annotations

import math
from typing import Any

_SHORT = {'"': '\\"', "\\": "\\\\", "\b": "\\b", "\t": "\\t", "\n": "\\n", "\f": "\\f", "\r": "\\r"}
LARGEST_PLAIN_INTEGER = 2**53


def canonical(value: Any) -> str:
    """The canonical text of None, bool, int, float, str, list, tuple, or dict with str keys.

    Integers beyond 2^53 become decimal strings; −0 is written as 0. Raises ValueError for what is not finite.
    """
    if value is None:
        return "null"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value) if abs(value) <= LARGEST_PLAIN_INTEGER else f'"{value}"'
    if isinstance(value, float):
        return _number(value)
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, (list, tuple)):
        return "[" + ",".join(canonical(entry) for entry in value) + "]"
    if isinstance(value, dict):
        # RFC 8785 section 3.2.3: keys in the order of their UTF-16 code units.
        keys = sorted(value, key=lambda key: key.encode("utf-16-be", "surrogatepass"))
        return "{" + ",".join(_text(key) + ":" + canonical(value[key]) for key in keys) + "}"
    raise ValueError(f"JSON has no form for {type(value).__name__}")


def _text(text: str) -> str:
    text.encode("utf-8")  # a lone surrogate has no canonical form: UnicodeEncodeError is a ValueError
    return '"' + "".join(_SHORT.get(c) or (c if c >= " " else f"\\u{ord(c):04x}") for c in text) + '"'


def _number(value: float) -> str:
    """ECMAScript's Number::toString, laid out from the shortest digits that Python's repr finds."""
    if not math.isfinite(value):
        raise ValueError(f"JSON has no form for {value}")
    if value == 0:
        return "0"
    sign = "-" if value < 0 else ""
    mantissa, _, exponent = repr(abs(value)).partition("e")
    whole, _, part = mantissa.partition(".")
    digits = (whole + part).lstrip("0")
    point = len(whole) + int(exponent or 0) - (len(whole + part) - len(digits))  # value = 0.digits * 10^point
    digits = digits.rstrip("0")
    count = len(digits)
    if count <= point <= 21:
        return sign + digits + "0" * (point - count)
    if 0 < point <= 21:
        return sign + digits[:point] + "." + digits[point:]
    if -6 < point <= 0:
        return sign + "0." + "0" * -point + digits
    scientific = digits[0] + ("." + digits[1:] if count > 1 else "")
    return f"{sign}{scientific}e{'+' if point > 0 else '-'}{abs(point - 1)}"
