"""Integer C headers that are wrong on purpose: by one number, one step or one keyword, and what finds it.

Expected values: that each planted mistake is found, and by which part of the self-test.
"""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import pytest
from c_programs import C, compiled, compiler, header, need, run_header, status_of
from models import sample_integer_models

from export.targets import SELF_TEST_TABLES, SELF_TEST_VECTOR, SelfTest
from export.targets.c.emit import emit
from export.targets.c.vectors_header import emit_vectors_header
from export.targets.c.ways import STRICT, Way
from export.vectors import make_vectors, self_test_of
from runtime_min.arithmetic import ACCUMULATOR_BITS
from runtime_min.integer_score import count_bits
from runtime_min.model import SealedModel

MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}
STRICT_C99 = ("-std=c99", "-O2")


def gcc(*flags: str) -> Way:
    return Way(compiler("gcc"), "c", flags or STRICT_C99)


# --- the self-test ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["pump_int16", "pump_int32", "rare_int16", "levels_only_int32", "wide_int16"])
def test_self_test_sees_every_number_of_the_integer_tables(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    self_test = self_test_of(sealed, make_vectors(sealed))
    variants = list(one_off(sealed))
    assert len(variants) > 40
    lines, calls = [], []
    for position, variant in enumerate(variants):
        (tmp_path / f"v{position}.h").write_bytes(emit(replace(variant, name=f"variant_{position}"), self_test))
        lines.append(f'#include "v{position}.h"')
        calls.append(f"if (variant_{position}_self_test() != {SELF_TEST_TABLES}) return 1 + {position};")
    source = "\n".join([*lines, "int main(void) {", *calls, "return 0; }"])
    assert status_of(source, [*compiler("gcc").c, "-std=c99", "-O0", "-w"], tmp_path) == 0


def one_off(sealed: SealedModel):
    """The model with each of its numbers in turn one larger."""
    for position, entry in enumerate(sealed.inputs):
        for key in ("low", "high", "typical"):
            if getattr(entry, key) is not None and not (entry.levels and key == "high"):
                changed = replace(entry, **{key: getattr(entry, key) + 1})
                yield replace(sealed, inputs=(*sealed.inputs[:position], changed, *sealed.inputs[position + 1 :]))
    yield replace(sealed, intercepts=(sealed.intercepts[0] + 1,))
    for position, term in enumerate(sealed.terms):
        changed = []
        if term.form == "value":
            changed += [replace(term, datum=term.datum + 1), replace(term, shift=term.shift + 1)]
        for column, weight in enumerate(term.weights[0]):
            row = (*term.weights[0][:column], weight + 1, *term.weights[0][column + 1 :])
            changed.append(replace(term, weights=(row,)))
        for one in changed:
            yield replace(sealed, terms=(*sealed.terms[:position], one, *sealed.terms[position + 1 :]))
    high = sealed.decision.high
    yield replace(sealed, decision=replace(sealed.decision, high=high + 1))
    table = sealed.table
    for key in ("drop", "step"):
        yield replace(sealed, table=replace(table, **{key: getattr(table, key) + 1}))
    for position, node in enumerate(table.nodes):
        nodes = (*table.nodes[:position], node + 1, *table.nodes[position + 1 :])
        yield replace(sealed, table=replace(table, nodes=nodes))


@pytest.mark.parametrize("position", [0, 5, 11])
@pytest.mark.parametrize("name", ["pump_int16", "pump_int32", "wide_int16"])
def test_integer_self_test_names_the_vector_that_differs(name: str, position: int, tmp_path: Path) -> None:
    sealed = MODELS[name]
    self_test = self_test_of(sealed, make_vectors(sealed))
    vector = self_test.vectors[position]
    true = vector.expected
    top = 1 << (ACCUMULATOR_BITS[sealed.arithmetic] - 2)
    for wrong in (
        replace(true, fault=true.fault + 1),
        replace(true, decision=true.decision + 3),
        replace(true, log_odds=(true.log_odds[0] ^ 1,)),
        replace(true, log_odds=(true.log_odds[0] ^ top,)),
        replace(true, probability=(true.probability[0] ^ 0x8000,)),
    ):
        vectors = list(self_test.vectors)
        vectors[position] = replace(vector, expected=wrong)
        text = emit(sealed, SelfTest(tuple(vectors), self_test.crc)).decode()
        assert run_header(text, sealed, gcc(), tmp_path).self_test == SELF_TEST_VECTOR + position


@pytest.mark.parametrize("standard", ["-std=c99", "-std=c++11"])
@pytest.mark.parametrize("name", ["pump_int16", "many_int32", "wide_int16", "levels_only_int32"])
def test_integer_vectors_header_finds_the_first_row_that_differs(name: str, standard: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    (tmp_path / C.file(sealed)).write_text(header(sealed))
    source = f'#include "vectors.h"\n#include "vectors.h"\nint main(void) {{ return {name}_run_vectors(); }}\n'
    found = compiler("gcc")
    command = [*(found.cxx if "++" in standard else found.c), standard, "-O1", *STRICT]  # type: ignore[misc]
    command += ["-x", "c++"] if "++" in standard else []
    vectors = make_vectors(sealed)
    (tmp_path / "vectors.h").write_bytes(emit_vectors_header(sealed, vectors))
    assert status_of(source, command, tmp_path) == 0
    true = vectors[7].expected
    wrong = replace(vectors[7], expected=replace(true, probability=(true.probability[0] ^ 1,)))
    (tmp_path / "vectors.h").write_bytes(emit_vectors_header(sealed, (*vectors[:7], wrong, *vectors[8:])))
    assert status_of(source, command, tmp_path) == 8


# --- planted mistakes ------------------------------------------------------------------------------------------------

# What is written, and what stands there instead; N_ and n_ are the model's name, WORD the type of a count.
MISTAKES = {
    "the table's interpolation rounds downwards": (r"\* rest \+ half\)", "* rest)"),
    "a shift drops one bit too many": (r">> N_DROP;", ">> (N_DROP + 1);"),
    "a product is shifted one place too far": (r"1\) << shift\)", "1) << (shift + 1))"),
    "an entry of the table is one off": (r"16384, 18427", "16384, 18428"),
    "a product is cut to the width of a count": (
        r"N_CAST\((\w+), weight\) \* N_CAST\(\w+, count - datum\)",
        r"N_CAST(\1, N_CAST(WORD, weight * (count - datum)))",
    ),
    "a negative count loses its sign": (
        r"N_CAST\((\w+), count - datum\)",
        r"N_CAST(\1, N_CAST(uWORD, count) - N_CAST(uWORD, datum))",
    ),
    "what is missing counts as a number": (r"if \(\*count == N_MISSING\) \{\n        return 0;\n    \}", ""),
    "a clamp takes the other limit": (r"\*count = low;", "*count = high;"),
    "a level takes its neighbour's weight": (r"\[weight \+ count\]", "[weight + (count + 1) % 3]"),
}


@pytest.mark.parametrize("arithmetic", ["int16", "int32"])
@pytest.mark.parametrize("mistake", MISTAKES)
def test_planted_mistake_is_caught(mistake: str, arithmetic: str, tmp_path: Path) -> None:
    sealed = MODELS[f"pump_{arithmetic}"]
    word = f"int{count_bits(sealed)}_t"
    spelled = {"N_": f"{sealed.name.upper()}_", "n_": f"{sealed.name}_", "uWORD": f"u{word}", "WORD": word}
    pattern, instead = (
        re.sub(r"\bN_|\bn_|uWORD|WORD", lambda match: spelled[match[0]], text) for text in MISTAKES[mistake]
    )
    text, count = re.subn(pattern, instead, header(sealed))
    assert count == 1
    run = run_header(text, sealed, gcc("-std=c99", "-O2", "-w", "-fwrapv"), tmp_path)
    assert run.trouble is None
    assert list(run.outputs or ()) != [vector.expected for vector in make_vectors(sealed)]


@pytest.mark.parametrize("name", ["pump_int16", "pump_int32"])
def test_tables_fill_no_data_memory_on_avr_unless_progmem_is_left_out(name: str, tmp_path: Path) -> None:
    need("avr-gcc", "avr-size")
    sealed = MODELS[name]
    text = header(sealed)
    for edited, taken in (
        (text, False),
        (text.replace("__attribute__((__progmem__))", ""), True),
        (text.replace(f"{sealed.name.upper()}_APART 1", f"{sealed.name.upper()}_APART 0"), False),
    ):
        (tmp_path / "model.h").write_text(edited)
        source = f'#include "model.h"\nint main(void) {{ return {name}_self_test(); }}\n'
        (tmp_path / "main.c").write_text(source)
        command = ["avr-gcc", "-mmcu=atmega328p", "-std=gnu99", "-Os", *STRICT, "main.c", "-o", "main.elf"]
        done = compiled(command, tmp_path)
        assert (done.returncode, done.stderr) == (0, "")
        text_bytes, data, bss = map(int, compiled(["avr-size", "main.elf"], tmp_path).stdout.split("\n")[1].split()[:3])
        assert text_bytes > 500
        assert (data + bss > 100) is taken
