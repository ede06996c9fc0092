"""Canonical JSON against RFC 8785: `check_values/facts/json.json` has its appendix B and sections 3.2.2 and 3.2.3."""

from __future__ import annotations

import json
import struct
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from runtime_min.canonical import canonical

JSON_FACTS = json.loads((Path(__file__).parent / "check_values" / "facts" / "json.json").read_text(encoding="utf-8"))


@pytest.mark.parametrize("case", JSON_FACTS["canonical_numbers"], ids=lambda case: case["bits"])
def test_number_is_written_as_rfc_8785_writes_it(case: dict[str, str]) -> None:
    (number,) = struct.unpack(">d", bytes.fromhex(case["bits"]))
    assert canonical(number) == case["json"]


@pytest.mark.parametrize("bits", JSON_FACTS["not_allowed_bits"])
def test_number_that_is_not_finite_is_refused(bits: str) -> None:
    (number,) = struct.unpack(">d", bytes.fromhex(bits))
    with pytest.raises(ValueError, match="JSON has no form"):
        canonical(number)


def test_sample_of_rfc_8785_is_written_to_the_byte() -> None:
    text = canonical(json.loads(JSON_FACTS["sample_input"]))
    assert text == JSON_FACTS["sample_canonical"]
    assert text.encode().hex() == JSON_FACTS["sample_canonical_utf8_hex"]


def test_keys_are_sorted_by_their_utf16_units() -> None:
    keys = JSON_FACTS["key_order"]
    assert list(json.loads(canonical(dict.fromkeys(reversed(keys), 0)))) == keys


def test_minus_zero_and_large_integers_follow_the_exact_rules() -> None:
    assert (
        canonical([-0.0, 2**53, 2**53 + 1, -(2**53) - 1])
        == '[0,9007199254740992,"9007199254740993","-9007199254740993"]'
    )


@pytest.mark.parametrize("value", ["\ud800", {"\udfff": 1}, object()], ids=["text", "key", "object"])
def test_what_json_cannot_say_is_refused(value: object) -> None:
    with pytest.raises(ValueError, match=r"JSON has no form|surrogates not allowed"):
        canonical(value)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_number_reads_back_to_its_bits(number: float) -> None:
    assert struct.pack("<d", float(json.loads(canonical(number)))) == struct.pack("<d", number + 0.0)


@given(
    st.recursive(
        st.none() | st.booleans() | st.integers(-(2**53), 2**53) | st.text(),
        lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
    )
)
def test_canonical_text_reads_back_to_its_value_and_is_a_fixed_point(value: object) -> None:
    text = canonical(value)
    assert json.loads(text) == value
    assert canonical(json.loads(text)) == text
