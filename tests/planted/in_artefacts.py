"""Mistakes in the files that a device runs. Digests are made right and bytes are not compared: running finds them."""

from __future__ import annotations

import re
import struct
from collections.abc import Callable

import numpy as np
import onnx

from export.vector_files import decimal_text
from planted import Planted
from planted.bench import NAME, Bench, Edit
from runtime_min.codec import load
from runtime_min.model import SealedModel


def neighbour(literal: str) -> str:
    """The next binary32 number's decimal."""
    value = np.float32(float(literal))
    return decimal_text(float(np.nextafter(value, np.float32(np.inf))), "binary32")


def table_entry(table: str, position: int, change: Callable[[str], str]) -> Edit:
    """Change one literal of a C table."""

    def edit(text: str) -> str:
        start = text.index("{", text.index(f"{NAME}_{table}[")) + 1
        end = text.index("}", start)
        literals = list(re.finditer(r"-?\d+\.\d*(?:e[-+]?\d+)?(?=f)", text[start:end]))
        found = literals[position]
        return text[: start + found.start()] + change(found.group()) + text[start + found.end() :]

    return edit


def swapped(text: str) -> str:
    """The first two weights of the C table change places."""
    start = text.index("{", text.index(f"{NAME}_weight[")) + 1
    first, second = list(re.finditer(r"-?\d+\.\d*(?:e[-+]?\d+)?(?=f)", text[start:]))[:2]
    a, b = text[start + first.start() : start + first.end()], text[start + second.start() : start + second.end()]
    middle = text[start + first.end() : start + second.start()]
    return text[: start + first.start()] + b + middle + a + text[start + second.end() :]


def replaced(old: str, new: str) -> Edit:
    """Replace every match of a pattern, which must be there."""

    def edit(text: str) -> str:
        assert re.search(old, text), f"{old} is not in the artefact"
        return re.sub(old, new, text)

    return edit


def last_bit_in_python(text: str) -> str:
    """The next binary32 number, in the decimal that Python writes."""
    pattern = r"(?<=\nWEIGHT_FLOW = )\S+"
    return re.sub(pattern, lambda m: repr(float(np.nextafter(np.float32(float(m[0])), np.float32(np.inf)))), text)


def six_digits(text: str) -> str:
    """Every literal of the tables to six significant digits, as printf's %g would write it."""
    start, end = text.index(f"{NAME}_low["), text.index("name_round" if "name_round" in text else f"{NAME}_round(")
    tables = re.sub(r"(-?\d+\.\d*(?:e[-+]?\d+)?)f", lambda m: f"{float(m.group(1)):#.6g}f", text[start:end])
    return text[:start] + tables + text[end:]


def contracted(text: str) -> str:
    """The barrier between product and sum is taken away."""
    start = text.index("{", text.index(f"static inline float {NAME}_round(float product)"))
    return text[:start] + "{ return product; }\n" + text[text.index("\n}\n", start) + 3 :]


def library_exponential(text: str) -> str:
    """The C library's expf in place of the header's own exponential."""
    start = text.index("{", text.index(f"static inline float {NAME}_exponential(float t)"))
    body = "{ return expf(t); }\n"
    return "#include <math.h>\n" + text[:start] + body + text[text.index("\n}\n", start) + 3 :]


SELF_TEST_OFF = (r"(int pump_cavitation_self_test\(void\)\n\{\n)", r"\1    return 0;\n")

