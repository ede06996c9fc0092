"""What the C header says and how it is taken up: literals, text from the plan, guards, warnings, several users.

Expected values: the C library's own strtof and strtod (read through ctypes) for literals, NumPy for the shortest
decimals, C99 (ISO/IEC 9899:1999) for comments, trigraphs (5.2.1.1) and spliced lines (5.1.1.2).
"""

from __future__ import annotations

import ctypes
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from c_programs import FAMILIES, C, compiled, compiler, header, need, run_header, status_of
from hypothesis import given
from hypothesis import strategies as st
from line_models import HOSTILE, line_model, named_model, with_text
from models import FLOW, SUCTION, make_request, make_trained, sample_extended_models, sample_sealed_models

from export.targets import Vector
from export.targets.c import lexical
from export.targets.c.vectors_header import emit_vectors_header
from export.targets.c.ways import STRICT, Way
from export.vectors import make_vectors, self_test_of
from runtime_min.errors import ReleaseError
from runtime_min.model import SealedModel
from runtime_min.sealing import seal_request

MODELS = {name: sealed for name, (_, sealed) in sample_sealed_models().items()}
ARITHMETICS = ("binary32", "binary64")

# Comments are the only place for text from a plan; these try to leave one.
COMMENT_BREAKERS = (
    *HOSTILE,
    "*/ int planted(void); /*",
    "??/",
    "ends in a trigraph backslash ??/\n*/ #error planted",
    "**//",
    "/*/",
    "/",
    "*",
    "// line \\",
    "%:error planted",
    "\\u000a",
    "x" * 500,
    "*/" * 200,
    "? " * 100 + "?/",
)


# --- literals --------------------------------------------------------------------------------------------------------

_LIBC = ctypes.CDLL(None)
_LIBC.strtof.restype = ctypes.c_float
_LIBC.strtod.restype = ctypes.c_double


def read_by_c(literal: str, arithmetic: str) -> float:
    text = literal.removesuffix("f").encode()
    read = _LIBC.strtof if arithmetic == "binary32" else _LIBC.strtod
    return float(read(ctypes.c_char_p(text), None))


@given(st.floats(width=32, allow_nan=False, allow_infinity=False))
def test_binary32_literal_reads_back_and_is_as_short_as_numpy_s(value: float) -> None:
    literal = lexical.number(value, "binary32")
    assert re.fullmatch(r"-?\d+(\.\d+)?(e[+-]?\d+)?f", literal)
    assert "." in literal or "e" in literal  # "1f" is no literal in C
    assert np.float32(read_by_c(literal, "binary32")).tobytes() == np.float32(value).tobytes()
    shortest = np.format_float_scientific(np.float32(value), unique=True, trim="-")
    assert digits_of(literal) <= max(digits_of(shortest), 1) or value == 0
    assert digits_of(literal) <= 9


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_binary64_literal_reads_back(value: float) -> None:
    literal = lexical.number(value, "binary64")
    assert re.fullmatch(r"-?\d+(\.\d+)?(e[+-]?\d+)?", literal)
    assert "." in literal or "e" in literal
    assert np.float64(read_by_c(literal, "binary64")).tobytes() == np.float64(value).tobytes()
    assert digits_of(literal) <= 17


def digits_of(literal: str) -> int:
    mantissa = re.split("[ef]", literal)[0]
    return len(re.sub(r"[-.]", "", mantissa).strip("0"))


@pytest.mark.parametrize("value", [float("nan"), float("inf"), 0.1])
def test_number_that_binary32_does_not_have_is_refused(value: float) -> None:
    with pytest.raises(ValueError, match=r"C has no literal|not a binary32 number"):
        lexical.number(value, "binary32")


def test_words_are_the_published_bits() -> None:
    # IEEE 754-2019, 3.4: 1.0, -0.0 and infinity in both formats; low word first
    assert lexical.words(1.0, "binary32") == ["0x3F800000UL"]
    assert lexical.words(-0.0, "binary64") == ["0x00000000UL", "0x80000000UL"]
    assert lexical.words(float("inf"), "binary64") == ["0x00000000UL", "0x7FF00000UL"]


