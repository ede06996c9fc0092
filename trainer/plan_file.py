"""The plan's file -> bytes -> TOML values, with numbers left as decimals.

Whatever the file holds, the answer comes at once: its size is limited, and no decimal is expanded here.
"""

from __future__ import annotations

import re
import sys
import tomllib
from decimal import Decimal
from pathlib import Path

from runtime_min.errors import PlanError, Problem
from trainer.plan_checks import Unreadable, shown

LARGEST_PLAN = 1_000_000
"""Bytes; a plan is written by hand."""


def plan_bytes(path: Path) -> bytes:
    try:
        with path.open("rb") as stream:
            content = stream.read(LARGEST_PLAN + 1)
    except FileNotFoundError:
        raise PlanError(Problem(str(path), "found no such file", "give the path of a plan")) from None
    except IsADirectoryError:
        raise PlanError(Problem(str(path), "found a folder", "give the path of a plan")) from None
    except OSError as error:
        raise PlanError(Problem(str(path), f"cannot be read ({error.strerror})", "make it readable")) from None
    except ValueError:
        raise PlanError(Problem(shown(str(path)), "found no path", "give the path of a plan")) from None
    if len(content) > LARGEST_PLAN:
        todo = "give a plan, and name the rows in it"
        raise PlanError(Problem(str(path), f"found more than {LARGEST_PLAN} bytes", todo))
    return content


def parsed(path: Path, content: bytes) -> dict[str, object]:
    where = str(path)
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise PlanError(Problem(f"{where}: line {line}", "found text that is not UTF-8", "save it as UTF-8")) from None
    try:
        return tomllib.loads(text, parse_float=_decimal)
    except tomllib.TOMLDecodeError as error:
        raise PlanError(Problem(where, f"found text that is not TOML: {error}", "correct it there")) from None
    except (ValueError, ArithmeticError):
        # Python refuses to read a whole number of more digits than this, and does not say where it stands.
        limit = sys.get_int_max_str_digits()
        long = re.search(rf"[0-9_]{{{limit + 1},}}", text)
        line = text.count("\n", 0, long.start()) + 1 if long else 1
        found = f"found a whole number of more than {limit} digits" if long else "found a number that cannot be read"
        raise PlanError(Problem(f"{where}: line {line}", found, "write a number of ordinary size")) from None
    except RecursionError:
        raise PlanError(Problem(where, "found brackets nested too deep", "write a plan of ordinary shape")) from None


def _decimal(text: str) -> Decimal | Unreadable:
    try:
        return Decimal(text)
    except ArithmeticError:
        return Unreadable(text)
