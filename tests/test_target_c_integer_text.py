"""What the integer C header says and offers beside its functions: macros that count readings, the proof, positions.

Expected values: hand calculation from gain and offset; `proof`, which the scorer's tests hold against exact sums.
"""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import pytest
from c_programs import FAMILIES, compiler, header, status_of
from models import sample_integer_models

from export.targets.c import lexical
from export.targets.c.scalings import scalings
from runtime_min.arithmetic import ACCUMULATOR_BITS
from runtime_min.integer_score import missing_count
from runtime_min.proof import proof

MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}


# --- counts of readings ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("name", ["pump_int16", "pump_int32"])
def test_macros_count_readings_to_the_nearest(name: str, family: str, tmp_path: Path) -> None:
    # suction: gain 2^-7 (int32: 2^-23), offset 0; water: gain 2^-10 (2^-26), offset 298
    sealed = MODELS[name]
    one, prefix = (128, name.upper()) if name == "pump_int16" else (2**23, name.upper())
    fine = 8 * one
    (tmp_path / "model.h").write_text(header(sealed))
    most = -missing_count(sealed) - 1
    readings = {
        "SUCTION(-20.5)": -20.5 * one,
        "SUCTION(0)": 0,
        "SUCTION(250)": 250 * one,
        f"SUCTION(1.4 / {one})": 1,
        f"SUCTION(1.6 / {one})": 2,
        f"SUCTION(-1.4 / {one})": -1,
        f"SUCTION(-1.6 / {one})": -2,
        "WATER(298)": 0,
        "WATER(299.5)": 1.5 * fine,
        "WATER(273.15)": round(-24.85 * fine),
        "SUCTION(1e9)": most,
        "SUCTION(-1e9)": -most,
    }
    wanted = {call: str(int(count)) for call, count in readings.items()}
    wanted["SUCTION(zero / zero)"] = f"{prefix}_MISSING"
    checks = "".join(
        f"    if ({prefix}_COUNT_{call} != {count}) return {position};\n"
        for position, (call, count) in enumerate(wanted.items(), 1)
    )
    source = f'#include "model.h"\nint main(void) {{\n    volatile double zero = 0.0;\n{checks}    return 0;\n}}\n'
    assert status_of(source, [*compiler(family).c, "-std=c99", "-O1", "-Wall", "-Wextra"], tmp_path) == 0


@pytest.mark.parametrize(
    ("low", "high", "outside", "below", "above"),
    [
        (-100, 100, "fault", -32767, 32767),
        (-100, 32767, "fault", -32767, -32767),
        (-32767, 100, "fault", 32767, 32767),
        (-32767, 32767, "fault", -32768, -32768),
        (-32767, 32767, "clamp", -32767, 32767),
    ],
)
def test_reading_beyond_all_counts_never_stands_for_one_within_the_limits(
    low: int, high: int, outside: str, below: int, above: int
) -> None:
    sealed = MODELS["one_input_int16"]
    (scaling,) = scalings(replace(sealed, inputs=(replace(sealed.inputs[0], low=low, high=high, outside=outside),)))
    assert (scaling.below, scaling.above) == (lexical.integer(below, 16), lexical.integer(above, 16))


def test_inputs_that_the_device_counts_have_no_macro() -> None:
    assert "_COUNT_" in header(MODELS["steep_int16"])
    assert "_COUNT_" not in header(MODELS["counts_int16"])


def test_integer_header_has_no_floating_point_of_its_own() -> None:
    for name in ("counts_int16", "counts_int32", "levels_only_int16"):
        code = re.sub(r"/\*.*?\*/", "", header(MODELS[name]), flags=re.DOTALL)
        assert not re.search(r"\b(float|double)\b|\d\.\d", code)
    for name in ("pump_int16", "pump_int32"):
        code = re.sub(r"/\*.*?\*/", "", header(MODELS[name]), flags=re.DOTALL)
        lines = code.replace("\\\n", "").splitlines()
        assert not [line for line in lines if re.search(r"\b(float|double)\b", line) and not line.startswith("#define")]


# --- what it says ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_header_s_comment_shows_the_largest_of_every_step(name: str) -> None:
    sealed = MODELS[name]
    comment = header(sealed).split("*/")[0]
    numbers = set(re.findall(r"\d+", comment))
    for step in proof(sealed):
        if step.what not in ("datum", "weight"):
            assert str(step.largest) in numbers or step.what in ("intercept", "threshold")
    assert str(2 ** (ACCUMULATOR_BITS[sealed.arithmetic] - 1) - 1) in numbers


def test_positions_say_what_is_counted() -> None:
    text = header(MODELS["counts_int16"])
    assert (
        "COUNTS_INT16_IN_ADC_COUNTS,     /* counts of 0.1 kPa from -95, 0 to 3450; outside: fault; missing: fault */"
        in text
    )
    assert "missing: taken as -1085 */" in text
    assert "#define COUNTS_INT16_LOG_ODDS_SHIFT 26" in text
