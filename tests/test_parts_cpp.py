"""The header in C++ for small parts, as environments for hobby boards compile it: no warning, in old C++ too."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import pytest
from c_programs import header
from models import sample_integer_models, sample_sealed_models

from export.parts import PARTS, Part
from export.targets.c.vectors_header import emit_board, emit_vectors_header, piece_count
from export.targets.c.ways import STRICT
from export.vectors import make_vectors

MODELS = {name: sealed for name, (_, sealed) in (sample_sealed_models() | sample_integer_models()).items()}


@pytest.mark.parametrize("standard", ["gnu++11", "c++98"])
@pytest.mark.parametrize("part", PARTS.values(), ids=PARTS)
@pytest.mark.parametrize("name", ["pump_binary32", "pump_binary64", "many_int16", "pump_int32"])
def test_header_vectors_and_board_compile_in_cpp(name: str, part: Part, standard: str, tmp_path: Path) -> None:
    command = part.tools[0].command.replace("gcc", "g++")
    if shutil.which(command) is None:
        pytest.skip(f"needs {command}: apt-get install {part.tools[0].package}")
    sealed = MODELS[name]
    if sealed.arithmetic not in part.arithmetics or (standard == "c++98" and sealed.arithmetic == "int32"):
        return  # C++98 has no integers of 64 bits
    vectors = make_vectors(sealed)
    assert piece_count(sealed, vectors) > 1
    (tmp_path / f"{sealed.name}.h").write_text(header(sealed))
    (tmp_path / "vectors.h").write_bytes(emit_vectors_header(sealed, vectors))
    (tmp_path / "board.cpp").write_bytes(emit_board(sealed, vectors))
    flags = [f"-std={standard}", "-Os", *STRICT, f"-D{sealed.name.upper()}_VECTORS_PIECE=1"]
    done = subprocess.run(
        [
            command,
            *(["-mthumb"] if part.family == "cortex_m" else []),
            *part.options,
            *flags,
            "-c",
            "board.cpp",
            "-o",
            "board.o",
        ],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, "")
