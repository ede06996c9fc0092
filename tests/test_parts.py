"""The C header on emulated parts: the reference scorer's bits there, what it costs there, and the board's program.

Expected values: the reference scorer's bits; for costs, code whose size and length the instruction sets give (a `nop`
is two bytes and one instruction in Thumb, two bytes and one cycle on AVR: Arm v6-M and AVR instruction set manuals);
mistakes planted on purpose.
"""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from c_programs import header
from models import sample_integer_models, sample_sealed_models
from shipped import EXAMPLE

from export.commands import main
from export.parts import PARTS, Part
from export.parts.board import run_board
from export.parts.measure import FUNCTIONS, call_of, cost_of, measure
from export.parts.program import TroubleError
from export.parts.run import run_part
from export.targets import SELF_TEST_TABLES, Run
from export.targets.c.vectors_header import emit_board, emit_vectors_header, piece_count
from export.vector_files import read_vectors
from export.vectors import make_vectors
from runtime_min.codec import load
from runtime_min.model import SealedModel
from trainer import plan

MODELS = {name: sealed for name, (_, sealed) in (sample_sealed_models() | sample_integer_models()).items()}
FLOATING = ("pump_binary32", "many_binary32", "levels_only_binary32", "tiny_binary32", "pump_binary64")
INTEGER = ("pump_int16", "pump_int32", "counts_int16", "wide_int16", "many_int32")
AVR = PARTS["atmega328p"]


@pytest.fixture(params=PARTS)
def part(request: pytest.FixtureRequest) -> Part:
    return there(PARTS[request.param])


def there(part: Part) -> Part:
    """The part; skips where its tools are missing, and says which."""
    missing = part.missing()
    if missing:
        pytest.skip(f"{part.name}: {missing}")
    return part


def run_text(part: Part, text: str, sealed: SealedModel, folder: Path, thorough: bool = False) -> list[Run]:
    """A (perhaps edited) header's runs on the model's vectors."""
    path = folder / "edited.h"
    path.write_text(text)
    return list(run_part(part, path, sealed, [vector.inputs for vector in make_vectors(sealed)], thorough))


def wrong(run: Run, sealed: SealedModel) -> int:
    """How many rows have other bits."""
    return sum(ours != vector.expected for ours, vector in zip(run.outputs, make_vectors(sealed), strict=True))


# --- the same bits ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", FLOATING + INTEGER)
def test_header_gives_the_bits_of_the_reference_scorer_on_the_part(name: str, part: Part, tmp_path: Path) -> None:
    sealed = MODELS[name]
    (run,) = run_text(part, header(sealed), sealed, tmp_path)
    if sealed.arithmetic not in part.arithmetics:
        assert (part, sealed.arithmetic) == (AVR, "binary64")
        assert not run.ran
        assert run.trouble == "binary64 does not suit this part; seal for binary32, int16, int32"
        return
    assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, 0)
    assert list(run.outputs) == [vector.expected for vector in make_vectors(sealed)]


def test_thorough_run_compiles_in_three_ways(part: Part, tmp_path: Path) -> None:
    sealed = MODELS["pump_binary32"]
    runs = run_text(part, header(sealed), sealed, tmp_path, thorough=True)
    assert [(run.trouble, run.self_test, wrong(run, sealed)) for run in runs] == [(None, 0, 0)] * 3
    assert len({run.what for run in runs}) == 3


# --- it must be able to fail -----------------------------------------------------------------------------------------


def test_wrong_weight_is_found_on_the_part(part: Part, tmp_path: Path) -> None:
    sealed = MODELS["one_input_binary32"]
    text = re.sub(r"(_weight\[\w+\] \w+ = \{\n    )-?[\d.e-]+f", r"\g<1>0.25f", header(sealed))
    assert text != header(sealed)
    (run,) = run_text(part, text, sealed, tmp_path)
    assert run.self_test == SELF_TEST_TABLES
    assert wrong(run, sealed) > 100


@pytest.mark.parametrize("name", ["many_binary32", "many_int16"])
def test_tables_left_out_of_program_memory_are_found(name: str, tmp_path: Path) -> None:
    """The tables are then in data memory, and what is read is what happens to stand at that place of the program."""
    sealed = MODELS[name]
    text = header(sealed).replace(" __attribute__((__progmem__))", "")
    assert text != header(sealed)
    (run,) = run_text(there(AVR), text, sealed, tmp_path)
    assert run.trouble is not None or (run.self_test == SELF_TEST_TABLES and wrong(run, sealed) > 100)


