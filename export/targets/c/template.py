"""Fill a template of this folder: C that reads like the file it makes.

In a template `name_` and `NAME_` stand for the model's name, `real` for the type of a number, and `r` after a literal
(`0.5r`) for its suffix; they are replaced in the template's own text, before any text of a model is put in. The rest
is Jinja2.
"""

from __future__ import annotations

import re
from functools import lru_cache
from pathlib import Path

from jinja2 import Environment, StrictUndefined, Template

from export.targets.c import lexical
from runtime_min.model import SealedModel

HERE = Path(__file__).parent


def fill(parts: tuple[str, ...], sealed: SealedModel, **context: object) -> bytes:
    """The file that a template makes of a model, in ASCII. `parts`: the template's files, one after the other."""
    arithmetic = sealed.arithmetic
    name = lexical.model_name(sealed)
    text = "".join((HERE / part).read_text(encoding="ascii") for part in parts)
    text = re.sub(r"\bNAME_", f"{name.upper()}_", text)
    text = re.sub(r"\bname_", f"{name}_", text)
    text = re.sub(r"\breal\b", lexical.REAL[arithmetic], text)
    text = re.sub(r"(?<=\d)r\b", lexical.SUFFIX[arithmetic], text)
    filled = _template(text).render(
        model=sealed,
        name=name,
        double=arithmetic == "binary64",
        number=lambda value: lexical.number(value, arithmetic),
        decimal=lambda value: lexical.decimal_text(value, arithmetic),
        **context,
    )
    return filled.encode("ascii")


@lru_cache(maxsize=16)
def _template(text: str) -> Template:
    environment = Environment(
        undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True, keep_trailing_newline=True, autoescape=False
    )
    environment.filters["comment"] = lexical.comment
    environment.filters["comment_lines"] = lexical.comment_lines
    environment.filters["wrapped"] = lexical.wrapped
    return environment.from_string(text)