def test_header_has_no_hexadecimal_float_and_no_library() -> None:
    for sealed in MODELS.values():
        text = header(sealed)
        assert not re.search(r"0x[0-9a-fA-F.]*p", text)
        assert re.findall(r"#include (.*)", text) == ["<float.h>"]
        assert not re.search(r"\b(19|20)\d\d-\d\d-\d\d\b|__DATE__|__TIME__", text)


# --- text from a plan ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("text", COMMENT_BREAKERS)
def test_comment_cannot_be_left(text: str) -> None:
    assert_harmless(lexical.comment(text))
    for line in lexical.comment_lines(text).split("\n"):
        assert line.startswith(" *")
        assert_harmless(line.removeprefix(" *"))


@given(st.text(alphabet=st.sampled_from("*/?\\ \n\"'%:{}a\u202e\x00é³")))
def test_no_text_leaves_a_comment(text: str) -> None:
    assert_harmless(lexical.comment(text))


def assert_harmless(text: str) -> None:
    assert text.isascii()
    assert text.isprintable()
    for part in ("*/", "/*", "??"):
        assert part not in text
    assert not text.endswith("\\")


@pytest.mark.parametrize("name", ["pump_binary32", "many_binary64"])
def test_text_from_a_plan_changes_no_code_but_the_unit_in_a_position_s_name(name: str) -> None:
    sealed = MODELS[name]
    vectors = make_vectors(sealed)
    self_test = self_test_of(sealed, vectors)

    def code(text: str) -> list[str]:
        hostile = with_text(sealed, text)
        made = C.emit(hostile, self_test) + emit_vectors_header(hostile, vectors)
        bare = without_comments(made.decode("ascii"))
        return re.sub(rf"\b({name.upper()}_IN)_\w+|\"[0-9a-f]{{16}}\"", r"\1", bare).split()

    plain = code("m")
    for text in COMMENT_BREAKERS:
        assert code(text) == plain, text


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("standard", ["-std=c99", "-std=c++98"])  # both still have trigraphs
def test_hostile_text_compiles_without_a_warning(family: str, standard: str, tmp_path: Path) -> None:
    language = "c++" if "++" in standard else "c"
    for position, text in enumerate(COMMENT_BREAKERS):
        sealed = with_text(replace(MODELS["pump_binary32"], name=f"model_{position}"), text)
        (tmp_path / f"h{position}.h").write_text(header(sealed))
    lines = "".join(f'#include "h{position}.h"\n' for position in range(len(COMMENT_BREAKERS)))
    (tmp_path / "all.c").write_text(lines + "int main(void) { return 0; }\n")
    way = Way(compiler(family), language, (standard,))
    done = compiled([*way.command, "-Wtrigraphs", "-Wcomment", "-fsyntax-only", "all.c"], tmp_path)
    assert (done.returncode, done.stderr) == (0, "")


def without_comments(text: str) -> str:
    """The code as translation phases 1 to 3 leave it: trigraphs, spliced lines and comments gone."""
    text = text.replace("??/", "\\").replace("\\\n", "")
    return re.sub(r'("(?:[^"\\\n]|\\.)*")|/\*.*?\*/', lambda match: match[1] or " ", text, flags=re.DOTALL)


def test_inputs_may_have_the_names_of_c_itself(tmp_path: Path) -> None:
    names = ["inputs", "puts", "position", "x", "z", "errno", "main", "printf", "eof", "null", "float_t", "model_id"]
    for arithmetic in ARITHMETICS:
        sealed = named_model(arithmetic, names)
        run = run_header(header(sealed), sealed, Way(compiler("gcc"), "c", ("-std=c99", "-O1")), tmp_path)
        assert (run.trouble, run.self_test) == (None, 0)
        assert list(run.outputs) == [vector.expected for vector in make_vectors(sealed)]


