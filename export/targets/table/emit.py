"""Sealed model -> the header of const data; `emit_beside` gives the same bytes as Intel HEX."""

from __future__ import annotations

import io
import re
from pathlib import Path

from jinja2 import Environment, StrictUndefined

from export.targets import SelfTest
from export.targets.c import lexical
from export.targets.table.layout import ID_BYTES, layout
from runtime_min.model import INTEGERS, SealedModel

HERE = Path(__file__).parent
NUMBER = {"binary32": "float", "binary64": "double", "int16": "int32_t", "int32": "int64_t"}
WORD = {"binary32": "uint32_t", "binary64": "uint64_t", "int16": "uint32_t", "int32": "uint64_t"}


def emit(sealed: SealedModel, self_test: SelfTest) -> bytes:
    """The header, in ASCII. Raises ReleaseError where the model's name is none that C takes."""
    name = lexical.model_name(sealed)
    text = (HERE / "table.h.jinja").read_text(encoding="ascii")
    text = re.sub(r"\bNAME_", f"{name.upper()}_", re.sub(r"\bname_", f"{name}_", text))
    text = re.sub(r"\bnumber (?=\{\{)", f"{NUMBER[sealed.arithmetic]} ", text)
    text = re.sub(r"\bword (?=crc)", f"{WORD[sealed.arithmetic]} ", text)
    environment = Environment(undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True, autoescape=False)
    environment.filters["comment"] = lexical.comment
    environment.filters["comment_lines"] = lexical.comment_lines
    filled = environment.from_string(text).render(
        model=sealed,
        name=name,
        guard=f"{name.upper()}_TABLE_H",
        layout=layout(sealed),
        id_bytes=ID_BYTES,
        model_id_bytes=[f"0x{byte:02X}" for byte in bytes.fromhex(sealed.model_id)],
        literal=lambda value: _literal(value, sealed.arithmetic),
    )
    return (filled.rstrip("\n") + "\n").encode("ascii")


def emit_beside(sealed: SealedModel) -> dict[str, bytes]:
    """The table's bytes as Intel HEX, an open format: at the plan's address, in the plan's byte order."""
    import bincopy

    table = layout(sealed)
    file = bincopy.BinFile()
    file.add_binary(io.BytesIO(table.data).getvalue(), address=table.placement.address)
    return {f"{sealed.name}.hex": file.as_ihex().encode("ascii")}


def _literal(value: float, arithmetic: str) -> str:
    """A number as C writes it. The least integer has no literal of its own type; no device number is that."""
    if arithmetic not in INTEGERS:
        return lexical.number(value, arithmetic)
    return f"INT64_C({int(value)})" if arithmetic == "int32" else f"INT32_C({int(value)})"
