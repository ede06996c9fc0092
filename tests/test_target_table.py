"""The table of coefficients: a header of constants and the same bytes as Intel HEX, each read back."""

from __future__ import annotations

import re
import shutil
import struct
import subprocess
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from zlib import crc32

import pytest
from models import sample_integer_models, sample_sealed_models

from export.targets import TARGETS, Run
from export.targets.table.layout import layout
from export.vectors import make_vectors, self_test_of
from runtime_min.device_numbers import device_numbers
from runtime_min.model import Placement, SealedModel

TABLE = TARGETS["table"]
MODELS = {**sample_sealed_models(), **sample_integer_models()}
compiler = pytest.mark.skipif(
    not (shutil.which("gcc") or shutil.which("clang")), reason="no C compiler: apt-get install gcc"
)


def placed(sealed: SealedModel, address: int, byte_order: str) -> SealedModel:
    """The model with its table at an address."""
    request = replace(sealed.about.request, table=Placement(address, byte_order))
    return replace(sealed, about=replace(sealed.about, request=request))


def written(sealed: SealedModel, folder: Path) -> Path:
    """Both files in a folder; returns the header."""
    for name, data in TABLE.files(sealed, self_test_of(sealed, make_vectors(sealed))).items():
        (folder / name).write_bytes(data)
    return folder / TABLE.file(sealed)


def read_back(sealed: SealedModel, folder: Path) -> list[Run]:
    return list(TABLE.run(folder / TABLE.file(sealed), sealed, (), True))


def records(text: str) -> Iterator[tuple[int, int, bytes]]:
    """(address, type, data) of each record, by the format's own rule: all bytes of a record sum to 0 modulo 256.

    Source: Intel, Hexadecimal Object File Format Specification, revision A (1988), from memory.
    """
    for line in text.split():
        assert line.startswith(":")
        data = bytes.fromhex(line[1:])
        assert sum(data) % 256 == 0, line
        assert len(data) == data[0] + 5, line
        yield int.from_bytes(data[1:3], "big"), data[3], data[4:-1]


def memory(text: str) -> dict[int, int]:
    """The bytes that a HEX file puts into memory: data (0), end (1), extended linear address (4)."""
    base, bytes_at = 0, {}
    for address, kind, data in records(text):
        if kind == 0:
            bytes_at |= {base + address + at: byte for at, byte in enumerate(data)}
        elif kind == 4:
            base = int.from_bytes(data, "big") << 16
        else:
            assert kind == 1
    return bytes_at


@pytest.mark.parametrize("name", MODELS)
@pytest.mark.parametrize(("address", "order"), [(0, "little"), (0x0800FC00, "little"), (0x1FFF0, "big")])
def test_hex_file_puts_every_coefficient_at_its_address(name: str, address: int, order: str, tmp_path: Path) -> None:
    sealed = placed(MODELS[name][1], address, order)
    written(sealed, tmp_path)
    found = memory((tmp_path / f"{sealed.name}.hex").read_text())
    assert sorted(found) == list(range(address, address + len(found)))
    data = bytes(found[at] for at in sorted(found))
    assert data[:8].hex() == sealed.model_id
    mark = "<" if order == "little" else ">"
    number = {"binary32": "f", "binary64": "d", "int16": "i", "int32": "q"}[sealed.arithmetic]
    word = {4: "I", 8: "Q"}[struct.calcsize(number)]
    width = struct.calcsize(number)
    values = struct.unpack(f"{mark}{(len(data) - 8) // width - 1}{number}", data[8:-width])
    assert struct.unpack(mark + word, data[-width:]) == (crc32(data[:-width]),)
    constants = ("model.exponential", "model.table")
    wanted = sorted(value for place, value in device_numbers(sealed) if not place.startswith(constants))
    assert sorted(values) == wanted


@compiler
@pytest.mark.parametrize("name", MODELS)
def test_header_and_hex_file_read_back_the_same(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name][1]
    written(sealed, tmp_path)
    runs = read_back(sealed, tmp_path)
    assert len(runs) >= 2
    assert [(run.ran, run.trouble) for run in runs] == [(True, None)] * len(runs)


