"""Frama-C's Eva over the C header, for all inputs: nothing undefined, in every arithmetic; and what it finds elsewhere.

Expected values: 0 alarms; for planted mistakes, the operation that is named.
"""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
from c_programs import header, need
from models import sample_integer_models, sample_sealed_models

from export.commands import main
from export.targets.c import prove as prover
from export.targets.c.prove import MACHINES, Proof, prove
from runtime_min.model import SealedModel

MODELS = {name: sealed for name, (_, sealed) in (sample_sealed_models() | sample_integer_models()).items()}
QUICK = ("pump_int16", "wide_int16", "counts_int32", "steep_int32", "levels_only_int16", "pump_binary32",
         "lenient_binary32", "pump_binary64", "all_datum_binary64", "tiny_binary32")  # fmt: skip
REST = tuple(name for name in MODELS if name not in QUICK)


def proofs(text: str, sealed: SealedModel, folder: Path) -> list[Proof]:
    need("frama-c")
    (folder / "model.h").write_text(text)
    return list(prove(folder / "model.h", sealed))


def assert_proven(name: str, folder: Path) -> None:
    found = proofs(header(MODELS[name]), MODELS[name], folder)
    assert len(found) == len(MACHINES) * (2 if name.startswith("counts_int32") else 1)
    for one in found:
        assert (one.ran, one.ok, one.alarms) == (True, True, 0), one
        assert "functions, inputs any" in one.found


@pytest.mark.parametrize("name", QUICK)
def test_no_input_makes_the_header_undefined(name: str, tmp_path: Path) -> None:
    assert_proven(name, tmp_path)


@pytest.mark.slow
@pytest.mark.parametrize("name", REST)
def test_no_input_makes_any_header_undefined(name: str, tmp_path: Path) -> None:
    assert_proven(name, tmp_path)


def planted(name: str, old: str, new: str) -> tuple[str, SealedModel]:
    text = header(MODELS[name])
    assert text.count(old) == 1
    return text.replace(old, new), MODELS[name]


@pytest.mark.parametrize(
    ("name", "old", "new", "named"),
    [
        # suction: shift 0, weight 10816; flow: shift 2, clamped
        ("pump_int16", "0,  9920,  10816, /* SUCTION", "7,  9920,  10816, /* SUCTION", "signed overflow"),
        ("pump_int16", "2, 11520, -17756, /* FLOW", "6, 11520, -17756, /* FLOW", "signed overflow"),
        ("pump_int16", "intercept = -234698549", "intercept = -2034698549", "signed overflow"),
        ("pump_int16", "intercept = -234698549", "intercept = -234698550", "check 'proven_range' got status"),
        ("pump_int16", "[weight + count]", "[weight + count + 1]", "out of bounds read"),
        (
            "pump_int16",
            "return *count >= low && *count <= high;",
            "return *count >= low;",
            "out of bounds read|signed overflow",
        ),
        ("pump_int16", "_LAST) << ", "_LAST + 1) << ", "out of bounds"),
        ("pump_binary32", "if (*x >= low && *x <= high) {", "if (*x >= low) {", "non-finite float value"),
    ],
)
def test_planted_overflow_is_named(name: str, old: str, new: str, named: str, tmp_path: Path) -> None:
    for one in proofs(*planted(name, old, new), tmp_path):
        assert (one.ran, one.ok) == (True, False)
        assert one.alarms > 0
        assert re.search(named, one.found)
        assert "artefact.h:" in one.found or "driver.c:" in one.found


def test_promotion_that_only_a_narrow_int_overflows_is_found(tmp_path: Path) -> None:
    # On AVR an int has 16 bits, and the product of two of them too.
    text, sealed = planted(
        "pump_int16",
        "PUMP_INT16_CAST(int32_t, weight) * PUMP_INT16_CAST(int32_t, count - datum)",
        "PUMP_INT16_CAST(int32_t, weight * (count - datum))",
    )
    wide, narrow = proofs(text, sealed, tmp_path)
    assert wide.ok
    assert not narrow.ok
    assert "signed overflow" in narrow.found
    assert "16 bits" in narrow.what


def test_without_the_analyser_one_sentence_says_what_to_install(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setattr(prover.shutil, "which", lambda name: None)
    (one,) = prove(tmp_path / "model.h", MODELS["pump_int16"])
    assert (one.ran, one.ok) == (False, False)
    assert one.found == "found no frama-c; install it (Debian: apt-get install frama-c-base)"


def test_header_that_does_not_compile_is_not_proven(tmp_path: Path) -> None:
    (first, *_) = proofs("#error planted\n", MODELS["pump_int16"], tmp_path)
    assert (first.ran, first.ok) == (True, False)
    assert first.found.startswith("the analyser gave no summary: ")


def test_code_after_an_endless_loop_is_not_taken_for_proven(tmp_path: Path) -> None:
    text, sealed = planted(
        "pump_int16", "    int32_t z = pump_int16_intercept;\n", "    int32_t z = 0;\n    for (;;) { z = 1; }\n"
    )
    for one in proofs(text, sealed, tmp_path):
        assert not one.ok
        assert one.found.startswith("the end is not reached")


def test_check_with_prove_says_so_in_its_report(release_copy: Path, capsys: pytest.CaptureFixture[str]) -> None:
    need("frama-c")
    assert main(["check", str(release_copy), "--prove", "--json"]) == 0
    checks = json.loads(capsys.readouterr().out)["checks"]
    proven = [entry for entry in checks if entry["what"].startswith("Frama-C Eva")]
    assert [(entry["ran"], entry["ok"]) for entry in proven] == [(True, True)] * len(MACHINES)
    assert main(["check", str(release_copy), "--json"]) == 0
    assert "Frama-C" not in capsys.readouterr().out
