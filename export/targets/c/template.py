"""Fill a template of this folder: C that reads like the file it makes.

In a template `name_` and `NAME_` stand for the model's name, `real` for the type of a number, and `r` after a literal
(`0.5r`) for its suffix; in integers `t_count` and `t_sum` for the types of inputs and of log-odds, `u_count` and
`u_sum` for the same without a sign. They are replaced in the template's own text, before any text of a model is put in.
The rest is Jinja2.
"""

from __future__ import annotations

import re
from functools import lru_cache
from pathlib import Path

from jinja2 import Environment, StrictUndefined, Template

from export.targets.c import lexical
from runtime_min.arithmetic import ACCUMULATOR_BITS
from runtime_min.integer_score import count_bits
from runtime_min.model import INTEGERS, SealedModel

HERE = Path(__file__).parent


def fill(parts: tuple[str, ...], sealed: SealedModel, **context: object) -> bytes:
    """The file that a template makes of a model, in ASCII. `parts`: the template's files, one after the other."""
    arithmetic = sealed.arithmetic
    name = lexical.model_name(sealed)
    text = "".join((HERE / part).read_text(encoding="ascii") for part in parts)
    text = re.sub(r"\bNAME_", f"{name.upper()}_", text)
    text = re.sub(r"\bname_", f"{name}_", text)
    for word, spelled in _types(sealed).items():
        text = re.sub(word, spelled, text)
    filled = _template(text).render(
        model=sealed,
        name=name,
        double=arithmetic == "binary64",
        number=lambda value: _number(value, arithmetic),
        decimal=lambda value: str(value) if arithmetic in INTEGERS else lexical.decimal_text(value, arithmetic),
        **context,
    )
    return filled.encode("ascii")


def _types(sealed: SealedModel) -> dict[str, str]:
    """What stands for a type, as a pattern, and its name in C."""
    if sealed.arithmetic not in INTEGERS:
        return {r"\breal\b": lexical.REAL[sealed.arithmetic], r"(?<=\d)r\b": lexical.SUFFIX[sealed.arithmetic]}
    widths = {"count": count_bits(sealed), "sum": ACCUMULATOR_BITS[sealed.arithmetic]}
    return {
        rf"\b{sign}_{what}\b": f"{c_name}{bits}_t"
        for sign, c_name in (("t", "int"), ("u", "uint"))
        for what, bits in widths.items()
    }


def _number(value: float, arithmetic: str) -> str:
    if arithmetic in INTEGERS:
        return lexical.integer(int(value), ACCUMULATOR_BITS[arithmetic])
    return lexical.number(value, arithmetic)


@lru_cache(maxsize=16)
def _template(text: str) -> Template:
    environment = Environment(
        undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True, keep_trailing_newline=True, autoescape=False
    )
    environment.filters["comment"] = lexical.comment
    environment.filters["comment_lines"] = lexical.comment_lines
    environment.filters["wrapped"] = lexical.wrapped
    return environment.from_string(text)
