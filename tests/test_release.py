"""A release is written whole or not at all, replaces an old one only when complete, and a copy of it checks alone."""

from __future__ import annotations

import csv
import hashlib
import json
import multiprocessing
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from shipped import EXAMPLE, ship_example

from export import folder
from export.check import check_release
from export.contents import MANIFEST
from export.release import write_release
from runtime_min.codec import load, load_trained
from runtime_min.errors import BudgetError, FileError, ReleaseError
from runtime_min.sealing import seal


def names(place: Path) -> list[str]:
    return sorted(entry.name for entry in place.iterdir())


def test_release_holds_every_file_that_the_manifest_names_and_no_other(release: Path) -> None:
    manifest = json.loads((release / MANIFEST).read_text())
    assert names(release) == sorted([*manifest["files"], MANIFEST])
    for name, digest in manifest["files"].items():
        assert hashlib.sha256((release / name).read_bytes()).hexdigest() == digest
    assert hashlib.sha256((EXAMPLE / "runs.csv").read_bytes()).hexdigest() == manifest["rows_sha256"]
    assert hashlib.sha256((EXAMPLE / "plan.toml").read_bytes()).hexdigest() == manifest["plan_sha256"]


def test_model_id_stands_in_every_artefact_and_document(release: Path) -> None:
    model_id = json.loads((release / MANIFEST).read_text())["model_id"]
    for name in ("pump_cavitation.py", "pump_cavitation.h", "pump_cavitation.onnx", "HANDOFF.md", "vectors.h"):
        assert model_id.encode() in (release / name).read_bytes(), name


def test_model_id_is_the_digest_of_the_model_part(release: Path) -> None:
    """SHA-256 by the system's own tool over the canonical text between the first `"model":` and the closing brace."""
    text = (release / "pump_cavitation.sealed.json").read_text()
    model = text[text.index('"model":{') + len('"model":') : -2]
    digest = subprocess.run(["sha256sum"], input=model.encode(), capture_output=True, check=True).stdout[:16].decode()
    assert digest == load(release / "pump_cavitation.sealed.json").model_id


def test_same_plan_and_rows_give_byte_identical_releases(release: Path, tmp_path: Path) -> None:
    again = ship_example(tmp_path / "again")
    assert names(again) == names(release)
    assert [n for n in names(release) if (again / n).read_bytes() != (release / n).read_bytes()] == []


def test_copied_release_checks_without_plan_or_rows(release_copy: Path) -> None:
    report = check_release(release_copy)
    assert report.ok, [entry for entry in report.checks if not entry.ok]
    assert {entry.target for entry in report.checks} >= {"python", "c", "onnx"}


def test_error_found_by_the_attack_is_below_the_budget_and_not_idle(release: Path) -> None:
    report = check_release(release)
    assert report.attack is not None
    assert 0.1 < report.attack.share <= 1