def test_name_that_is_no_identifier_is_refused() -> None:
    with pytest.raises(ReleaseError, match='found "x; int planted"'):
        header(replace(MODELS["plain_binary32"], name="x; int planted"))


def test_positions_carry_input_and_unit() -> None:
    text = header(seal_request(make_trained([SUCTION, FLOW], 1), make_request([SUCTION, FLOW])))
    assert re.search(r"PUMP_CAVITATION_IN_SUCTION_KPA, +/\* kPa, -95.0 to 250.0; outside: fault; NaN: fault", text)
    assert re.search(r"PUMP_CAVITATION_IN_FLOW_M3_PER_H, /\* m\^3/h, 0.0 to 180.0; outside: clamped; NaN: fault", text)
    assert "not a safety function" in text
    assert not re.search("copyright|permission|warranty|MIT", text)


def test_positions_say_what_the_device_delivers() -> None:
    origins, counts = (sample_extended_models()[name][1] for name in ("origins_binary32", "counts_binary32"))
    text = header(origins)
    assert re.search(r"_IN_PRESSURE_PA_ABOVE_101325, +/\* Pa above 101325, -6325.0 to 6675.0; outside: fault", text)
    assert re.search(r"_IN_COLD_DEG_C_ABOVE_MINUS_40_25, +/\* deg C above -40.25, -19.75 to 20.25;", text)
    text = header(counts)
    assert re.search(r"_IN_ADC_COUNTS, +/\* counts of 0.1 kPa from -95, 0.0 to 3450.0; outside: fault", text)


# --- guards ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("family", "flags", "message"),
    [
        ("gcc", "-ffast-math", "compile without -ffast-math"),
        ("gcc", "-Ofast", "compile without -ffast-math"),
        ("gcc", "-funsafe-math-optimizations", "compile without -ffast-math"),
        ("gcc", "-freciprocal-math", "compile without -ffast-math"),
        ("gcc", "-fassociative-math -fno-signed-zeros -fno-trapping-math", "compile without -ffast-math"),
        ("gcc", "-ffinite-math-only", "compile without -ffinite-math-only"),
        ("gcc", "-fno-signed-zeros", "compile without -fno-signed-zeros"),
        ("gcc", "-m32 -mfpmath=387", "FLT_EVAL_METHOD 0"),
        ("gcc", "-m32 -mfpmath=387 -x c++ -std=c++98", "FLT_EVAL_METHOD 0"),
        ("clang", "-ffast-math", "compile without -ffast-math"),
        ("clang", "-Ofast", "compile without -ffast-math"),
        ("clang", "-ffinite-math-only", "compile without -ffinite-math-only"),
        ("clang", "-m32 -mno-sse", "FLT_EVAL_METHOD 0"),
        ("clang", "-m32 -mno-sse -x c++ -std=c++98", "FLT_EVAL_METHOD 0"),
    ],
)
@pytest.mark.parametrize("arithmetic", ARITHMETICS)
def test_header_refuses_flags_that_break_ieee_754(
    family: str, flags: str, message: str, arithmetic: str, tmp_path: Path
) -> None:
    (tmp_path / "pump.h").write_text(header(MODELS[f"pump_{arithmetic}"]))
    (tmp_path / "main.c").write_text('#include "pump.h"\n')
    program = compiler(family).c
    assert compiled([*program, "-fsyntax-only", "main.c"], tmp_path).returncode == 0
    done = compiled([*program, *flags.split(), "-fsyntax-only", "main.c"], tmp_path)
    assert done.returncode != 0
    assert re.search(f'error: .*"pump_{arithmetic}: .*{re.escape(message)}', done.stderr), done.stderr


def test_header_refuses_a_double_of_32_bits(tmp_path: Path) -> None:
    # 8-bit AVR: sizeof(double) is 4 there
    need("clang")
    for arithmetic, status in (("binary32", 0), ("binary64", 1)):
        (tmp_path / "pump.h").write_text(header(MODELS[f"pump_{arithmetic}"]))
        (tmp_path / "main.c").write_text('#include "pump.h"\n')
        command = ["clang", "--target=avr", "-mmcu=atmega328p", "-ffreestanding", "-fsyntax-only", "main.c"]
        done = compiled(command, tmp_path)
        assert done.returncode == status, done.stderr
        assert ("double must be IEEE 754 binary64" in done.stderr) == bool(status)


