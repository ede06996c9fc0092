"""The table of targets, and what the rest of the house knows of one: how to emit it and how to run it.

A target is a folder here: a template that looks like the artefact, `lexical` with the rules of its language, and
`runner`, which runs the artefact for a check. Adding a language is adding those three and a row in `TARGETS`.

An emitter is pure: it reads no clock, path, environment or file but its own template, and derives no model number.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from importlib import import_module
from pathlib import Path
from typing import cast

from runtime_min.model import SealedModel


@dataclass(frozen=True)
class Output:
    """What an artefact says of one row. Log-odds and probability are raw bits, one a class after the first.

    `fault` is what check_inputs returns, or -1 where the artefact does not say (then it is not compared); every NaN
    counts as the same bits (`runtime_min.arithmetic.raw_bits`).
    """

    fault: int
    log_odds: tuple[int, ...]
    probability: tuple[int, ...]
    decision: int


@dataclass(frozen=True)
class Vector:
    """One row of inputs, each a number of the model's arithmetic (or NaN, or infinite), and the exact output."""

    kind: str
    inputs: tuple[float, ...]
    expected: Output


@dataclass(frozen=True)
class SelfTest:
    """What an artefact carries to test itself: a few vectors, and the CRC-32 of its tables' bits.

    The CRC is CRC-32/ISO-HDLC over `runtime_min.validity.device_numbers` in their order, each number's bits least
    significant byte first.
    """

    vectors: tuple[Vector, ...]
    crc: int


# What self_test() of every artefact returns: 0, or the first thing that failed.
SELF_TEST_PASSED = 0
SELF_TEST_TABLES = 1  # the tables' CRC: the compiler read a number otherwise than it is written
SELF_TEST_ROUNDING = 2  # the operations do not round to nearest in this arithmetic
SELF_TEST_CONTRACTION = 3  # a product and a sum were fused into one rounding
SELF_TEST_SUBNORMALS = 4  # numbers near zero are flushed to zero
SELF_TEST_VECTOR = 100  # 100 + the position of the first vector whose output differs


@dataclass(frozen=True)
class Run:
    """One way of running an artefact, and what came of it.

    `ran` is False where a tool is missing; `trouble` then says what to install. Where it ran but broke (a compiler
    error or warning, a crash, a time-out, output that is none), `ran` is True and `trouble` says what happened.
    `outputs` is None where the artefact computes nothing and was read back instead.
    """

    what: str
    ran: bool
    trouble: str | None
    model_id: str | None
    self_test: int | None
    outputs: tuple[Output, ...] | None


Emit = Callable[[SealedModel, SelfTest], bytes]
EmitBeside = Callable[[SealedModel], dict[str, bytes]]
Runner = Callable[[Path, SealedModel, Sequence[Sequence[float]], bool], Iterator[Run]]


@dataclass(frozen=True)
class Target:
    """One row of the table: the artefact's file is the model's name and `ending`."""

    name: str
    ending: str
    arithmetics: tuple[str, ...]

    def file(self, sealed: SealedModel) -> str:
        """The artefact's file name."""
        return sealed.name + self.ending

    def emit(self, sealed: SealedModel, self_test: SelfTest) -> bytes:
        """The artefact. Pure: the same arguments give the same bytes."""
        return cast(Emit, import_module(f"export.targets.{self.name}.emit").emit)(sealed, self_test)

    def files(self, sealed: SealedModel, self_test: SelfTest) -> dict[str, bytes]:
        """The artefact and what goes beside it, by file name."""
        beside: EmitBeside = getattr(import_module(f"export.targets.{self.name}.emit"), "emit_beside", _nothing_beside)
        return {self.file(sealed): self.emit(sealed, self_test), **beside(sealed)}

    def run(
        self, artefact: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool
    ) -> Iterator[Run]:
        """Run the artefact on rows of inputs: a quick subset of ways, or (thorough) all of them."""
        return cast(Runner, import_module(f"export.targets.{self.name}.runner").run)(artefact, sealed, rows, thorough)


def _nothing_beside(sealed: SealedModel) -> dict[str, bytes]:
    return {}


TARGETS = {
    target.name: target
    for target in (
        Target("python", ".py", ("binary64", "binary32", "int16", "int32")),
        Target("c", ".h", ("binary64", "binary32", "int16", "int32")),
        Target("onnx", ".onnx", ("binary64", "binary32", "int16", "int32")),
        Target("table", "_table.h", ("binary64", "binary32", "int16", "int32")),
    )
}
WRITTEN_BY_DEFAULT = ("python", "c", "onnx")
