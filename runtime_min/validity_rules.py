"""What the checks of trained and sealed models share: one problem is (place, what was found, what to do)."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence

Found = tuple[str, str, str]
AGAIN = "take the file from the release again, or seal the trained model again"

EXACT_TEXT = 'a number as a text like "-95", "0.1" or "1/10"'
_EXACT = re.compile(r"-?[0-9]{1,2000}(?:/0*[1-9][0-9]{0,2000}|(?:\.[0-9]{1,2000})?(?:[eE][+-]?[0-9]{1,3})?)")


def is_exact(text: str | None) -> bool:
    """True for None and for what a Fraction reads at once; with an exponent of eight digits it would never return."""
    return text is None or bool(_EXACT.fullmatch(text))


def is_exact_above_zero(text: str | None) -> bool:
    """True for None and for an exact text of a number above 0."""
    return text is None or (is_exact(text) and text[0] != "-" and not is_zero(text))


def is_exact_from_zero(text: str | None) -> bool:
    """True for None and for an exact text of 0 or more; "-0" is none."""
    return text is None or (is_exact(text) and text[0] != "-")


def is_zero(text: str) -> bool:
    """Whether an exact text means 0."""
    return not re.split("[/eE]", text)[0].strip("-0.")


def shown(text: str | None) -> str:
    """A text as a message quotes it."""
    return "null" if text is None else f'"{text}"' if len(text) <= 60 else f'"{text[:57]}..."'


def class_problems(place: str, classes: Sequence[str], score_count: int) -> Iterator[Found]:
    """The names of the classes, and one log-odds for each but the first."""
    if len(classes) != 2:
        yield f"{place}.classes", f"found {len(classes)}", "this version takes two"
    yield from distinct(f"{place}.classes", classes, "a class")
    if score_count != len(classes) - 1:
        yield place, f"found {score_count} log-odds for {len(classes)} classes", "expected one a class after the first"


def distinct(place: str, names: Sequence[str], what: str) -> Iterator[Found]:
    """At least one name, and each of them once."""
    if not names:
        yield place, "found none", f"expected at least one {what.rpartition(' ')[2]}"
    for name in sorted({name for name in names if names.count(name) > 1}):
        yield place, f'found "{name}" twice', f"{what} stands once"


def digest_problems(place: str, digest: str | None) -> Iterator[Found]:
    """A SHA-256, or None."""
    if digest is not None and not re.fullmatch("[0-9a-f]{64}", digest):
        yield place, f"found {shown(digest)}", "expected a SHA-256 in 64 hexadecimal digits"
