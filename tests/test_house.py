"""The house: who imports whom, read from the sources and, for what loads, from a fresh interpreter."""

from __future__ import annotations

import ast
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
ROOMS = ("runtime_min", "trainer", "export")
SOURCES = sorted(path for room in ROOMS for path in (ROOT / room).rglob("*.py"))
DOORS = ("export/commands",)  # may call the trainer, inside functions

# Modules that MicroPython has, as far as these two use them.
BARE = {f"runtime_min/{name}.py" for name in ("arithmetic", "score", "integer_score", "logistic_constants")}
BARE_MAY_IMPORT = {"struct", "math", *(path.removesuffix(".py").replace("/", ".") for path in BARE)}


def imports(path: Path) -> Iterator[tuple[str, str]]:
    """(module, when) for each import of a file, `__import__` with a text too.

    When: "load", "call" (inside a function), or "types" (for a type checker alone).
    """

    def walk(node: ast.AST, when: str) -> Iterator[tuple[str, str]]:
        if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.Lambda)):
            when = "call"
        elif isinstance(node, ast.If) and isinstance(node.test, ast.Name) and node.test.id == "TYPE_CHECKING":
            for statement in node.body:
                yield from walk(statement, "types")
            for statement in node.orelse:
                yield from walk(statement, when)
            return
        if isinstance(node, ast.Import):
            yield from ((alias.name, when) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: a relative import"
            yield node.module or "", when
            yield from ((f"{node.module}.{alias.name}", when) for alias in node.names if node.module in ROOMS)
        elif isinstance(node, ast.Call) and _called(node) in ("__import__", "import_module"):
            for constant in ast.walk(node.args[0]):
                if isinstance(constant, ast.Constant) and isinstance(constant.value, str):
                    yield constant.value.rstrip("."), when
        for child in ast.iter_child_nodes(node):
            yield from walk(child, when)

    yield from walk(ast.parse(path.read_text(encoding="utf-8")), "load")


def _called(node: ast.Call) -> str:
    return str(getattr(node.func, "id", getattr(node.func, "attr", "")))


def place(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


@pytest.mark.parametrize("path", SOURCES, ids=place)
def test_imports_run_from_trainer_and_export_to_runtime_min_only(path: Path) -> None:
    room = path.relative_to(ROOT).parts[0]
    for module, when in imports(path):
        top = module.partition(".")[0]
        if room == "runtime_min":
            assert top in sys.stdlib_module_names or top == "runtime_min", f"{place(path)} imports {module}"
        elif top in ROOMS and top not in (room, "runtime_min"):
            assert when != "load", f"{place(path)} imports {module}"
            assert place(path).startswith(DOORS), f"{place(path)} imports {module}"
        assert top != "tests", f"{place(path)} imports {module}"


@pytest.mark.parametrize("name", sorted(BARE))
def test_scorer_imports_nothing_that_micropython_lacks(name: str) -> None:
    for module, when in imports(ROOT / name):
        known = module in BARE_MAY_IMPORT or module.rpartition(".")[0] in BARE_MAY_IMPORT
        assert known or when == "types", f"{name} imports {module}"


def loaded_after(statement: str) -> set[str]:
    code = f"import sys; before = set(sys.modules); {statement}; print(*sorted(set(sys.modules) - before))"
    arguments = [sys.executable, "-S", "-c", f"import sys; sys.path.insert(0, {str(ROOT)!r}); {code}"]
    return set(subprocess.run(arguments, capture_output=True, text=True, check=True).stdout.split())


@pytest.mark.parametrize(
    "statement", ["import runtime_min, runtime_min.score", "from runtime_min import log_odds, decide"]
)
def test_scoring_loads_neither_fractions_nor_decimal_nor_data_classes(statement: str) -> None:
    loaded = loaded_after(statement)
    assert "runtime_min.score" in loaded
    assert not loaded & {"fractions", "decimal", "dataclasses", "typing", "json", "runtime_min.sealing"}


def test_loading_a_model_needs_no_rationals() -> None:
    """Without site packages, so that nothing but the standard library can have been found."""
    loaded = loaded_after("from runtime_min import load")
    assert "runtime_min.codec" in loaded
    assert not loaded & {"fractions", "decimal", "runtime_min.sealing"}


def test_packages_import_at_no_cost() -> None:
    for package in ROOMS:
        loaded = loaded_after(f"import {package}")
        assert package in loaded
        assert not {name for name in loaded if name.partition(".")[0] in ("numpy", "scipy", "onnx", "dataclasses")}


def test_the_walk_sees_every_kind_of_import(tmp_path: Path) -> None:
    """The test above would pass on files that it cannot read."""
    file = tmp_path / "house.py"
    file.write_text(
        "import numpy as np\nfrom trainer import fit\ndef f():\n    import export.check\n    __import__('onnx')\n"
        "    x = lambda: importlib.import_module('scipy')\n"
        "if TYPE_CHECKING:\n    import typing\nelse:\n    import json\n"
    )
    assert list(imports(file)) == [
        ("numpy", "load"),
        ("trainer", "load"),
        ("trainer.fit", "load"),
        ("export.check", "call"),
        ("onnx", "call"),
        ("scipy", "call"),
        ("typing", "types"),
        ("json", "load"),
    ]
    assert len(SOURCES) > 20


def test_every_file_beside_the_modules_is_package_data() -> None:
    """What an installed copy would lack: a template, a schema, start-up code that pyproject.toml does not name."""
    data = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["package-data"]
    command = ["git", "ls-files", "-co", "--exclude-standard", *ROOMS]
    listed = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
    files = [Path(line) for line in listed.stdout.splitlines() if not line.endswith((".py", ".pyc"))]
    assert len(files) > 10
    missing = [
        str(file)
        for file in files
        if not any(file.match(pattern) for pattern in data.get(".".join(file.parent.parts), []))
    ]
    assert missing == []
