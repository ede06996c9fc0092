"""The command line: exit status, sentences instead of tracebacks, output for people and for programs."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from shipped import EXAMPLE

from export.commands import main
from runtime_min.codec import load

ROOT = EXAMPLE.parent.parent


def run(*arguments: str | Path, **environment: str) -> subprocess.CompletedProcess[str]:
    """The command in a process of its own, its output in a pipe."""
    return subprocess.run(
        [sys.executable, "-m", "export.commands", *map(str, arguments)],
        cwd=ROOT,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def small_plan(folder: Path, text: str = "") -> Path:
    """A plan over a few invented rows, with `text` in place of its prior."""
    rows = "\n".join(f"{x},{y},{'ab'[x * x % 7 > 2]}" for x, y in zip(range(40), range(3, 120, 3), strict=False))
    (folder / "rows.csv").write_text(f"x,y,kind\n{rows}\n")
    plan = folder / "plan.toml"
    plan.write_text(
        'model = "small"\n[rows]\nfile = "rows.csv"\nlabel = "kind"\n'
        '[[input]]\nname = "x"\nrange = [0, 50]\n[[input]]\nname = "y"\nrange = [0, 150]\n'
        + (text or "[prior]\nsd = 1.0\n")
    )
    return plan


def test_ship_prints_what_a_reader_needs_within_80_columns(tmp_path: Path) -> None:
    result = run("ship", EXAMPLE / "plan.toml", "--into", tmp_path / "release")
    assert (result.returncode, result.stderr) == (0, "")
    sealed = load(tmp_path / "release" / "pump_cavitation.sealed.json")
    shown = " ".join(result.stdout.split())
    told = ("3,000 read", "log loss", "base rate", "Brier", "area under ROC", "worst error found", "checks hold")
    assert [text for text in (sealed.model_id, *told) if text not in shown] == []
    assert [line for line in result.stdout.splitlines() if len(line) > 80 and str(tmp_path) not in line] == []


def test_ship_gives_one_json_object_for_programs(tmp_path: Path) -> None:
    result = run("ship", EXAMPLE / "plan.toml", "--into", tmp_path / "release", "--json")
    report = json.loads(result.stdout)
    assert set(report) >= {"model_id", "release", "ok", "checks", "budget"}
    assert report["ok"] is True
    assert report["budget"]["worst_found"] <= report["budget"]["log_odds"] <= report["budget"]["tolerance"]
    assert sum(item["bound"] for item in report["budget"]["items"]) == pytest.approx(report["budget"]["log_odds"])
    assert {"artefact", "what", "ran", "ok", "differences"} <= set(report["checks"][0])


def test_fit_then_export_gives_the_artefacts_that_ship_gives(release: Path, tmp_path: Path) -> None:
    assert run("fit", EXAMPLE / "plan.toml", "--into", tmp_path).returncode == 0
    sealed = tmp_path / "pump_cavitation.sealed.json"
    assert sealed.read_bytes() == (release / sealed.name).read_bytes()
    result = run("export", sealed, "--into", tmp_path / "out")
    assert (result.returncode, result.stderr) == (0, "")
    for name in ("pump_cavitation.py", "pump_cavitation.h", "pump_cavitation.onnx", "HANDOFF.md", "vectors.csv"):
        assert (tmp_path / "out" / name).read_bytes() == (release / name).read_bytes()


def test_score_gives_what_the_reference_module_gives(release: Path) -> None:
    sealed = release / "pump_cavitation.sealed.json"
    ours = run("score", sealed, EXAMPLE / "runs.csv")
    other = subprocess.run(
        [sys.executable, "-m", "runtime_min", str(sealed), str(EXAMPLE / "runs.csv")],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert ours.returncode == 0
    assert ours.stdout == other.stdout


def test_check_of_a_copy_holds_and_of_a_damaged_copy_fails_with_1(release_copy: Path) -> None:
    assert run("check", release_copy).returncode == 0
    (release_copy / "pump_cavitation.h").write_text("/* nothing */\n")
    result = run("check", release_copy, "--json")
    assert result.returncode == 1
    assert json.loads(result.stdout)["ok"] is False


def test_missing_compiler_still_writes_a_release_names_what_to_install_and_exits_1(tmp_path: Path) -> None:
    """A PATH without compilers and no compiler package: the release is there, C is not verified."""
    import importlib.util

    if importlib.util.find_spec("ziglang"):
        pytest.skip("a compiler package is installed")
    result = run("ship", EXAMPLE / "plan.toml", "--into", tmp_path / "release", PATH="")
    assert result.returncode == 1
    assert "apt-get install gcc" in " ".join(result.stdout.split())
    assert "NOT RUN" in result.stdout
    assert (tmp_path / "release" / "pump_cavitation.h").exists()
    accepted = run("ship", EXAMPLE / "plan.toml", "--into", tmp_path / "release", "--unchecked", "c", PATH="")
    assert accepted.returncode == 0, accepted.stdout


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["ship", "nowhere.toml"], "nowhere.toml: "),
        (["check", "nowhere"], "nowhere/manifest.json: cannot be read (No such file or directory); "),
        (["score", "nowhere.json", "rows.csv"], "nowhere.json: cannot be read (No such file or directory); "),
        (["ship", str(EXAMPLE / "plan.toml"), "--unchecked", "cobol"], '--unchecked: found "cobol"; name one of '),
    ],
)
def test_wrong_request_exits_2_with_a_sentence(
    arguments: list[str], sentence: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(arguments) == 2
    error = capsys.readouterr().err
    assert error.startswith(sentence)
    assert "Traceback" not in error


def test_constant_column_is_refused_by_name_and_nothing_is_written(tmp_path: Path) -> None:
    plan = small_plan(tmp_path)
    header, *lines = (tmp_path / "rows.csv").read_text().splitlines()
    constant = [f"7,{line.partition(',')[2]}" for line in lines]
    (tmp_path / "rows.csv").write_text("\n".join([header, *constant, ""]))
    result = run("ship", plan)
    assert result.returncode == 2
    assert '"x"' in result.stderr
    assert " 7 " in result.stderr
    assert len(result.stderr.splitlines()) == 1
    assert not (tmp_path / "release").exists()


def test_every_mistake_of_a_plan_is_told_at_once(tmp_path: Path) -> None:
    plan = small_plan(tmp_path, '[prior]\nsd = -1.0\n[device]\narithmetic = "binary16"\n[decison]\ncost_miss = 1\n')
    result = run("ship", plan)
    assert result.returncode == 2
    assert len(result.stderr.splitlines()) == 3
    assert '"decision"' in result.stderr or "decision" in result.stderr


def test_help_loads_neither_numpy_nor_the_rooms() -> None:
    code = "import sys; from export.commands import main\ntry: main(['--help'])\nexcept SystemExit: pass\n"
    code += "heavy = {'numpy', 'scipy', 'onnx', 'rich', 'jinja2'}\nprint(sorted(heavy & set(sys.modules)))"
    result = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    assert result.stdout.splitlines()[-1] == "[]"


def test_output_in_a_pipe_survives_a_locale_that_is_not_utf_8(tmp_path: Path) -> None:
    ascii_only = {"LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONIOENCODING": "ascii"}
    result = run("ship", EXAMPLE / "plan.toml", "--into", tmp_path / "release", **ascii_only)
    assert (result.returncode, result.stderr) == (0, "")


def test_path_with_spaces_and_quotes_ships(tmp_path: Path) -> None:
    folder = tmp_path / 'it\'s a "folder" '
    shutil.copytree(EXAMPLE, folder, ignore=shutil.ignore_patterns("release"))
    assert run("ship", folder / "plan.toml").returncode == 0
    assert (folder / "release" / "manifest.json").exists()


def test_budget_above_the_plans_tolerance_exits_1_says_what_costs_most_and_what_would_fit(tmp_path: Path) -> None:
    plan = small_plan(tmp_path, "[prior]\nsd = 1.0\n[device]\ntolerance = 1e-9\n")
    result = run("ship", plan)
    assert result.returncode == 1
    (line,) = result.stderr.splitlines()
    assert "more than the tolerance 1e-09, and the costliest item is " in line
    assert 'choose arithmetic = "binary64"' in line
    assert not (tmp_path / "release").exists()


def test_threshold_that_the_ranges_never_reach_is_said(tmp_path: Path) -> None:
    plan = small_plan(tmp_path, "[prior]\nsd = 1.0\n[decision]\ncost_miss = 1e30\n")
    shown = " ".join(run("ship", plan, "--unchecked", "c").stdout.split())
    assert 'decision never "a": the log-odds reach' in shown


def test_fit_prints_each_weight_with_its_posterior_sd(tmp_path: Path) -> None:
    from runtime_min.codec import load_trained

    result = run("fit", small_plan(tmp_path))
    trained = load_trained(tmp_path / "small.trained.json")
    for at, (name, weight) in enumerate([("intercept", trained.intercept), ("x", trained.weights[0])]):
        numbers = [name, f"{weight:.4f}", f"{trained.covariance[at][at] ** 0.5:.4f}"]
        assert numbers in [line.split()[:3] for line in result.stdout.splitlines()]
