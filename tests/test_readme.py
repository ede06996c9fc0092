"""What the README shows is what happens."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest
from readme_output import BLOCK, README, shipped_output

TEXT = README.read_text()


def blocks(language: str) -> list[str]:
    """The code blocks of one language."""
    return re.findall(rf"```{language}\n(.*?)```", TEXT, re.DOTALL)


def masked(text: str) -> str:
    """Without what differs between machines: versions, compilers, line ends, last digits of a fit."""
    kept = [line for line in re.sub(r"\n {10,}", " ", text).splitlines() if not re.match(r"ok +\.h ", line)]
    return re.sub(r"\d+\.\d+(\.\d+)?|\d\.\de-\d\d|all \d+ checks", "#", "\n".join(kept))


def test_output_in_the_readme_is_what_ship_prints() -> None:
    found = BLOCK.search(TEXT)
    assert found
    assert masked(found.group()) == masked(shipped_output()), "run: python tests/readme_output.py"


def test_the_two_commands_are_one_line_each() -> None:
    run, test = blocks("sh")[:2]
    assert (run, test) == ("sh examples/run\n", "sh tests/run\n")
    assert "## Run it\n\n```sh\n" + run in TEXT
    assert "## Test it\n\n```sh\n" + test in TEXT


def test_python_door_of_the_readme_works_as_shown(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The block is run as it stands, on invented rows."""
    monkeypatch.chdir(tmp_path)
    rng = np.random.default_rng(5)
    X = np.column_stack([rng.uniform(-90, 240, 400), rng.uniform(5, 125, 400)])
    y = (X[:, 1] - X[:, 0] + rng.normal(0, 60, 400) > 0).astype(int)
    names: dict[str, object] = {"X": X, "y": y}
    (block,) = blocks("python")
    exec(block, names)  # the README's own lines
    assert names["report"].ok  # type: ignore[attr-defined]
    assert (tmp_path / "release" / "model.h").exists()
    check_release = names["check_release"]
    assert check_release(tmp_path / "release").ok  # type: ignore[operator]


def test_c_example_of_the_readme_compiles_and_decides(release: Path, tmp_path: Path) -> None:
    compiler = shutil.which("gcc") or shutil.which("clang")
    if compiler is None:
        pytest.skip("no C compiler: apt-get install gcc")
    (block,) = blocks("c")
    include, _, body = block.partition("\n")
    body = body.replace("/* 1 cavitating", "case 1: return 0; default: break; /* 1 cavitating")
    (tmp_path / "main.c").write_text(f"{include}\nint main(void)\n{{\n{body}\nreturn 1;\n}}\n")
    options = ["-std=c99", "-Wall", "-Wextra", "-Wno-empty-body", f"-I{release}", "-o", str(tmp_path / "main")]
    subprocess.run([compiler, *options, str(tmp_path / "main.c")], check=True, timeout=60)
    assert subprocess.run([str(tmp_path / "main")], timeout=10, check=False).returncode in (0, 1)
