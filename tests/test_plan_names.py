"""Names and units: what they become in C, and what a column's header gives."""

from __future__ import annotations

import pytest

from runtime_min.names import c_input_name, name_and_unit, name_problem, unit_suffix


@pytest.mark.parametrize(
    ("unit", "suffix"),
    [
        # exact-rules of the project: superscripts, /, °, %, µ; the two mu are U+00B5 and U+03BC.
        ("m3/h", "M3_PER_H"),
        ("m³/h", "M3_PER_H"),
        ("kPa", "KPA"),
        ("°C", "DEG_C"),
        ("°", "DEG"),
        ("%", "PERCENT"),
        ("\u00b5m", "UM"),
        ("\u03bcm", "UM"),
        ("m·s⁻²", "MS2"),
        ("mm/s", "MM_PER_S"),
        ("1/°C", "1_PER_DEG_C"),
        ("Ω", ""),
        ("", ""),
        ("ß", ""),
        ("//", "PER_PER"),
    ],
)
def test_units_are_spelled_in_letters_c_allows(unit: str, suffix: str) -> None:
    assert unit_suffix(unit) == suffix
    assert c_input_name("flow", unit) == ("FLOW_" + suffix).rstrip("_")


def test_names_of_63_characters_pass_and_longer_ones_do_not() -> None:
    assert name_problem("a" * 63) is None
    assert name_problem("a" * 64) == "found a name of 64 characters"
    assert name_problem("flow_") == 'found "flow_", whose last underscore would be doubled in C'
    assert (
        name_problem("flow\n")
        == 'found "flow\N{REPLACEMENT CHARACTER}", which is not an identifier of lower-case letters'
    )


def test_headers_give_a_name_and_a_unit() -> None:
    assert name_and_unit("Motor current [A]") == ("motor_current", "A")
    assert name_and_unit("Débit (m³/h)") == ("debit", "m³/h")
    assert name_and_unit("flow") == ("flow", "")
    assert name_and_unit("[A]") == ("a", "")
