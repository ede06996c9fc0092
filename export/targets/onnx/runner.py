"""Runs the graph in ONNX Runtime, in a process of its own: a damaged graph can stop that, and no more.

First the checker of the onnx package must take the file, shapes and types included. Each way of running is judged on
all rows; in each, a batch of none and a batch of one must work too. A graph cannot test itself, so the runner stands in
for one part: where a number in the file is not the sealed model's, the self-test is SELF_TEST_TABLES, even if no row
shows it; otherwise there is none.
"""

from __future__ import annotations

import importlib.util
import json
import sys
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import onnx
from onnx import ModelProto

from export.targets import SELF_TEST_TABLES, Output, Run
from export.targets.onnx.emit import model
from export.targets.onnx.session import short
from export.targets.programs import run_program
from runtime_min.arithmetic import raw_bits
from runtime_min.model import SealedModel

TIME_LIMIT = 120.0  # seconds, of all ways together
# Inputs, log_odds and probability.
ELEMENTS = {
    "binary32": ("<f4", "<f4", "<f4"),
    "binary64": ("<f8", "<f8", "<f8"),
    "int16": ("<i4", "<i4", "<i4"),
    "int32": ("<i4", "<i8", "<i4"),
}
DOES_NOT_SAY = -1  # Output.fault: the graph has no check_inputs


@dataclass(frozen=True)
class Way:
    """One session: optimisation level by its name in ONNX Runtime, threads, all rows at once or one at a time."""

    what: str
    level: str
    threads: int = 1
    one_at_a_time: bool = False


QUICK = (
    Way("optimisation off", "ORT_DISABLE_ALL"),
    Way("optimisation on", "ORT_ENABLE_ALL"),
)
THOROUGH = (
    *QUICK,
    Way("optimisation basic", "ORT_ENABLE_BASIC"),
    Way("optimisation extended", "ORT_ENABLE_EXTENDED"),
    Way("optimisation on, 2 threads", "ORT_ENABLE_ALL", threads=2),
    Way("optimisation off, one row at a time", "ORT_DISABLE_ALL", one_at_a_time=True),
    Way("optimisation on, one row at a time", "ORT_ENABLE_ALL", one_at_a_time=True),
)


def run(artefact: Path, sealed: SealedModel, rows: Sequence[Sequence[float]], thorough: bool) -> Iterator[Run]:
    """Every row through the graph, once a way. Output.fault is -1: the graph does not say which input is at fault."""
    if importlib.util.find_spec("onnxruntime") is None:
        yield Run("ONNX Runtime", False, "ONNX Runtime is not installed: pip install onnxruntime", None, None, ())
        return
    try:
        graph = onnx.load(artefact)
        onnx.checker.check_model(graph, full_check=True)
    except Exception as error:  # the parser's, the checker's and the shape inference's own kinds
        yield Run("onnx.checker", True, short(str(error)) or type(error).__name__, None, None, ())
        return
    code = None if _numbers(graph) == _numbers(model(sealed)) else SELF_TEST_TABLES
    kinds = ELEMENTS[sealed.arithmetic]
    with np.errstate(over="ignore"):
        table = np.array(rows, dtype=kinds[0]).reshape(len(rows), len(sealed.inputs))
    ways = THOROUGH if thorough else QUICK
    asked = {
        "path": sys.path,
        "model": str(artefact),
        "kinds": [*kinds, "<i8"],
        "shape": table.shape,
        "rows": table.tobytes().hex(),
        "ways": [asdict(way) for way in ways],
    }
    command = [sys.executable, "-I", "-B", str(Path(__file__).with_name("session.py"))]
    done = run_program(command, TIME_LIMIT, json.dumps(asked).encode())
    last = done.err.decode(errors="replace").strip().splitlines()[-1:]
    if done.trouble:
        trouble = f"did not finish ({done.trouble})"
    else:
        trouble = short(last[0]) if last else f"ended with status {done.status}"
    lines = done.out.split(b"\n")[:-1]  # what follows the last line end was cut off
    for position, way in enumerate(ways):
        what = f"ONNX Runtime, {way.what}"
        if position >= len(lines):
            yield Run(what, True, trouble, None, None, ())
            return
        yield _read(what, sealed, json.loads(lines[position]), len(rows), code)


def _numbers(graph: ModelProto) -> dict[str, bytes]:
    return {tensor.name: tensor.raw_data for tensor in graph.graph.initializer}


def _read(what: str, sealed: SealedModel, said: dict[str, Any], count: int, code: int | None) -> Run:
    what = f"{what}, {said['version']}"
    if said["trouble"] is not None:
        return Run(what, True, said["trouble"], said["model_id"], None, ())
    _, *kinds = ELEMENTS[sealed.arithmetic]
    log_odds, probability = (
        np.frombuffer(bytes.fromhex(said[name]), kind).tolist()
        for name, kind in zip(("log_odds", "probability"), kinds, strict=True)
    )
    decision = np.frombuffer(bytes.fromhex(said["decision"]), "<i8")
    outputs = tuple(
        Output(
            DOES_NOT_SAY,
            (raw_bits(log_odds[row], sealed.arithmetic),),
            (raw_bits(probability[row], sealed.arithmetic),),
            int(decision[row]),
        )
        for row in range(count)
    )
    return Run(what, True, None, said["model_id"], code, outputs)
