"""Runs a generated module in a fresh interpreter that sees nothing else: no environment, site or current folder.

Rows go in and outputs come back as the bits of binary64, so that nothing is rounded on the way.
Whole numbers of int16 and int32 pass as decimals.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator, Sequence
from pathlib import Path

from export.targets import Output, Run
from export.targets.programs import run_program
from runtime_min.arithmetic import ACCUMULATOR_BITS, ROUND, from_bits, raw_bits
from runtime_min.model import INTEGERS, SealedModel

TIME_LIMIT = 60.0  # seconds; a row takes microseconds

# What the interpreter is told to do: arguments are the module's path and name, and how numbers pass: as the bits of a
# float ("float"), whole ones as int ("whole"), or all of them whole ("count"; as float "count in a float"). First line:
# id and self-test.
SCRIPT = """
import importlib.util, struct, sys
path, name, kind = sys.argv[1:]
spec = importlib.util.spec_from_file_location(name, path)
module = importlib.util.module_from_spec(spec)
spec.loader.exec_module(module)
def bits(x):
    return "%016x" % struct.unpack("<Q", struct.pack("<d", x))[0]
def number(text):
    if kind.startswith("count"):
        return int(text) if kind == "count" else float(text)
    x = struct.unpack("<d", struct.pack("<Q", int(text, 16)))[0]
    return int(x) if kind == "whole" and x == x // 1 and bits(x) != bits(-0.0) else x
show = repr if kind.startswith("count") else bits
print(module.MODEL_ID, int(module.self_test()))
for line in sys.stdin:
    row = [number(text) for text in line.split()]
    z, p = show(module.log_odds(row)), show(module.probability(row))
    print(int(module.check_inputs(row)), z, p, int(module.decide(row)))
"""

# What is printed of a run, the interpreter's options, and how numbers pass.
QUICK = (("CPython, fresh interpreter", (), "float"),)
THOROUGH = (
    *QUICK,
    ("CPython, optimised (-O)", ("-O",), "float"),
    ("CPython, whole numbers as int", (), "whole"),
)
QUICK_INTEGERS = (("CPython, fresh interpreter", (), "count"),)
THOROUGH_INTEGERS = (
    *QUICK_INTEGERS,
    ("CPython, optimised (-O)", ("-O",), "count"),
    ("CPython, whole numbers as float", (), "count in a float"),
)


def run(artefact: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool) -> Iterator[Run]:
    """Every row through every function of the module, once a way."""
    integers = sealed.arithmetic in INTEGERS
    ways = (QUICK_INTEGERS, THOROUGH_INTEGERS) if integers else (QUICK, THOROUGH)
    asked = "".join(" ".join(str(int(x)) if integers else f"{_bits64(x):016x}" for x in row) + "\n" for row in rows)
    for what, options, numbers in ways[thorough]:
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
    if arithmetic in INTEGERS:
        bits = [_whole(log_odds, arithmetic, row), _whole(probability, arithmetic, row)]
    else:
        bits = [_bits_of(text, arithmetic, row) for text in (log_odds, probability)]
    return Output(int(fault), (bits[0],), (bits[1],), int(decision))


def _whole(text: str, arithmetic: str, row: int) -> int:
    """The bits of an int as printed, which the arithmetic's accumulator must hold."""
    try:
        value = int(text)
    except ValueError:
        raise ValueError(f"row {row + 1}: {text} is no int") from None
    bits = raw_bits(value, arithmetic)
    if from_bits(bits, arithmetic) != value:
        raise ValueError(f"row {row + 1}: {value} is beyond {ACCUMULATOR_BITS[arithmetic]} bits")
    return bits


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
