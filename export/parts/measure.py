"""Bytes, stack and instructions or cycles of each function of the header, on an emulated part.

Each function is linked into a program that calls it, and into one that calls a function of the same type that returns
0; the difference is what the model costs, the compiler's own arithmetic included. A product that has floating point
anyway pays less.
"""

from __future__ import annotations

import subprocess
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from export.parts import Part
from export.parts.program import TYPES, compile_program, folder_of, program, row_bytes, run_program
from export.parts.run import FLAGS, SECONDS
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
    """What one program costs: bytes of program memory and of data memory, bytes of stack, count of each row."""

    text: int
    data: int
    stack: int
    row_counts: tuple[int, ...]


def measure(part: Part, header: bytes, sealed: SealedModel, rows: Sequence[Sequence[float]]) -> tuple[Measure, ...]:
    """The cost of each function, over the first rows; they should be within the limits. Raises TroubleError."""
    types = TYPES[sealed.arithmetic]
    results = {"log_odds": types.log_odds, "probability": types.probability, "decide": "int", "check_inputs": "int"}
    found = []
    for function in FUNCTIONS:
        of_type = results[function]
        asked = f'#include "model.h"\n#include <stdint.h>\n{of_type} call(const {types.input} *inputs);\n' + (
            f"{of_type} call(const {types.input} *inputs)\n{{\n    return {sealed.name}_{function}(inputs);\n}}\n"
        )
        cost = cost_beyond_none(part, {"model.h": header, "call.c": asked.encode()}, sealed, of_type, rows)
        counts = cost.row_counts
        found.append(
            Measure(part.name, function, cost.text, cost.data, cost.stack, part.counts, min(counts), max(counts))
        )
    return tuple(found)


def cost_beyond_none(
    part: Part, sources: dict[str, bytes], sealed: SealedModel, result: str, rows: Sequence[Sequence[float]]
) -> Cost:
    """The cost of `call` in these sources, beyond that of one that returns 0. The stack is that of the call itself."""
    types = TYPES[sealed.arithmetic]
    none = f"#include <stdint.h>\n{result} call(const {types.input} *inputs);\n" + (
        f"{result} call(const {types.input} *inputs)\n{{\n    (void)inputs;\n    return 0;\n}}\n"
    )
    with_it = _cost(part, sources, sealed, result, rows)
    without = _cost(part, {"call.c": none.encode()}, sealed, result, rows)
    counts = zip(with_it.row_counts, without.row_counts, strict=True)
    return Cost(
        with_it.text - without.text,
        with_it.data - without.data,
        with_it.stack,
        tuple(one - none for one, none in counts),
    )


def _cost(
    part: Part, sources: dict[str, bytes], sealed: SealedModel, result: str, rows: Sequence[Sequence[float]]
) -> Cost:
    texts = [row_bytes(row, sealed.arithmetic) for row in rows[:ROWS]]
    main = program("measure.c.jinja", sealed, rows=texts, count=len(texts), result=result, painted=PAINTED)
    with folder_of(part, {**sources, "measure.c": main}) as folder:
        compile_program(part, folder, FLAGS)
        text, data = _sizes(part, folder)
        stack, *ticks = (int(line, 16) for line in run_program(part, folder, SECONDS, counted=True))
    return Cost(text, data, stack, tuple(part.chain.counted(part, tick) for tick in ticks))


def _sizes(part: Part, folder: Path) -> tuple[int, int]:
    """Bytes of program memory (initial values of data included) and of data memory, as the toolchain's `size` says."""
    command = [part.tools[0].command.removesuffix("gcc") + "size", "program.elf"]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=30, check=True)
    text, data, bss = (int(word) for word in done.stdout.splitlines()[1].split()[:3])
    return text + data, data + bss
