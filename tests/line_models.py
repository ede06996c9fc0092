"""Small models whose every output follows by hand, and texts that try to leave the place where they are written.

`line_model`: z = -1 + x / 2 for x in [0, 8], with 3 as the typical value: all exact in both arithmetics. The threshold
is 1, so that x >= 4 is class 1. `level_model` adds 0, 0.25 or -2 for three levels to the constant -1, threshold -1.
"""

from __future__ import annotations

from dataclasses import replace

from models import Quantity, make_request, make_trained

from runtime_min.model import DecisionRequest, Score, SealedModel
from runtime_min.sealing import seal_request

HOSTILE = (
    '"""\nimport os\nPLANTED = 1\n"""',
    "'''\nPLANTED = 1",
    "ends in a backslash \\",
    '"; PLANTED = 1; "',
    "a\nPLANTED = 1",
    "a\rPLANTED = 1\x0b\x0c\x00\x1b[2J",
    "{{ 7 * 7 }} {% raw %} {# #} ${x} %s %(x)s {0}",
    "\u202e\u2066 right to left \u2028 \u2029 \u0085",
    "m³/h °C µ\U0001d54f",
    "\\u0022 \\N{QUOTATION MARK} \\x22",
    "# -*- coding: utf-7 -*-",
    "*/ PLANTED = 1; /*",
)


def line_model(arithmetic: str, *, outside: str = "fault", missing: str = "fault") -> SealedModel:
    """z = -1 + x / 2; see the module's text."""
    quantities = [Quantity("x", "m", "0", "8", outside=outside, missing=missing)]
    trained = make_trained(quantities, 1)
    trained = replace(
        trained,
        inputs=(replace(trained.inputs[0], typical=3.0),),
        terms=(replace(trained.terms[0], centre=0.0, scale=1.0),),
        scores=(Score(-1.0, (0.5,)),),
        witness=(),
    )
    decision = DecisionRequest(None, None, "1")
    return seal_request(trained, make_request(quantities, model="line", arithmetic=arithmetic, decision=decision))


def level_model(arithmetic: str, *, missing: str = "fault") -> SealedModel:
    """z = -1 + (0, 0.25 or -2); a missing level is level 2."""
    quantities = [Quantity("kind", levels=("a", "b", "c"), missing=missing)]
    trained = make_trained(quantities, 1)
    trained = replace(
        trained,
        inputs=(replace(trained.inputs[0], typical=2.0),),
        scores=(Score(-1.0, (0.25, -2.0)),),
        witness=(),
    )
    decision = DecisionRequest(None, None, "-1")
    return seal_request(trained, make_request(quantities, model="level", arithmetic=arithmetic, decision=decision))


def named_model(arithmetic: str, names: list[str]) -> SealedModel:
    """A model whose inputs have these names; every third has levels, policies differ."""
    quantities = [
        Quantity(name, levels=("a", "b"), missing=("fault", "typical")[position % 2])
        if position % 3 == 0
        else Quantity(name, "", "-3", str(position), outside=("fault", "clamp")[position % 2], missing="typical")
        for position, name in enumerate(names, start=1)
    ]
    return seal_request(make_trained(quantities, 7), make_request(quantities, model="named", arithmetic=arithmetic))


def with_text(sealed: SealedModel, text: str) -> SealedModel:
    """The same model with this text in every place where a plan's text may stand."""
    return replace(
        sealed,
        classes=(text, text + "1"),
        inputs=tuple(
            replace(entry, unit=text, levels=tuple(f"{text}{rank}" for rank in range(len(entry.levels))))
            for entry in sealed.inputs
        ),
        about=replace(sealed.about, purpose=text, tool=text),
    )
