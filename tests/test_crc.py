"""The checksum of an artefact's tables is CRC-32/ISO-HDLC: the record's values, and a bit-by-bit computation.

Source: `check_values/facts/crc32.json`, the check value of the standard catalogue of CRC algorithms among them.
"""

from __future__ import annotations

import json
import struct
from pathlib import Path

import pytest
from models import sample_integer_models, sample_sealed_models

from export.vectors import table_crc
from runtime_min.device_numbers import device_numbers

MODELS = {name: sealed for name, (_, sealed) in (sample_sealed_models() | sample_integer_models()).items()}
LAYOUTS = {"binary32": "<f", "binary64": "<d", "int16": "<i", "int32": "<q"}


def crc32(data: bytes) -> int:
    """Bit by bit: polynomial 04C11DB7 reflected, all ones first and inverted at the end."""
    crc = 0xFFFFFFFF
    for byte in data:
        for bit in range(8):
            low = (crc ^ (byte >> bit)) & 1
            crc = (crc >> 1) ^ (0xEDB88320 if low else 0)
    return crc ^ 0xFFFFFFFF


def test_values_are_the_recorded_ones() -> None:
    record = json.loads((Path(__file__).parent / "check_values/facts/crc32.json").read_text(encoding="utf-8"))
    found = {entry["text"]: f"{crc32(entry['text'].encode()):08X}" for entry in record["values"]}
    assert found == {entry["text"]: entry["crc32"] for entry in record["values"]}
    assert found["123456789"] == "CBF43926"


@pytest.mark.parametrize("name", MODELS)
def test_checksum_is_that_of_the_device_numbers_bytes(name: str) -> None:
    sealed = MODELS[name]
    data = b"".join(struct.pack(LAYOUTS[sealed.arithmetic], number) for _, number in device_numbers(sealed))
    assert table_crc(sealed) == crc32(data)
