"""Bytes, stack and instructions or cycles of each function of the header, on an emulated part.

Each function is linked into a program that calls it, and into one that calls a function of the same type that returns
0; the difference is what the model costs, the compiler's own arithmetic included. A product that has floating point
anyway pays less.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from export.parts import Part
from export.parts.program import (
    FLAGS,
    SECONDS,
    compile_program,
    folder_of,
    program,
    row_bytes,
    run_program,
    sizes,
    types_of,
)
from runtime_min.model import SealedModel

FUNCTIONS = ("log_odds", "probability", "decide", "check_inputs")
ROWS = 16
PAINTED = 640  # bytes of stack that are looked at


@dataclass(frozen=True)
class Measure:
    """What one function costs on one part. `text`: bytes of program memory; `data`: of data memory; `stack`: of stack.

    `least` and `most`: instructions or cycles (`counts` says which) over a few rows within the limits.
    """

    part: str
    function: str
    text: int
    data: int
    stack: int
    counts: str
    least: int
    most: int


@dataclass(frozen=True)
class Cost:
    """What a program costs: bytes of program memory, of data memory and of stack, each row's count; and its answers.

    An answer is the bits of what `call` returned, in hexadecimal digits.
    """

    text: int
    data: int
    stack: int
    row_counts: tuple[int, ...]
    answers: tuple[str, ...]


def measure(part: Part, header: bytes, sealed: SealedModel, rows: Sequence[Sequence[float]]) -> tuple[Measure, ...]:
    """The cost of each function, over the first rows; they should be within the limits. Raises TroubleError."""
    found = []
    for function in FUNCTIONS:
        cost = cost_of(part, {"model.h": header, "call.c": call_of(sealed, function)}, sealed, function, rows)
        least, most = min(cost.row_counts), max(cost.row_counts)
        found.append(Measure(part.name, function, cost.text, cost.data, cost.stack, part.counts, least, most))
    return tuple(found)


def result_type(sealed: SealedModel, function: str) -> str:
    """What a function of the header returns, in C."""
    types = types_of(sealed)
    return {"log_odds": types.log_odds, "probability": types.probability}.get(function, "int")


def call_of(sealed: SealedModel, function: str) -> bytes:
    """A C file whose `call` is a function of the header, model.h."""
    return _call(sealed, function, '#include "model.h"\n', f"{sealed.name}_{function}(inputs)")


def cost_of(
    part: Part, sources: dict[str, bytes], sealed: SealedModel, function: str, rows: Sequence[Sequence[float]]
) -> Cost:
    """The cost of `call` in these sources beyond that of one that returns 0; the stack is that of the call itself."""
    with_it = _cost(part, sources, sealed, function, rows)
    without = _cost(part, {"call.c": _call(sealed, function, "", "(void)inputs, 0")}, sealed, function, rows)
    counts = tuple(one - other for one, other in zip(with_it.row_counts, without.row_counts, strict=True))
    return replace(with_it, text=with_it.text - without.text, data=with_it.data - without.data, row_counts=counts)


def _call(sealed: SealedModel, function: str, include: str, result: str) -> bytes:
    prototype = f"{result_type(sealed, function)} call(const {types_of(sealed).input} *inputs)"
    return f"{include}#include <stdint.h>\n{prototype};\n{prototype}\n{{\n    return {result};\n}}\n".encode()


def _cost(
    part: Part, sources: dict[str, bytes], sealed: SealedModel, function: str, rows: Sequence[Sequence[float]]
) -> Cost:
    texts = [row_bytes(row, sealed) for row in rows[:ROWS]]
    result = result_type(sealed, function)
    main = program("measure.c.jinja", sealed, rows=texts, count=len(texts), result=result, painted=PAINTED)
    with folder_of(part, {**sources, "measure.c": main}) as folder:
        compile_program(part, folder, FLAGS)
        text, data = sizes(part, folder)
        stack, *lines = run_program(part, folder, SECONDS, counted=True)
    pairs = [line.split(" ") for line in lines]
    counts = tuple(part.chain.counted(part, int(ticks, 16)) for ticks, _ in pairs)
    return Cost(text, data, int(stack, 16), counts, tuple(answer for _, answer in pairs))
