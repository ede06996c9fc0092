"""It must be able to fail: mistakes planted in a release, each caught by running the artefact and named.

Every mistake is planted in a copy of a good release. The manifest's digests are rewritten and the comparison of bytes
is off, so that only running the artefact against vectors, witness and budget can find it.
"""

from __future__ import annotations

import hashlib
import json
import re
import struct
from collections.abc import Callable
from pathlib import Path

import numpy as np
import onnx
import pytest

from export.check import Check, check_release
from export.contents import MANIFEST
from export.vector_files import decimal_text

NAME = "pump_cavitation"
Edit = Callable[[str], str]


def plant(release: Path, file: str, edit: Edit) -> None:
    """Change a text file of a release and make the manifest agree with it."""
    path = release / file
    before = path.read_text()
    after = edit(before)
    assert after != before, "the mistake was not planted"
    path.write_text(after)
    agree(release, file)


def agree(release: Path, file: str) -> None:
    """Make the manifest's digest that of the file as it is."""
    manifest = json.loads((release / MANIFEST).read_text())
    manifest["files"][file] = hashlib.sha256((release / file).read_bytes()).hexdigest()
    (release / MANIFEST).write_text(json.dumps(manifest))


def failures(release: Path, artefact: str) -> list[Check]:
    """The failed checks; all of them must be of this artefact, and its digest is not what gave it away."""
    report = check_release(release, compare_text=False)
    assert not report.ok
    assert report.broken
    failed = [entry for entry in report.checks if not entry.ok]
    assert {entry.artefact for entry in failed} == {artefact}
    return failed


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
    "a range bound": (table_entry("high", 0, lambda text: "249.0"), 'input "suction" = 250.0 is held against'),
    "a level's weight": (table_entry("weight", 7, lambda text: "1" + text), 'weight of "impeller" level 2'),
    "6-digit literals": (six_digits, "self-test returned 1"),
    "contraction on": (contracted, "self-test returned 3"),
    "the C library's expf": (library_exponential, "exponential|expf"),
    "a truncated file": (lambda text: text[: len(text) * 2 // 3], "error"),
    "another model's id": (replaced(r'(PUMP_CAVITATION_MODEL_ID ")[0-9a-f]{16}', r"\g<1>0123456789abcdef"),
                           "says model 0123456789abcdef"),
}


@pytest.mark.parametrize("mistake", C_MISTAKES)
def test_mistake_in_c_is_caught_by_running_it(mistake: str, release_copy: Path) -> None:
    edit, points_at = C_MISTAKES[mistake]
    plant(release_copy, f"{NAME}.h", edit)
    assert any(re.search(points_at, entry.found) for entry in failures(release_copy, f"{NAME}.h")), points_at


BITS_OFF = ("last bit of a weight", "two weights swapped", "6-digit literals", "contraction on")


@pytest.mark.parametrize("mistake", BITS_OFF)
def test_mistake_in_c_is_caught_by_the_vectors_with_the_self_test_off(mistake: str, release_copy: Path) -> None:
    edit, _ = C_MISTAKES[mistake]
    plant(release_copy, f"{NAME}.h", edit)
    plant(release_copy, f"{NAME}.h", replaced(*SELF_TEST_OFF))
    assert any("rows differ" in entry.found for entry in failures(release_copy, f"{NAME}.h"))


PYTHON_MISTAKES = {
    "last bit of a weight": (replaced(r"(?<=\nWEIGHT_FLOW = )\S+", "0.1"), "self-test returned 1"),
    "sign of the intercept": (replaced(r"(?<=\nINTERCEPT = )-", ""), "self-test returned 1.*the intercept"),
    "> for >= at the threshold": (replaced("z >= THRESHOLD_HIGH", "z > THRESHOLD_HIGH"), "look at the comparison"),
    "a range bound": (replaced(r"(?<=\nHIGH_SUCTION = )250.0", "249.0"), 'input "suction" = 250.0 is held against'),
    "a level's weight": (replaced(r"(WEIGHTS_IMPELLER = \(\n.*\n    -?)", r"\g<1>1"), 'weight of "impeller" level 1'),
    "a truncated file": (lambda text: text[: len(text) * 2 // 3], "Error|error"),
    "the library's exponential": (replaced("e = math.ldexp\\(p, k\\)", "e = math.exp(t)"),
                                  "look at the exponential and the logistic function"),
    "another model's id": (
        replaced('(?<=\nMODEL_ID = ")[0-9a-f]{16}', "0123456789abcdef"),
        "says model 0123456789abcdef",
    ),
}


@pytest.mark.parametrize("mistake", PYTHON_MISTAKES)
def test_mistake_in_python_is_caught_by_running_it(mistake: str, release_copy: Path) -> None:
    edit, points_at = PYTHON_MISTAKES[mistake]
    plant(release_copy, f"{NAME}.py", edit)
    assert any(re.search(points_at, entry.found) for entry in failures(release_copy, f"{NAME}.py")), points_at


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


@pytest.mark.parametrize(
    ("mistake", "points_at"),
    [
        ("last bit of a weight", "last digit|weight"),
        ("sign of the intercept", "the intercept"),
        ("a range bound", 'input "suction" = 250.0 is held against'),
        ("a level's weight", 'weight of "impeller" level 2'),
        (">", "exactly on the threshold: look at the comparison"),
        ("a truncated file", "."),
        ("another model's id", "says model 0123456789abcdef"),
    ],
)
def test_mistake_in_onnx_is_caught_by_running_it(mistake: str, points_at: str, release_copy: Path) -> None:
    from runtime_min.codec import load

    sealed = load(release_copy / f"{NAME}.sealed.json")
    path = release_copy / f"{NAME}.onnx"
    model = onnx.load(path)
    if mistake == "last bit of a weight":
        onnx_constant(sealed.terms[1].weights[0][0], lambda w: float(np.nextafter(np.float32(w), np.float32(9))))(model)
    elif mistake == "sign of the intercept":
        onnx_constant(sealed.intercepts[0], lambda b: -b)(model)
    elif mistake == "a range bound":
        onnx_constant(sealed.inputs[0].high, lambda high: high - 1)(model)
    elif mistake == "a level's weight":
        onnx_constant(sealed.terms[5].weights[0][2], lambda w: w + 0.25)(model)
    elif mistake == ">":
        compared = [node for node in model.graph.node if node.op_type == "GreaterOrEqual"]
        assert compared
        for node in compared:
            node.op_type = "Greater"
    elif mistake == "another model's id":
        for entry in model.metadata_props:
            if entry.value == sealed.model_id:
                entry.value = "0123456789abcdef"
    data = model.SerializeToString(deterministic=True)
    path.write_bytes(data[: len(data) // 2] if mistake == "a truncated file" else data)
    agree(release_copy, path.name)
    assert any(re.search(points_at, entry.found) for entry in failures(release_copy, path.name)), points_at


def test_edited_vector_is_caught_by_the_reference_scorer_and_by_every_artefact(release_copy: Path) -> None:
    """Decimal and bits are edited together, so that the file still reads well."""

    def edit(text: str) -> str:
        lines = text.splitlines(keepends=True)
        fields = lines[7].split(",")
        bits = int(fields[-4], 16) ^ 1
        fields[-4] = f"{bits:08X}"
        fields[-5] = decimal_text(struct.unpack("<f", struct.pack("<I", bits))[0], "binary32")
        return "".join([*lines[:7], ",".join(fields), *lines[8:]])

    plant(release_copy, "vectors.csv", edit)
    report = check_release(release_copy, compare_text=False)
    failed = [entry for entry in report.checks if not entry.ok]
    assert {entry.artefact for entry in failed} == {"vectors.csv", f"{NAME}.py", f"{NAME}.h", f"{NAME}.onnx"}
    assert all("line 8" in entry.found for entry in failed)


def test_edited_witness_is_caught_by_the_budget(release_copy: Path) -> None:
    def edit(text: str) -> str:
        trained = json.loads(text)
        trained["trained"]["witness"][3]["log_odds"][0] += 0.01
        return json.dumps(trained)

    plant(release_copy, f"{NAME}.trained.json", edit)
    found = failures(release_copy, "witness.csv")
    assert "row 4 is the first" in found[0].found


def test_weight_of_the_sealed_model_that_the_trained_one_does_not_give_is_caught(release_copy: Path) -> None:
    def edit(text: str) -> str:
        sealed = json.loads(text)
        sealed["model"]["terms"][1]["weights"][0][0] *= 2
        return json.dumps(sealed)

    plant(release_copy, f"{NAME}.sealed.json", edit)
    report = check_release(release_copy, compare_text=False)
    failed = {(entry.artefact, entry.what) for entry in report.checks if not entry.ok}
    assert (f"{NAME}.sealed.json", "model id") in failed
    assert (f"{NAME}.sealed.json", "sealed anew") in failed
    assert ("vectors.csv", "reference scorer") in failed


def test_planted_mistakes_are_at_least_twelve_and_the_unplanted_release_passes(release_copy: Path) -> None:
    assert len(C_MISTAKES) + len(PYTHON_MISTAKES) + 7 + 3 >= 12
    assert check_release(release_copy, compare_text=False).ok
