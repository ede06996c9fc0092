"""Runs a generated module in a fresh interpreter that sees nothing else: no environment, site or current folder.

Rows go in and outputs come back as the bits of binary64, so that nothing is rounded on the way.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator, Sequence
from pathlib import Path

from export.targets import Output, Run
from export.targets.programs import run_program
from runtime_min.arithmetic import ROUND, from_bits, raw_bits
from runtime_min.model import SealedModel

TIME_LIMIT = 60.0  # seconds; a row takes microseconds

# What the interpreter is told to do: arguments are the module's path and its name. First line: id and self-test.
SCRIPT = """
import importlib.util, struct, sys
path, name, whole = sys.argv[1:]
spec = importlib.util.spec_from_file_location(name, path)
module = importlib.util.module_from_spec(spec)
spec.loader.exec_module(module)
def bits(x):
    return "%016x" % struct.unpack("<Q", struct.pack("<d", x))[0]
def number(text):
    x = struct.unpack("<d", struct.pack("<Q", int(text, 16)))[0]
    return int(x) if whole == "whole" and x == x // 1 and bits(x) != bits(-0.0) else x
print(module.MODEL_ID, int(module.self_test()))
for line in sys.stdin:
    row = [number(text) for text in line.split()]
    z, p = bits(module.log_odds(row)), bits(module.probability(row))
    print(int(module.check_inputs(row)), z, p, int(module.decide(row)))
"""

# What is printed of a run, the interpreter's options, and whether whole numbers are passed as int.
QUICK = (("CPython, fresh interpreter", (), "float"),)
THOROUGH = (
    *QUICK,
    ("CPython, optimised (-O)", ("-O",), "float"),
    ("CPython, whole numbers as int", (), "whole"),
)


def run(artefact: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool) -> Iterator[Run]:
    """Every row through every function of the module, once a way."""
    asked = "".join(" ".join(f"{_bits64(x):016x}" for x in row) + "\n" for row in rows)
    for what, options, numbers in THOROUGH if thorough else QUICK:
        command = [sys.executable, "-I", "-S", "-B", *options, "-c", SCRIPT, str(artefact), sealed.name, numbers]
        what = f"{what}, {sys.version_info.major}.{sys.version_info.minor}"
        done = run_program(command, TIME_LIMIT, asked.encode())
        if done.trouble:
            yield Run(what, True, f"did not finish ({done.trouble})", None, None, ())
            continue
        if done.status != 0:
            words = done.err.decode("utf-8", "replace").strip().splitlines()
            last = (words or [f"ended with status {done.status}"])[-1]
            yield Run(what, True, _printable(last), None, None, ())
            continue
        try:
            yield _read(what, sealed, done.out.decode("utf-8", "replace"), len(rows))
        except ValueError as error:
            yield Run(what, True, f"printed what is no output: {_printable(str(error))}", None, None, ())


def _read(what: str, sealed: SealedModel, printed: str, count: int) -> Run:
    first, *lines = printed.splitlines() or [""]
    model_id, code = first.split()
    if len(lines) != count:
        raise ValueError(f"{len(lines)} rows of {count}")
    outputs = tuple(_output(row, line.split(), sealed.arithmetic) for row, line in enumerate(lines))
    return Run(what, True, None, model_id, int(code), outputs)


def _output(row: int, fields: list[str], arithmetic: str) -> Output:
    fault, log_odds, probability, decision = fields
    bits = [_bits_of(text, arithmetic, row) for text in (log_odds, probability)]
    return Output(int(fault), (bits[0],), (bits[1],), int(decision))


def _bits_of(text: str, arithmetic: str, row: int) -> int:
    """The bits in the arithmetic of a number given by those in binary64, which must be the same number."""
    x = from_bits(int(text, 16), "binary64")
    if x == x and ROUND[arithmetic](x) != x:
        raise ValueError(f"row {row + 1}: {x!r} is not a {arithmetic} number")
    return raw_bits(x, arithmetic)


def _bits64(x: float) -> int:
    return raw_bits(float(x), "binary64")


def _printable(text: str) -> str:
    """An artefact's own words, cut, and without characters that act on a terminal."""
    return "".join(character if character.isprintable() else "?" for character in text[:400])