C_MISTAKES = {
    "last bit of a weight": (table_entry("weight", 1, neighbour), "last digit|weight"),
    "two weights swapped": (swapped, 'the weight of "flow"'),
    "sign of the intercept": (replaced(rf"({NAME}_intercept = )-", r"\g<1>"), "self-test returned 1.*the intercept"),
    "> for >= at the threshold": (
        replaced(rf"z >= {NAME}_threshold_high", f"z > {NAME}_threshold_high"),
        "exactly on the threshold: look at the comparison",
    ),
    "a range bound": (
        table_entry("high", 0, lambda text: "249.0"),
        r'input "suction" = (249\.\d+|250\.0) is held against -95\.0 to 250\.0',
    ),
    "a level's weight": (table_entry("weight", 7, lambda text: "1" + text), 'weight of "impeller" level 2'),
    "6-digit literals": (six_digits, "self-test returned 1"),
    "contraction on": (contracted, "self-test returned 3"),
    "the C library's expf": (library_exponential, "exponential|expf"),
    "a truncated file": (lambda text: text[: len(text) * 2 // 3], "error"),
    "another model's id": (
        replaced(r'(PUMP_CAVITATION_MODEL_ID ")[0-9a-f]{16}', r"\g<1>0123456789abcdef"),
        "says model 0123456789abcdef",
    ),
}


BITS_OFF = ("last bit of a weight", "two weights swapped", "6-digit literals", "contraction on")

PYTHON_MISTAKES = {
    "last bit of a weight": (last_bit_in_python, "self-test returned 1"),
    "sign of the intercept": (replaced(r"(?<=\nINTERCEPT = )-", ""), "self-test returned 1.*the intercept"),
    "> for >= at the threshold": (replaced("z >= THRESHOLD_HIGH", "z > THRESHOLD_HIGH"), "look at the comparison"),
    "a range bound": (
        replaced(r"(?<=\nHIGH_SUCTION = )250.0", "249.0"),
        r'input "suction" = (249\.\d+|250\.0) is held against -95\.0 to 250\.0',
    ),
    "a level's weight": (replaced(r"(WEIGHTS_IMPELLER = \(\n.*\n    -?)", r"\g<1>1"), 'weight of "impeller" level 1'),
    "a truncated file": (lambda text: text[: len(text) * 2 // 3], "Error|error"),
    "the library's exponential": (
        replaced("e = math.ldexp\\(p, k\\)", "e = math.exp(t)"),
        "look at the exponential and the logistic function",
    ),
    "another model's id": (
        replaced('(?<=\nMODEL_ID = ")[0-9a-f]{16}', "0123456789abcdef"),
        "says model 0123456789abcdef",
    ),
}


def initializers(model: onnx.ModelProto) -> list[onnx.TensorProto]:
    """The constants of the graph that hold one or more binary32 numbers."""
    return [tensor for tensor in model.graph.initializer if tensor.data_type == onnx.TensorProto.FLOAT]


def onnx_constant(wanted: float, change: Callable[[float], float]) -> Callable[[onnx.ModelProto], None]:
    """Change the constant of a graph that is exactly `wanted`."""

    def edit(model: onnx.ModelProto) -> None:
        for tensor in initializers(model):
            numbers = list(struct.unpack(f"<{len(tensor.raw_data) // 4}f", tensor.raw_data))
            if wanted in numbers:
                numbers[numbers.index(wanted)] = change(wanted)
                tensor.raw_data = struct.pack(f"<{len(numbers)}f", *numbers)
                return
        raise AssertionError(f"{wanted} is no constant of the graph")

    return edit


GraphEdit = Callable[[onnx.ModelProto, SealedModel], None]


def compared_without_equal(graph: onnx.ModelProto, sealed: SealedModel) -> None:
    """> in the place of every >=."""
    found = [node for node in graph.graph.node if node.op_type == "GreaterOrEqual"]
    assert found
    for node in found:
        node.op_type = "Greater"


def another_id(graph: onnx.ModelProto, sealed: SealedModel) -> None:
    """The metadata name another model."""
    found = [entry for entry in graph.metadata_props if entry.value == sealed.model_id]
    assert found
    for entry in found:
        entry.value = "0123456789abcdef"


def no_id(graph: onnx.ModelProto, sealed: SealedModel) -> None:
    """The metadata are gone."""
    assert graph.metadata_props
    del graph.metadata_props[:]


ONNX_MISTAKES: dict[str, tuple[GraphEdit, str]] = {
    "last bit of a weight": (
        lambda graph, sealed: onnx_constant(
            sealed.terms[1].weights[0][0], lambda w: float(np.nextafter(np.float32(w), np.float32(9)))
        )(graph),
        "last digit|weight",
    ),
    "sign of the intercept": (
        lambda graph, sealed: onnx_constant(sealed.intercepts[0], lambda b: -b)(graph),
        "the intercept",
    ),
    "a range bound": (
        lambda graph, sealed: onnx_constant(sealed.inputs[0].high, lambda high: high - 1)(graph),
        r'input "suction" = (249\.\d+|250\.0) is held against -95\.0 to 250\.0',
    ),
    "a level's weight": (
        lambda graph, sealed: onnx_constant(sealed.terms[5].weights[0][2], lambda w: w + 0.25)(graph),
        'weight of "impeller" level 2',
    ),
    "> for >= at the threshold": (compared_without_equal, "exactly on the threshold: look at the comparison"),
    "another model's id": (another_id, "says model 0123456789abcdef"),
    "no id at all": (no_id, "says model None"),
}


def in_text(target: str, ending: str, *edits: Edit) -> Callable[[Bench], list[str]]:
    """Edit the artefact and run it; every failed check is of it."""

    def found(bench: Bench) -> list[str]:
        for edit in edits:
            bench.edit(NAME + ending, edit)
        sentences = bench.check(target)
        assert all(sentence.startswith(NAME + ending) for sentence in sentences)
        return sentences

    return found


def in_graph(edit: GraphEdit) -> Callable[[Bench], list[str]]:
    """The same for the ONNX graph."""

    def found(bench: Bench) -> list[str]:
        path = bench.release / f"{NAME}.onnx"
        graph = onnx.load(path)
        edit(graph, load(bench.release / f"{NAME}.sealed.json"))
        path.write_bytes(graph.SerializeToString(deterministic=True))
        sentences = bench.check("onnx")
        assert all(sentence.startswith(path.name) for sentence in sentences)
        return sentences

    return found


def cut_graph(bench: Bench) -> list[str]:
    """Half of the file is there."""
    path = bench.release / f"{NAME}.onnx"
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    return bench.check("onnx")


MISTAKES = (
    *(Planted("C header", name, in_text("c", ".h", edit), told) for name, (edit, told) in C_MISTAKES.items()),
    *(
        Planted(
            "C header, self-test off",
            name,
            in_text("c", ".h", C_MISTAKES[name][0], replaced(*SELF_TEST_OFF)),
            "rows differ",
        )
        for name in BITS_OFF
    ),
    *(
        Planted("Python module", name, in_text("python", ".py", edit), told)
        for name, (edit, told) in PYTHON_MISTAKES.items()
    ),
    *(Planted("ONNX graph", name, in_graph(edit), told) for name, (edit, told) in ONNX_MISTAKES.items()),
    Planted("ONNX graph", "a truncated file", cut_graph, "onnx.checker"),
)
