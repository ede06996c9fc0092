"""The generated C header, compiled and run: the reference scorer's bits in every way, and the self-test's probes.

Expected values: the reference scorer's bits (what an artefact must reproduce); hand calculation on models whose
numbers are short binary fractions; for the probes, faults planted on purpose.
"""

from __future__ import annotations

import math
import platform
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import pytest
from c_programs import FAMILIES, C, compiler, fused_flags, header, run_header, status_of, unprotected
from line_models import level_model, line_model
from models import sample_sealed_models

from export.targets import (
    SELF_TEST_CONTRACTION,
    SELF_TEST_ROUNDING,
    SELF_TEST_SUBNORMALS,
    SELF_TEST_TABLES,
    SELF_TEST_VECTOR,
    Run,
    SelfTest,
)
from export.targets.c import ways
from export.targets.c.emit import emit
from export.targets.c.ways import Way
from export.vectors import make_vectors, next_to, self_test_of
from runtime_min.arithmetic import raw_bits
from runtime_min.model import SealedModel, Thresholds

MODELS = {name: sealed for name, (_, sealed) in sample_sealed_models().items()}
ARITHMETICS = ("binary32", "binary64")
NAN, INFINITY = math.nan, math.inf
STRICT_C99 = ("-std=c99", "-O2")


def assert_same_bits(run: Run, sealed: SealedModel) -> None:
    assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, 0), run
    assert list(run.outputs) == [vector.expected for vector in make_vectors(sealed)], run.what


# --- the same bits ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_header_gives_the_bits_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    path = tmp_path / C.file(sealed)
    path.write_text(header(sealed))
    compiler("gcc")
    runs = list(C.run(path, sealed, [vector.inputs for vector in make_vectors(sealed)], False))
    assert len(runs) == 3
    for run in runs:
        assert_same_bits(run, sealed)


@pytest.mark.slow
@pytest.mark.parametrize("name", list(MODELS)[::3])  # every model is compiled in the quick ways above
def test_whole_matrix_gives_the_bits_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    path = tmp_path / C.file(sealed)
    path.write_text(header(sealed))
    wanted = {family: len(ways.thorough(compiler(family))) for family in FAMILIES}
    runs = list(C.run(path, sealed, [vector.inputs for vector in make_vectors(sealed)], True))
    assert {family: sum(run.what.startswith(family) for run in runs) for family in FAMILIES} == wanted
    for run in runs:
        assert_same_bits(run, sealed)


