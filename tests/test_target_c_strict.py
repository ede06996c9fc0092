"""The C header under the strictest warnings and free rule checkers, in every arithmetic.

Expected values: silence, but for what is named here with its reason. Rules are those of MISRA C:2012 as cppcheck's
addon tests them.
"""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from c_programs import FAMILIES, compiled, compiler, header, need
from models import sample_extended_models, sample_integer_models, sample_sealed_models

from export.targets.c.ways import STRICT
from runtime_min.model import INTEGERS, SealedModel

SAMPLES = sample_sealed_models() | sample_extended_models() | sample_integer_models()
MODELS = {name: sealed for name, (_, sealed) in SAMPLES.items()}
CHECKED = (
    "pump_int16",
    "counts_int32",
    "rare_int16",
    "wide_int16",
    "levels_only_int32",
    "pump_binary32",
    "mixed_binary64",
)

# Floating point only: NaN by x != x, whole levels and the probes compare exactly, on purpose.
CLANG_FLOATS = ("-Wno-float-equal",)
# Newer clang: every array of C that is indexed.
CLANG = ("-Wno-unknown-warning-option", "-Wno-unsafe-buffer-usage")

GCC = (
    "-Wcast-qual", "-Wcast-align=strict", "-Wundef", "-Wstrict-prototypes", "-Wmissing-prototypes", "-Wredundant-decls",
    "-Wunused-macros", "-Wlogical-op", "-Wnull-dereference", "-Wsign-conversion", "-Wvla", "-Wswitch-default",
    "-Wduplicated-cond", "-Wduplicated-branches", "-Wunused-const-variable=2", "-Wpadded",
    "-Wdeclaration-after-statement", "-Wbad-function-cast", "-Wold-style-definition",
)  # fmt: skip

# What the rules ask and the header does otherwise, and why.
DEVIATIONS = {
    "2.4": "enumerations without a tag: their constants are what is used",
    "2.5": "macros for those who include the header, which it does not use itself",
    "8.9": "a table of one function stands beside the others, where it is read best",
    "10.1": "shifts by constants of an enumeration, whose values are stated beside them",
    "10.3": "constants that fit are given to wider or narrower types",
    "10.4": "a signed and an unsigned part of one number are put together",
    "10.8": "a product of widened factors is not widened afterwards",
    "11.5": "bytes of a number are read through a pointer to void, the only way that is free of undefined behaviour",
    "12.1": "comparisons stand in && and || without brackets",
    "12.3": "two variables in one declaration",
    "15.5": "a function ends where its answer is known",
    "15.7": "if and else if without a last else: nothing is left to do",
    "17.8": "a parameter goes on as the running value",
    "20.5": "macros that are only the header's own end with it",
    "20.7": "a type in a macro cannot stand in brackets",
}  # fmt: skip


@pytest.mark.parametrize("language", ["-std=c99", "-std=c17", "-std=c++17"])
@pytest.mark.parametrize("arithmetic", ["binary32", "binary64", "int16", "int32"])
def test_clang_with_every_warning_is_silent(arithmetic: str, language: str, tmp_path: Path) -> None:
    need("clang")
    names = [name for name, sealed in MODELS.items() if sealed.arithmetic == arithmetic]
    for name in names:
        (tmp_path / f"{name}.h").write_text(header(MODELS[name]))
    (tmp_path / "all.c").write_text("".join(f'#include "{name}.h"\n' for name in names))
    silent = CLANG if arithmetic in INTEGERS else CLANG + CLANG_FLOATS
    command = ["clang", "-x", "c++" if "++" in language else "c", language, "-Weverything", *silent]
    done = compiled([*command, "-fsyntax-only", "all.c"], tmp_path)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.parametrize("language", ["-std=c99", "-std=c++17"])
def test_gcc_with_its_stricter_warnings_is_silent_on_integers(language: str, tmp_path: Path) -> None:
    found = compiler("gcc")
    plain = "++" not in language
    program = found.c if plain else found.cxx
    assert program is not None
    only_c = ("-Wstrict-prototypes", "-Wmissing-prototypes", "-Wdeclaration-after-statement", "-Wbad-function-cast",
              "-Wold-style-definition")  # fmt: skip
    more = [flag for flag in GCC if plain or flag not in only_c] + ([] if plain else ["-Wold-style-cast"])
    for name in [name for name, sealed in MODELS.items() if sealed.arithmetic in INTEGERS]:
        (tmp_path / "model.h").write_text(header(MODELS[name]))
        (tmp_path / "main.c").write_text(user(MODELS[name]))
        for level in ("-O1", "-O2", "-Os"):
            command = [*program, "-x", "c" if plain else "c++", language, level, *STRICT, *more, "-c", "main.c"]
            done = compiled([*command, "-o", "main.o"], tmp_path)
            assert (done.returncode, done.stderr) == (0, ""), name