def test_decimals_in_coefficients_csv_are_the_bits_beside_them(release: Path) -> None:
    import struct

    with (release / "coefficients.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) > 20
    for row in rows:
        assert struct.pack(">f", float(row["decimal"])).hex().upper() == row["bits"], row


def _half_written(staging: Path) -> None:
    (staging / "new").write_text("new")
    raise KeyboardInterrupt


def test_interrupted_build_leaves_the_old_release(tmp_path: Path) -> None:
    place = tmp_path / "release"
    place.mkdir()
    (place / "old").write_text("old")
    with pytest.raises(KeyboardInterrupt), folder.building(place) as staging:
        _half_written(staging)
    assert names(tmp_path) == ["release"]
    assert names(place) == ["old"]


def test_new_folder_takes_the_place_of_the_old_one_in_one_step(tmp_path: Path) -> None:
    place = tmp_path / "release"
    place.mkdir()
    (place / "old").write_text("old")
    with folder.building(place) as staging:
        (staging / "new").write_text("new")
        folder.put_in_place(staging, place)
    assert names(tmp_path) == ["release"]
    assert names(place) == ["new"]


def _build_for_ever(place: Path, started: str) -> None:
    with folder.building(place) as staging:
        (staging / "half").write_text("half")
        Path(started).write_text("started")
        time.sleep(60)


def test_what_a_killed_run_left_is_removed_by_the_next_and_a_live_one_is_not(tmp_path: Path) -> None:
    place, started = tmp_path / "place" / "release", tmp_path / "started"
    process = multiprocessing.get_context("spawn").Process(target=_build_for_ever, args=(place, str(started)))
    process.start()
    while not started.exists():
        time.sleep(0.01)
    with folder.building(place) as staging:
        assert len(names(place.parent)) == 2  # the other run's folder is locked, so it stays
        folder.put_in_place(staging, place)
    os.kill(process.pid or 0, signal.SIGKILL)
    process.join()
    assert len(names(place.parent)) == 2
    with folder.building(place) as staging:
        folder.put_in_place(staging, place)
    assert names(place.parent) == ["release"]


def test_folder_that_is_no_release_is_never_replaced(release: Path, tmp_path: Path) -> None:
    place = tmp_path / "precious"
    place.mkdir()
    (place / "thesis.txt").write_text("ten years")
    sealed = load(release / "pump_cavitation.sealed.json")
    trained = load_trained(release / "pump_cavitation.trained.json")
    with pytest.raises(ReleaseError, match="is there and is not a release; choose another --into, or remove it"):
        write_release(sealed, trained, place)
    assert names(place) == ["thesis.txt"]


def test_folder_that_is_no_release_cannot_be_checked(tmp_path: Path) -> None:
    with pytest.raises(ReleaseError, match=r"manifest\.json: cannot be read \(No such file or directory\); name the"):
        check_release(tmp_path)


def test_budget_above_the_tolerance_stops_the_release_and_says_what_costs_most(release: Path, tmp_path: Path) -> None:
    trained = load_trained(release / "pump_cavitation.trained.json")
    numeric = {entry.name: (0.0, 1e6) for entry in trained.inputs if not entry.levels}
    sealed = seal(trained, ranges=numeric, tolerance=1e-9)
    with pytest.raises(BudgetError) as caught:
        write_release(sealed, trained, tmp_path / "release")
    assert "binary64" in str(caught.value)
    assert caught.value.exit_status == 1
    assert names(tmp_path) == []


def test_vectors_with_a_decimal_that_is_not_its_bits_do_not_load(release_copy: Path) -> None:
    from export.vector_files import read_vectors

    path = release_copy / "vectors.csv"
    lines = path.read_text().splitlines(keepends=True)
    fields = lines[5].split(",")
    fields[1] = fields[1].replace("1", "2", 1) if "1" in fields[1] else "1.5"
    path.write_text("".join([*lines[:5], ",".join(fields), *lines[6:]]))
    sealed = load(release_copy / "pump_cavitation.sealed.json")
    with pytest.raises(FileError, match=r"line 6: the decimal .* and the bits .* are two different numbers"):
        read_vectors(sealed, path)


def test_reference_scorer_runs_from_the_command_line_with_the_standard_library_alone(
    release: Path, tmp_path: Path
) -> None:
    """`python -m runtime_min` with -S (no site packages) scores the example's rows by their headers."""
    root = EXAMPLE.parent.parent
    command = [sys.executable, "-S", "-m", "runtime_min", str(release / "pump_cavitation.sealed.json")]
    result = subprocess.run(
        [*command, str(EXAMPLE / "runs.csv")], cwd=root, capture_output=True, text=True, check=True, timeout=60
    )
    rows = list(csv.DictReader(result.stdout.splitlines()))
    with (EXAMPLE / "runs.csv").open(newline="") as file:
        source = list(csv.DictReader(file))
    assert len(rows) == len(source)
    sealed = load(release / "pump_cavitation.sealed.json")
    right = sum(
        sealed.classes[int(row["decision"])] == given["State"]
        for row, given in zip(rows, source, strict=True)
        if int(row["decision"]) >= 0
    )
    assert right > 0.7 * len(rows)
    assert {row["model_id"] for row in rows} == {sealed.model_id}