def test_tables_that_fill_the_data_memory_are_found(tmp_path: Path) -> None:
    sealed = MODELS["many_binary32"]
    text = header(sealed).replace("#if defined(__AVR_HAVE_LPMX__)", "#if 0")
    assert text != header(sealed)
    (run,) = run_text(there(AVR), text, sealed, tmp_path)
    assert run.trouble is not None or run.self_test == SELF_TEST_TABLES


def in_log_odds(sealed: SealedModel, statement: str) -> str:
    """The header with one more statement at the start of log_odds."""
    text, count = re.subn(
        rf"(NAME_FUNCTION|static inline|{sealed.name.upper()}_FUNCTION)( \w+ {sealed.name}_log_odds\([^)]*\)\n\{{\n)",
        rf"\1\2    {statement}\n",
        header(sealed),
    )
    assert count == 1
    return text


def test_program_that_stops_early_is_trouble(tmp_path: Path) -> None:
    """0xDE00 is UDF, an instruction that is never defined: Arm v6-M Architecture Reference Manual."""
    sealed = MODELS["plain_binary32"]
    text = in_log_odds(sealed, '__asm__ volatile(".short 0xde00");')
    (run,) = run_text(there(PARTS["cortex-m0"]), text, sealed, tmp_path)
    assert run.ran
    assert run.trouble == f'the program stopped early, after 1 lines, last "{sealed.model_id} "'