@pytest.mark.parametrize(
    "flags", ["-funsafe-math-optimizations", "-fassociative-math -fno-signed-zeros -fno-trapping-math"]
)
def test_self_test_sees_what_clang_s_macros_do_not_show(flags: str, tmp_path: Path) -> None:
    # clang defines no macro for these: either the bits are the same or the self-test says otherwise
    for sealed in (MODELS["pump_binary32"], MODELS["many_binary64"]):
        way = Way(compiler("clang"), "c", ("-std=c99", "-O3", *flags.split()))
        run = run_header(header(sealed), sealed, way, tmp_path)
        assert run.trouble is None
        same = list(run.outputs) == [vector.expected for vector in make_vectors(sealed)]
        assert same or run.self_test != 0


def test_self_test_sees_a_program_linked_with_fast_math(tmp_path: Path) -> None:
    # gcc's start-up code then sets the processor to flush, for code that was compiled without the flag too
    sealed = MODELS["pump_binary32"]
    (tmp_path / "pump.h").write_text(header(sealed))
    (tmp_path / "main.c").write_text(f'#include "pump.h"\nint main(void) {{ return {sealed.name}_self_test(); }}\n')
    program = compiler("gcc").c
    assert compiled([*program, "-std=c99", "-O2", "-c", "main.c", "-o", "main.o"], tmp_path).returncode == 0
    assert compiled([*program, "main.o", "-ffast-math", "-o", "main"], tmp_path).returncode == 0
    assert compiled([str(tmp_path / "main")], tmp_path).returncode == 4


# --- users -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("language", ["c", "c++"])
def test_clang_with_every_warning_has_only_exact_comparisons_to_say(language: str, tmp_path: Path) -> None:
    # -Wfloat-equal: NaN by x != x, whole levels, and the probes compare exactly, on purpose.
    need("clang")
    lines = []
    for name, sealed in MODELS.items():
        (tmp_path / f"{name}.h").write_text(header(sealed))
        lines.append(f'#include "{name}.h"\n')
    (tmp_path / "all.c").write_text("".join(lines))
    standard = "-std=c99" if language == "c" else "-std=c++17"
    # -Wunsafe-buffer-usage (newer clang): every array of C that is indexed.
    silent = ("-Wno-float-equal", "-Wno-unknown-warning-option", "-Wno-unsafe-buffer-usage")
    command = ["clang", "-x", language, standard, "-Weverything", *silent, "-fsyntax-only", "all.c"]
    done = compiled(command, tmp_path)
    assert (done.returncode, done.stderr) == (0, "")


def test_gcc_with_its_stricter_warnings_is_silent(tmp_path: Path) -> None:
    more = ("-Wcast-qual", "-Wcast-align=strict", "-Wundef", "-Wstrict-prototypes", "-Wmissing-prototypes",
            "-Wredundant-decls", "-Wunused-macros", "-Wlogical-op", "-Wnull-dereference",
            "-Wsign-conversion", "-Wvla", "-Wswitch-default")  # fmt: skip
    for sealed in MODELS.values():
        real = lexical.REAL[sealed.arithmetic]
        user = f"int user(const {real} *x);\nint user(const {real} *x) {{ return "
        user += f"{sealed.name}_decide(x) + (int){sealed.name}_probability(x) + {sealed.name}_self_test(); }}\n"
        (tmp_path / "model.h").write_text(header(sealed))
        (tmp_path / "main.c").write_text(f'#include "model.h"\n#include "model.h"\n{user}')
        for level in ("-O1", "-O2", "-Os"):  # what gcc believes to be uninitialised depends on it
            command = [*compiler("gcc").c, "-std=c99", level, *STRICT, *more, "-c", "main.c", "-o", "main.o"]
            done = compiled(command, tmp_path)
            assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.parametrize("family", FAMILIES)