def test_thorough_ways_are_those_that_the_checks_promise() -> None:
    shown = " | ".join(way.what for way in ways.thorough(compiler("gcc")))
    for flags in ("-std=c99 -O0", "-std=c99 -O2", "-std=c99 -O3 -m", "-std=gnu", "-std=c++98", "-std=c++17",
                  "-ffp-contract=fast", "code in a file of its own"):  # fmt: skip
        assert flags in shown
    assert {"-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Werror"} <= set(ways.STRICT)


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_header_without_gnu_extensions_gives_the_same_bits(arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    hidden = header(sealed).replace("defined(__GNUC__)", "defined(NO_SUCH_COMPILER)")
    assert hidden != header(sealed)
    run = run_header(hidden, sealed, Way(compiler("gcc"), "c", ("-std=gnu17", "-O3", *fused_flags())), tmp_path)
    assert_same_bits(run, sealed)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("name", ["pump_binary32", "lenient_binary64", "tiny_binary32", "levels_only_binary32"])
def test_header_runs_clean_under_the_sanitisers(name: str, family: str, tmp_path: Path) -> None:
    flags = ("-std=c99", "-O1", "-g", "-fsanitize=address,undefined", "-fno-sanitize-recover=all")
    assert_same_bits(run_header(header(MODELS[name]), MODELS[name], Way(compiler(family), "c", flags), tmp_path),
                     MODELS[name])  # fmt: skip


# --- outputs that follow by hand -------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_faults_clamping_and_typical_values_follow_the_policies(arithmetic: str, tmp_path: Path) -> None:
    # z = -1 + x / 2 for x in [0, 8], typical 3; rows: x, fault, z, decision at threshold 1
    below, above = next_to(0.0, -INFINITY, arithmetic), next_to(8.0, INFINITY, arithmetic)
    strict = [(4.0, 0, 1.0, 1), (8.0, 0, 3.0, 1), (0.0, 0, -1.0, 0), (-0.0, 0, -1.0, 0)]
    strict += [(x, 1, NAN, -2) for x in (below, above, INFINITY, -INFINITY, NAN)]
    lenient = [(-INFINITY, 0, -1.0, 0), (INFINITY, 0, 3.0, 1), (below, 0, -1.0, 0), (9.0, 0, 3.0, 1), (NAN, 0, 0.5, 0)]
    for sealed, rows in (
        (line_model(arithmetic), strict),
        (line_model(arithmetic, outside="clamp", missing="typical"), lenient),
    ):
        assert_answers(sealed, rows, tmp_path)


def assert_answers(sealed: SealedModel, rows: list[tuple[float, int, float, int]], folder: Path) -> None:
    """Each row: the only input, then the fault, log-odds and decision expected."""
    run = run_header(header(sealed), sealed, Way(compiler("gcc"), "c", STRICT_C99), folder, [row[:1] for row in rows])
    found = [(one.fault, one.log_odds[0], one.decision) for one in run.outputs]
    assert found == [(fault, raw_bits(z, sealed.arithmetic), decision) for _, fault, z, decision in rows]


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_levels_are_exact_and_their_first_weight_is_zero(arithmetic: str, tmp_path: Path) -> None:
    # z = -1 + (0, 0.25, -2); a missing level is level 2; threshold -1
    rows = [(0.0, 0, -1.0, 1), (-0.0, 0, -1.0, 1), (1.0, 0, -0.75, 1), (2.0, 0, -3.0, 0), (NAN, 0, -3.0, 0)]
    rows += [(x, 1, NAN, -2) for x in (1.5, 3.0, -1.0, INFINITY, next_to(0.0, 1.0, arithmetic))]
    assert_answers(level_model(arithmetic, missing="typical"), rows, tmp_path)


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_between_two_thresholds_is_no_call(arithmetic: str, tmp_path: Path) -> None:
    sealed = replace(line_model(arithmetic), decision=Thresholds(0.5, 1.5))
    # z = -1 + x / 2: 0.25, 0.5, 1, 1.5
    rows = {2.5: 0, 3.0: -1, 4.0: -1, 5.0: 1}
    run = run_header(header(sealed), sealed, Way(compiler("gcc"), "c", STRICT_C99), tmp_path, [(x,) for x in rows])
    assert run.self_test == 0
    assert [one.decision for one in run.outputs] == list(rows.values())


def test_probability_of_log_odds_zero_is_a_half(tmp_path: Path) -> None:
    for arithmetic in ARITHMETICS:
        sealed = line_model(arithmetic)
        run = run_header(header(sealed), sealed, Way(compiler("gcc"), "c", STRICT_C99), tmp_path, [(2.0,)])
        assert run.outputs[0].probability == (raw_bits(0.5, arithmetic),)


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_fault_gives_the_quiet_nan_without_sign(arithmetic: str, tmp_path: Path) -> None:
    # IEEE 754-2019, 6.2.1: quiet NaN, payload 0
    sealed = line_model(arithmetic)
    real, bits = ("float", "0x7FC00000u") if arithmetic == "binary32" else ("double", "0x7FF8000000000000u")
    (tmp_path / "line.h").write_text(header(sealed))
    source = f"""#include "line.h"
        #include <stdint.h>
        #include <string.h>
        int main(void) {{
            {real} x[1] = {{ 9 }}, z = line_log_odds(x), p = line_probability(x);
            uint{"32" if real == "float" else "64"}_t a, b;
            memcpy(&a, &z, sizeof a); memcpy(&b, &p, sizeof b);
            return a == {bits} && b == {bits} ? 0 : 1;
        }}"""
    for family in FAMILIES:
        assert status_of(source, [*compiler(family).c, "-std=c99", "-O2"], tmp_path) == 0


# --- contraction -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize(
    ("family", "language", "flags"),
    [
        ("gcc", "c", ("-std=gnu17", "-O2")),
        ("gcc", "c++", ("-std=gnu++98", "-O3")),
        ("gcc", "c++", ("-std=gnu++17", "-O3")),
        ("clang", "c", ("-std=c99", "-O2")),
        ("clang", "c", ("-std=c99", "-O2", "-ffp-contract=fast")),
        ("clang", "c++", ("-std=c++17", "-O3", "-ffp-contract=fast")),
    ],
)
def test_barrier_stops_contraction_where_the_compiler_does_contract(
    family: str, language: str, flags: tuple[str, ...], arithmetic: str, tmp_path: Path
) -> None:
    sealed = MODELS[f"many_{arithmetic}"]
    way = Way(compiler(family), language, (*flags, *fused_flags()))
    bare = run_header(unprotected(header(sealed), sealed.name), sealed, way, tmp_path)
    wanted = [vector.expected for vector in make_vectors(sealed)]
    assert bare.trouble is None
    changed = sum(one != other for one, other in zip(bare.outputs, wanted, strict=True))
    if changed == 0:
        pytest.skip(f"{way.what} does not contract even without the barrier: this shows nothing")
    assert bare.self_test == SELF_TEST_CONTRACTION
    assert_same_bits(run_header(header(sealed), sealed, way, tmp_path), sealed)