def test_program_that_never_ends_is_trouble(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("export.parts.run.SECONDS", 3)
    sealed = MODELS["plain_binary32"]
    (run,) = run_text(there(PARTS["cortex-m3"]), in_log_odds(sealed, "for (;;) { }"), sealed, tmp_path)
    assert run.ran
    assert run.trouble == "the program did not finish within 3 s"


def test_header_that_does_not_compile_is_trouble(part: Part, tmp_path: Path) -> None:
    sealed = MODELS["plain_binary32"]
    (run,) = run_text(part, '#error "planted"\n' + header(sealed), sealed, tmp_path)
    assert run.ran
    assert run.trouble is not None
    assert run.trouble.startswith("it does not compile: ")
    assert "planted" in run.trouble


def test_program_too_large_for_the_part_says_so(tmp_path: Path) -> None:
    sealed = MODELS["plain_binary32"]
    small = replace(there(PARTS["cortex-m3"]), rom=3000)
    (run,) = run_text(small, header(sealed), sealed, tmp_path)
    assert run.trouble == f"it does not fit into 3000 bytes of program memory and {small.ram} of data memory"


@pytest.mark.parametrize(
    ("name", "message"),
    [
        (
            "cortex-m0",
            "found no arm-none-eabi-gcc, libc_nano.a, qemu-system-arm; install it (Debian: apt-get install "
            "gcc-arm-none-eabi libnewlib-arm-none-eabi qemu-system-arm)",
        ),
        (
            "atmega328p",
            "found no avr-gcc, libm.a, simavr; install it (Debian: apt-get install gcc-avr avr-libc simavr)",
        ),
    ],
)
def test_missing_tool_is_named_with_its_package(
    name: str, message: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PATH", str(tmp_path))
    sealed = MODELS["plain_binary32"]
    (run,) = run_text(PARTS[name], header(sealed), sealed, tmp_path)
    assert (run.ran, run.trouble) == (False, message)


# --- what it costs ---------------------------------------------------------------------------------------------------


def cost_of_statement(part: Part, statement: str) -> tuple[int, int, tuple[int, ...]]:
    """Bytes of program, of stack, and the counts, of a function that runs a statement and returns 0."""
    sealed = MODELS["one_input_binary32"]
    source = (
        f"int call(const float *inputs);\nint call(const float *inputs) {{ (void)inputs; {statement} return 0; }}\n"
    )
    cost = cost_of(part, {"call.c": source.encode()}, sealed, "decide", [(0.0,), (1.0,)])
    return cost.text, cost.stack, cost.row_counts


@pytest.mark.parametrize("count", [1, 100, 1500])
def test_known_code_costs_what_the_instruction_set_says(count: int, part: Part) -> None:
    text, _, counts = cost_of_statement(part, f'__asm__ volatile(".rept {count}\\n\\tnop\\n\\t.endr");')
    assert abs(text - 2 * count) <= 2  # functions begin on words
    assert counts == (count, count)


def test_counter_of_avr_goes_beyond_16_bits() -> None:
    """In a loop of 4 cycles (sbiw 2, brne 2, the last 1), 20000 times: AVR instruction set manual."""
    loop = '__asm__ volatile("ldi r24, 0x20\\n\\tldi r25, 0x4e\\n\\t1: sbiw r24, 1\\n\\tbrne 1b" ::: "r24", "r25");'
    _, _, counts = cost_of_statement(there(AVR), loop)
    assert counts == (2 + 20000 * 4 - 1,) * 2


def test_stack_is_as_deep_as_what_stands_on_it(part: Part) -> None:
    depths = []
    for size in (32, 256):
        fill = f"volatile char at[{size}]; int i; for (i = 0; i < {size}; i++) {{ at[i] = 1; }}"
        depths.append(cost_of_statement(part, fill)[1])
    assert depths[1] - depths[0] == 256 - 32
    assert 32 <= depths[0] <= 32 + 40


def test_costs_of_every_function_are_measured_and_no_table_is_in_data_memory(part: Part) -> None:
    sealed = MODELS["pump_binary32"]
    rows = [vector.inputs for vector in make_vectors(sealed) if vector.expected.fault == 0]
    found = measure(part, header(sealed).encode(), sealed, rows)
    assert tuple(entry.function for entry in found) == FUNCTIONS
    for entry in found:
        assert (entry.part, entry.counts, entry.data) == (part.name, part.counts, 0)
        assert 100 < entry.text < 10_000
        assert 0 < entry.least <= entry.most < 20_000
        assert entry.stack < 200
    assert found[0].text < found[1].text  # the probability adds to the log-odds


def test_cost_of_self_test_is_not_paid_where_it_is_not_called(part: Part) -> None:
    sealed = MODELS["plain_binary32"]
    rows = [vector.inputs for vector in make_vectors(sealed) if vector.expected.fault == 0]

    def text(head: str) -> int:
        return cost_of(
            part, {"model.h": head.encode(), "call.c": call_of(sealed, "decide")}, sealed, "decide", rows
        ).text

    whole = header(sealed)
    without = re.sub(
        r"\n    if \(\w+_crc_of_tables\(\) .*?\n    return 0;\n\}", "\n    return 0;\n}", whole, flags=re.DOTALL
    )
    assert without != whole
    assert text(whole) == text(without)


# --- the board's program ---------------------------------------------------------------------------------------------


def board_files(sealed: SealedModel, folder: Path) -> Path:
    vectors = make_vectors(sealed)
    (folder / f"{sealed.name}.h").write_text(header(sealed))
    (folder / "vectors.h").write_bytes(emit_vectors_header(sealed, vectors))
    (folder / "board.c").write_bytes(emit_board(sealed, vectors))
    return folder


@pytest.mark.parametrize("name", ["pump_binary32", "many_binary64", "pump_int16", "many_int32"])
def test_board_program_passes_on_the_part(name: str, part: Part, tmp_path: Path) -> None:
    sealed = MODELS[name]
    if sealed.arithmetic not in part.arithmetics:
        return
    vectors = make_vectors(sealed)
    verdict = run_board(part, board_files(sealed, tmp_path), sealed, vectors)
    if verdict.endswith("pieces"):
        assert part is AVR
        assert verdict == f"PASS, all {len(vectors)} rows, in {piece_count(sealed, vectors)} pieces"
    else:
        assert verdict == f"PASS, all {len(vectors)} rows give the expected bits"


def test_many_vectors_run_on_a_small_part_in_pieces(tmp_path: Path) -> None:
    sealed = MODELS["many_binary32"]
    vectors = make_vectors(sealed)
    verdict = run_board(there(AVR), board_files(sealed, tmp_path), sealed, vectors)
    assert verdict == f"PASS, all {len(vectors)} rows, in {piece_count(sealed, vectors)} pieces"
    assert piece_count(sealed, vectors) > 1


def last_word(text: str) -> re.Match[str]:
    return list(re.finditer(r"0x([0-9A-F]+)U?L? \}", text))[41]


@pytest.mark.parametrize(
    ("file", "edit", "said"),
    [
        (
            "vectors.h",
            lambda text: text[: (m := last_word(text)).start()] + "0x00020000UL }" + text[m.end() :],
            ", row 42",
        ),
        ("pump_binary32.h", lambda text: text.replace("_low[position]", "_high[position]", 1), ", self-test 10"),
    ],
)
def test_board_program_names_what_failed(
    file: str, edit: Callable[[str], str], said: str, part: Part, tmp_path: Path
) -> None:
    sealed = MODELS["pump_binary32"]
    folder = board_files(sealed, tmp_path)
    (folder / file).write_text(edit((folder / file).read_text()))
    with pytest.raises(TroubleError) as caught:
        run_board(part, folder, sealed, make_vectors(sealed))
    assert f"{sealed.name} {sealed.model_id}: FAIL{said}" in str(caught.value)


# --- the commands ----------------------------------------------------------------------------------------------------


def test_parts_of_the_plan_are_the_parts_here() -> None:
    assert tuple(PARTS) == plan.PARTS


def test_check_on_a_part_reports_bits_board_and_costs(release: Path, capsys: pytest.CaptureFixture[str]) -> None:
    there(PARTS["cortex-m0"])
    there(AVR)
    assert main(["check", str(release), "--on", "cortex-m0", "--on", "atmega328p", "--json"]) == 0
    report = json.loads(capsys.readouterr().out)
    assert report["ok"]
    whats = [(check["artefact"], check["what"]) for check in report["checks"]]
    for shown in ("Cortex-M0", "ATmega328P"):
        compiled = rf"{shown}, emulated, \S+-gcc [\d.]+ -std=gnu99 -Os"
        assert any(artefact == "pump_cavitation.h" and re.fullmatch(compiled, what) for artefact, what in whats)
        assert ("board.c", f"{shown}, emulated") in whats
    assert [(entry["part"], entry["function"], entry["counts"]) for entry in report["parts"]] == [
        (name, function, PARTS[name].counts) for name in ("cortex-m0", "atmega328p") for function in FUNCTIONS
    ]
    vectors = read_vectors(load(release / "pump_cavitation.sealed.json"), release / "vectors.csv")
    board = next(check for check in report["checks"] if check["artefact"] == "board.c")
    assert board["found"] == f"PASS, all {len(vectors)} rows give the expected bits"


def test_check_on_a_part_prints_a_table_of_costs(release: Path, capsys: pytest.CaptureFixture[str]) -> None:
    there(PARTS["cortex-m4f"])
    assert main(["check", str(release), "--on", "cortex-m4f"]) == 0
    out = capsys.readouterr().out
    assert re.search(r"\ncost +bytes +data +stack +at most\n +cortex-m4f\n", out)
    assert (
        len(re.findall(r"\n +(?:log_odds|probability|decide|check_inputs) +[\d,]+ +0 +\d+ +[\d,]+ instructions", out))
        == 4
    )
    assert max(map(len, out.splitlines())) <= 80


def test_part_that_is_none_is_refused_by_name(release: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", str(release), "--on", "cortex-m1"]) == 2
    names = ", ".join(PARTS)
    assert capsys.readouterr().err == f'--on: found "cortex-m1"; name one of {names}, all\n'


def test_part_whose_tools_are_missing_fails_unless_accepted(
    release: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("export.parts.Tool.missing", lambda tool: tool.command == "simavr")
    assert main(["check", str(release), "--on", "atmega328p"]) == 1
    out = " ".join(capsys.readouterr().out.split())
    assert "NOT RUN .h ATmega328P, emulated: found no simavr; install it (Debian: apt-get install simavr)" in out
    assert main(["check", str(release), "--on", "atmega328p", "--unchecked", "atmega328p"]) == 0


def test_mistake_in_a_header_is_found_by_the_part(release_copy: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A mistake that only AVR's compiler sees: nothing but the part can find it."""
    there(AVR)
    path = release_copy / "pump_cavitation.h"
    path.write_text(path.read_text() + "\n#if defined(__AVR__)\n#define pump_cavitation_decide(inputs) 0\n#endif\n")
    assert main(["check", str(release_copy), "--on", "all", "--json"]) == 1
    failed = [check for check in json.loads(capsys.readouterr().out)["checks"] if not check["ok"]]
    running = [check for check in failed if "emulated" in check["what"]]
    assert [check["what"].partition(",")[0] for check in running] == ["ATmega328P"]
    assert {check["what"] for check in failed if check not in running} <= {"digest of every file", "written anew"}


def test_part_of_the_plan_runs_in_ship(tmp_path: Path) -> None:
    there(PARTS["cortex-m3"])
    shutil.copytree(EXAMPLE, tmp_path / "plan", ignore=shutil.ignore_patterns("release"))
    path = tmp_path / "plan" / "plan.toml"
    path.write_text(path.read_text().replace("[device]\n", '[device]\npart = "cortex-m3"\n'))
    assert main(["ship", str(path), "--into", str(tmp_path / "release")]) == 0
    manifest = json.loads((tmp_path / "release" / "manifest.json").read_text())
    assert [(entry["part"], entry["function"]) for entry in manifest["measures"]] == [
        ("cortex-m3", function) for function in FUNCTIONS
    ]
    assert {re.sub(r" \S+-gcc [\d.]+", "", check["what"]) for check in manifest["checks"]} >= {
        "Cortex-M3, emulated, -std=gnu99 -Os",
        "Cortex-M3, emulated",
    }