def user(sealed: SealedModel) -> str:
    """A file that uses every function."""
    name = sealed.name
    count = re.search(rf"{name}_decide\(const (\w+)", header(sealed))
    assert count is not None
    head = f"int user(const {count[1]} *x)"
    calls = f"{name}_decide(x) + {name}_check_inputs(x) + {name}_self_test() + ({name}_log_odds(x) > 0 ? 1 : 0)"
    twice = '#include "model.h"\n' * 2
    return f"{twice}{head};\n{head}\n{{\n    return {calls} + {name}_probability(x);\n}}\n"


def cppcheck(name: str, folder: Path, *options: str) -> str:
    """What cppcheck says of a file that uses a header; its macros are those of a plain compiler, AVR's left out."""
    need("cppcheck")
    (folder / "model.h").write_text(header(MODELS[name]))
    (folder / "main.c").write_text(f'#include "model.h"\nint main(void)\n{{\n    return {name}_self_test();\n}}\n')
    limits = ("FLT_RADIX=2", "FLT_MANT_DIG=24", "FLT_MAX_EXP=128", "DBL_MANT_DIG=53", "DBL_MAX_EXP=1024",
              "FLT_EVAL_METHOD=0", "FLT_EPSILON=1.19209290e-7F", "DBL_EPSILON=2.2204460492503131e-16",
              "FLT_MIN=1.17549435e-38F", "DBL_MIN=2.2250738585072014e-308")  # fmt: skip
    command = ["cppcheck", "--std=c99", "--quiet", "--template={id} {file}:{line}", *options]
    command += [f"-D{limit}" for limit in limits]
    command += [f"-U{name.upper()}_SEPARATE", "-U__AVR_HAVE_LPMX__", "--suppress=missingIncludeSystem", "main.c"]
    done = compiled(command, folder)
    assert done.returncode == 0, done.stderr
    return done.stdout + done.stderr


@pytest.mark.parametrize("name", CHECKED)
def test_cppcheck_finds_nothing(name: str, tmp_path: Path) -> None:
    # It does not see that bytes written through a pointer are the number that is returned.
    silent = () if MODELS[name].arithmetic in INTEGERS else ("--suppress=unreadVariable",)
    assert cppcheck(name, tmp_path, "--enable=all", "--inconclusive", *silent) == ""


def test_cppcheck_finds_what_is_planted(tmp_path: Path) -> None:
    found = header(MODELS["pump_int16"]).replace(
        "int i;\n\n    if (", "int i;\n    int unused[2];\n    unused[2] = 1;\n    if (", 1
    )
    (tmp_path / "edited.h").write_text(found)
    (tmp_path / "main.c").write_text('#include "edited.h"\nint main(void)\n{\n    return pump_int16_self_test();\n}\n')
    need("cppcheck")
    command = ["cppcheck", "--quiet", "--enable=all", "--template={id}", "-UPUMP_INT16_SEPARATE", "main.c"]
    assert "arrayIndexOutOfBounds" in compiled(command, tmp_path).stderr


@pytest.mark.parametrize("name", CHECKED)
def test_rules_for_critical_code_hold_but_for_the_named_ones(name: str, tmp_path: Path) -> None:
    found = set(re.findall(r"misra-c2012-([0-9.]+)", cppcheck(name, tmp_path, "--addon=misra")))
    assert found, "the addon did not run"
    assert found - set(DEVIATIONS) == set()


@pytest.mark.parametrize("name", CHECKED)
def test_no_function_calls_itself_or_takes_memory(name: str) -> None:
    code = re.sub(r"/\*.*?\*/", "", header(MODELS[name]), flags=re.DOTALL)
    bodies = dict(re.findall(r"(?m)^[\w ]+?(\w+)\([^;{}]*\)\n\{\n(.*?)^\}", code, flags=re.DOTALL))
    calls = {
        function: {other for other in bodies if re.search(rf"\b{other}\(", body)} for function, body in bodies.items()
    }
    assert len(bodies) > 8
    done: set[str] = set()
    while done != set(bodies):  # each needs only functions that are done: so none comes round to itself
        ready = {function for function, others in calls.items() if others <= done} - done
        assert ready, calls
        done |= ready
    assert not re.search(r"\b(malloc|calloc|realloc|free|alloca|goto|setjmp)\b", code)


@pytest.mark.parametrize("family", FAMILIES)
def test_integer_headers_of_two_models_live_in_one_program(family: str, tmp_path: Path) -> None:
    names = ("pump_int16", "pump_int32", "many_int16", "levels_only_int32")
    for name in names:
        (tmp_path / f"{name}.h").write_text(header(MODELS[name]))
    source = "".join(f'#include "{name}.h"\n' for name in names) + "int main(void) { return "
    (tmp_path / "main.c").write_text(source + " + ".join(f"{name}_self_test()" for name in names) + "; }\n")
    done = compiled([*compiler(family).c, "-std=c99", *STRICT, "main.c", "-o", "main"], tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    assert compiled([str(tmp_path / "main")], tmp_path).returncode == 0