# --- the self-test ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["pump_binary32", "lenient_binary64", "plain_binary32"])
def test_self_test_sees_the_last_bit_of_every_table_number(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    self_test = self_test_of(sealed, make_vectors(sealed))
    variants = list(_one_bit_off(sealed))
    assert len(variants) > 20
    lines, calls = [], []
    for position, variant in enumerate(variants):
        renamed = replace(variant, name=f"variant_{position}")
        (tmp_path / f"v{position}.h").write_bytes(emit(renamed, self_test))
        lines.append(f'#include "v{position}.h"')
        calls.append(f"if (variant_{position}_self_test() != {SELF_TEST_TABLES}) return 1 + {position};")
    source = "\n".join([*lines, "int main(void) {", *calls, "return 0; }"])
    assert status_of(source, [*compiler("gcc").c, "-std=c99", "-O0"], tmp_path) == 0


def _one_bit_off(sealed: SealedModel):
    """The model with each of its device numbers in turn moved to a neighbour."""

    def moved(value: float) -> float:
        return next_to(value, INFINITY, sealed.arithmetic)

    for position, entry in enumerate(sealed.inputs):
        for key in ("low", "high", "typical"):
            if getattr(entry, key) is not None:
                changed = replace(entry, **{key: moved(getattr(entry, key))})
                yield replace(sealed, inputs=(*sealed.inputs[:position], changed, *sealed.inputs[position + 1 :]))
    yield replace(sealed, intercepts=(moved(sealed.intercepts[0]),))
    for position, term in enumerate(sealed.terms):
        terms = [replace(term, datum=moved(term.datum))] if term.datum is not None else []
        for column, weight in enumerate(term.weights[0]):
            row = (*term.weights[0][:column], moved(weight), *term.weights[0][column + 1 :])
            terms.append(replace(term, weights=(row,)))
        for changed_term in terms:
            yield replace(sealed, terms=(*sealed.terms[:position], changed_term, *sealed.terms[position + 1 :]))
    yield replace(sealed, decision=Thresholds(moved(sealed.decision.low), sealed.decision.high))
    yield replace(sealed, decision=Thresholds(sealed.decision.low, moved(sealed.decision.high)))
    constants = sealed.exponential
    for key in ("inv_ln2", "ln2_high", "ln2_low", "floor"):
        yield replace(sealed, exponential=replace(constants, **{key: moved(getattr(constants, key))}))
    for position, value in enumerate(constants.coefficients):
        row = (*constants.coefficients[:position], moved(value), *constants.coefficients[position + 1 :])
        yield replace(sealed, exponential=replace(constants, coefficients=row))


@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("mode", ["FE_UPWARD", "FE_DOWNWARD", "FE_TOWARDZERO"])
def test_self_test_sees_another_rounding_mode(mode: str, family: str, arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    (tmp_path / "pump.h").write_text(header(sealed))
    source = f"""#include "pump.h"
        #include <fenv.h>
        int main(void) {{
            if (fesetround({mode}) != 0) return 99;
            return {sealed.name}_self_test();
        }}"""
    for level in ("-O0", "-O2"):
        command = [*compiler(family).c, "-std=c99", level]
        assert status_of(source, command, tmp_path) == SELF_TEST_ROUNDING
        assert status_of(source.replace(mode, "FE_TONEAREST"), command, tmp_path) == 0


@pytest.mark.skipif(platform.machine() not in ("x86_64", "AMD64"), reason="sets the MXCSR register, which is x86's own")
@pytest.mark.parametrize("arithmetic", ARITHMETICS)
@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("bit", ["0x8000", "0x0040", "0x8040"])  # flush results; take subnormal operands as 0; both
def test_self_test_sees_flushing_to_zero(bit: str, family: str, arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    (tmp_path / "pump.h").write_text(header(sealed))
    source = f"""#include "pump.h"
        #include <xmmintrin.h>
        int main(void) {{
            _mm_setcsr(_mm_getcsr() | {bit}u);
            return {sealed.name}_self_test();
        }}"""
    for level in ("-O0", "-O2"):
        command = [*compiler(family).c, "-std=c99", level]
        assert status_of(source, command, tmp_path) == SELF_TEST_SUBNORMALS
        assert status_of(source.replace(bit, "0x0"), command, tmp_path) == 0


@pytest.mark.parametrize("position", [0, 5, 11])
@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_self_test_names_the_vector_that_differs(position: int, arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    self_test = self_test_of(sealed, make_vectors(sealed))
    vector = self_test.vectors[position]
    true = vector.expected
    way = Way(compiler("gcc"), "c", STRICT_C99)
    for wrong in (
        replace(true, fault=true.fault + 1),
        replace(true, decision=true.decision + 3),
        replace(true, log_odds=(raw_bits(0.0, arithmetic),) if true.fault else (true.log_odds[0] ^ 1,)),
        replace(true, probability=(raw_bits(0.0, arithmetic),)),
    ):
        vectors = list(self_test.vectors)
        vectors[position] = replace(vector, expected=wrong)
        text = emit(sealed, SelfTest(tuple(vectors), self_test.crc)).decode()
        assert run_header(text, sealed, way, tmp_path).self_test == SELF_TEST_VECTOR + position


def test_headers_say_where_flushing_can_matter() -> None:
    # Only a product of a small reading can be subnormal: limits away from zero with a datum 2^-16 or more apart cannot.
    assert "next to zero to zero" in header(MODELS["plain_binary32"])
    assert "next to zero to zero" not in header(MODELS["levels_only_binary32"])
    assert "next to zero to zero" not in header(MODELS["all_datum_binary32"])
    tiny = MODELS["tiny_binary32"]  # weight about 1e33, readings down to 1e-45: the product stays above 2^-126
    weight = tiny.terms[0].weights[0][0]
    assert Fraction(abs(weight)) * Fraction(2) ** -149 > Fraction(2) ** -126
    assert "next to zero to zero" not in header(tiny)