def test_separate_code_is_one_copy_for_users_in_c_and_c_plus_plus(family: str, tmp_path: Path) -> None:
    sealed = line_model("binary32")
    (tmp_path / "line.h").write_text(header(sealed))
    (tmp_path / "code.c").write_text('#define LINE_SEPARATE\n#define LINE_CODE_HERE\n#include "line.h"\n')
    user = '#define LINE_SEPARATE\n#include "line.h"\n'
    function = "int {}(const float *x) {{ return line_decide(x); }}\n"
    (tmp_path / "one.c").write_text(user + "int one(const float *x);\n" + function.format("one"))
    (tmp_path / "two.cpp").write_text(user + 'extern "C" int two(const float *x);\n' + function.format("two"))
    found = compiler(family)
    assert found.cxx
    for file, program, standard in (
        ("code.c", found.c, "-std=c99"),
        ("one.c", found.c, "-std=c99"),
        ("two.cpp", found.cxx, "-std=c++98"),
    ):
        done = compiled([*program, standard, *STRICT, "-c", file, "-o", f"{file}.o"], tmp_path)
        assert (done.returncode, done.stderr) == (0, "")
    source = (
        user
        + "int one(const float *x);\nint two(const float *x);\nint main(void) {\n"
        + "  const float below[1] = { 3.0f }, above[1] = { 5.0f };\n"
        + "  if (line_self_test() != 0) return 1;\n"
        + "  if (one(below) != 0 || one(above) != 1 || two(below) != 0 || two(above) != 1) return 2;\n"
        + "  return 0;\n}\n"
    )
    assert status_of(source, [*found.c, "code.c.o", "one.c.o", "two.cpp.o"], tmp_path) == 0
    need("nm")
    for file, kind in (("code.c.o", "T"), ("one.c.o", "U"), ("two.cpp.o", "U")):
        assert f" {kind} line_decide" in compiled(["nm", file], tmp_path).stdout


def test_two_models_live_in_one_program(tmp_path: Path) -> None:
    names = ("pump_binary32", "many_binary64", "lenient_binary32")
    for name in names:
        (tmp_path / f"{name}.h").write_text(header(MODELS[name]))
    source = "".join(f'#include "{name}.h"\n' for name in names) + "int main(void) { return "
    source += " + ".join(f"{name}_self_test()" for name in names) + "; }\n"
    for family in FAMILIES:
        assert status_of(source, [*compiler(family).c, "-std=c99", *STRICT], tmp_path) == 0


# --- vectors.h -------------------------------------------------------------------------------------------------------


def vectors_header(sealed: SealedModel, vectors: tuple[Vector, ...] | None = None) -> str:
    return emit_vectors_header(sealed, vectors or make_vectors(sealed)).decode("ascii")


@pytest.mark.parametrize("standard", ["-std=c99", "-std=c++98"])
@pytest.mark.parametrize("name", ["pump_binary32", "many_binary64", "levels_only_binary64", "one_input_binary32"])
def test_vectors_header_finds_the_first_row_that_differs(name: str, standard: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    (tmp_path / C.file(sealed)).write_text(header(sealed))
    source = f'#include "vectors.h"\n#include "vectors.h"\nint main(void) {{ return {name}_run_vectors(); }}\n'
    found = compiler("gcc")
    command = [*(found.cxx if "++" in standard else found.c), standard, "-O1", *STRICT]  # type: ignore[misc]
    command += ["-x", "c++"] if "++" in standard else []
    vectors = make_vectors(sealed)
    (tmp_path / "vectors.h").write_text(vectors_header(sealed))
    assert status_of(source, command, tmp_path) == 0
    true = vectors[7].expected
    wrong = replace(vectors[7], expected=replace(true, probability=(true.probability[0] ^ 1,)))
    (tmp_path / "vectors.h").write_text(vectors_header(sealed, (*vectors[:7], wrong, *vectors[8:])))
    assert status_of(source, command, tmp_path) == 8