@compiler
def test_each_number_of_the_structure_has_its_name_and_value(tmp_path: Path) -> None:
    """A loop of a firmware team's own, in C, over the named constants, gives the reference's log-odds bits."""
    sealed = MODELS["one_input_binary32"][1]
    header = written(sealed, tmp_path)
    (tmp_path / "own.c").write_text(
        f'#include <stdio.h>\n#include "{header.name}"\nint main(void) {{\n'
        f"    volatile float product = {sealed.name}_coefficients.weight_suction * 12.5f;\n"
        f"    volatile float z = {sealed.name}_coefficients.intercept + product;\n"
        '    printf("%.9g", (double)z);\n    return 0;\n}\n'
    )
    program = tmp_path / "own"
    cc = shutil.which("gcc") or shutil.which("clang") or ""
    subprocess.run([cc, "-std=c99", "-o", str(program), str(tmp_path / "own.c")], check=True, timeout=60)
    printed = subprocess.run([str(program)], capture_output=True, text=True, check=True, timeout=10).stdout
    from runtime_min.score import log_odds

    assert float(printed) == pytest.approx(log_odds(sealed, [12.5]), rel=1e-8)


def wrong_checksum(text: str) -> str:
    first, _, rest = text.partition("\n")
    return f"{first[:-2]}{(int(first[-2:], 16) + 1) % 256:02X}\n{rest}"


@compiler
@pytest.mark.parametrize(
    ("mistake", "points_at"),
    [
        ("byte order", "whose bytes stand in the other order"),
        ("a wrong checksum", "cannot be read back"),
        ("address", "expected it at 0x00008000 alone"),
        ("last digit", "weight of suction"),
        ("another model's id", "the model id"),
    ],
)
def test_planted_mistake_is_caught_by_reading_back(mistake: str, points_at: str, tmp_path: Path) -> None:
    sealed = placed(MODELS["one_input_int16"][1], 0x8000, "little")
    header = written(sealed, tmp_path)
    path = tmp_path / f"{sealed.name}.hex"
    if mistake == "byte order":
        written(placed(sealed, 0x8000, "big"), tmp_path)
    elif mistake == "a wrong checksum":
        path.write_text(wrong_checksum(path.read_text()))
    elif mistake == "address":
        written(placed(sealed, 0x4000, "little"), tmp_path)
    elif mistake == "last digit":
        header.write_text(
            re.sub(
                r"(\d)\), /\* weight_suction",
                lambda m: f"{(int(m[1]) + 1) % 10}), /* weight_suction",
                header.read_text(),
            )
        )
    else:
        header.write_text(re.sub(r"\{ 0x[0-9A-F]{2}", "{ 0x00", header.read_text()))
    troubles = [run.trouble or "" for run in read_back(sealed, tmp_path)]
    assert any(points_at in trouble for trouble in troubles), troubles


def test_names_that_would_fall_together_stay_apart() -> None:
    entries = layout(MODELS["one_input_binary32"][1]).entries
    assert len({entry.name for entry in entries}) == len(entries)


@compiler
def test_plan_that_asks_for_a_table_ships_both_files_and_their_layout(tmp_path: Path) -> None:
    from shipped import EXAMPLE

    from export.commands import main

    (tmp_path / "runs.csv").write_bytes((EXAMPLE / "runs.csv").read_bytes())
    plan = (EXAMPLE / "plan.toml").read_text()
    asked = 'write = ["c", "table"]\ntable = { address = "0x0800FC00", byte_order = "big" }'
    plan = plan.replace('write = ["python", "c", "onnx"]', asked)
    (tmp_path / "plan.toml").write_text(plan)
    assert main(["ship", str(tmp_path / "plan.toml")]) == 0
    release = tmp_path / "release"
    assert memory((release / "pump_cavitation.hex").read_text()).keys() >= {0x0800FC00}
    assert "0x0800FC00, big-endian" in (release / "HANDOFF.md").read_text()
    assert (release / "pump_cavitation_table.h").exists()
