"""The user's own compiler, by the command line in the plan: it must take the header, and what it makes is measured.

The command gets `-c`, a source and `-o` behind it. Nothing is run: the object may be for a machine that is not here.
"""

from __future__ import annotations

import io
import os
import shlex
from pathlib import Path
from tempfile import TemporaryDirectory

from elftools.common.exceptions import ELFError
from elftools.elf.constants import SH_FLAGS
from elftools.elf.elffile import ELFFile

from export.targets import Run
from export.targets.c.runner import PLAIN_WORDS
from export.targets.programs import run_program
from runtime_min.model import SealedModel

SECONDS = 60
SHOWN_LINES = 2


def compile_own(command: str, artefact: Path, sealed: SealedModel, seconds: float = SECONDS) -> tuple[Run, str]:
    """The run, and where it went well one sentence: bytes of program memory and of data, and any warning."""
    what = f"the plan's compiler: {command}"

    def broken(trouble: str, ran: bool = True) -> tuple[Run, str]:
        return Run(what, ran, trouble, None, None, None), ""

    try:
        words = shlex.split(command)
    except ValueError as error:
        return broken(f"the command cannot be read ({error}); close its quotes in the plan")
    if not words:
        return broken("the command is empty; write it in the plan, or leave compiler out")
    try:
        header = artefact.read_bytes()
    except OSError as error:
        return broken(f"the header cannot be read ({error.strerror or error})")
    prefix = sealed.name.upper()
    source = f'#define {prefix}_SEPARATE\n#define {prefix}_CODE_HERE\n#include "artefact.h"\n'
    with TemporaryDirectory(prefix="firmlogit-") as folder:
        place = Path(folder)
        (place / "artefact.h").write_bytes(header)
        (place / "code.c").write_text(source)
        options = ["-c", "code.c", "-o", "code.o"]
        done = run_program([*words, *options], seconds, folder=folder, environment={**os.environ, **PLAIN_WORDS})
        if done.status is None and "stopped" not in (done.trouble or ""):
            todo = "install it, or change compiler in the plan"
            return broken(f"{words[0]} does not start ({done.trouble}); {todo}", ran=False)
        if done.trouble:
            return broken(f"the compiler did not finish ({done.trouble})")
        said = _first_lines(done.err)
        if done.status != 0:
            return broken(f"it does not compile (status {done.status}): {said or 'no message'}")
        if not (place / "code.o").is_file():
            return broken("the compiler says that it succeeded and wrote no object file; give it a command that does")
        size = _size((place / "code.o").read_bytes())
    warning = f"; it warns: {said}" if said else ""
    return Run(what, True, None, None, None, None), f"{size}{warning}"


def _size(data: bytes) -> str:
    try:
        sections = [(section["sh_flags"], section["sh_size"]) for section in ELFFile(io.BytesIO(data)).iter_sections()]
    except ELFError:
        return "compiled; the object is not ELF, so its size is not known"
    allocated = [(flags, size) for flags, size in sections if flags & SH_FLAGS.SHF_ALLOC]
    written = sum(size for flags, size in allocated if flags & SH_FLAGS.SHF_WRITE)
    program = sum(size for flags, size in allocated if not flags & SH_FLAGS.SHF_WRITE)
    return f"{program:,} bytes of program memory, {written:,} of data, the self-test and its rows among them"


def _first_lines(words: bytes) -> str:
    lines = [line.strip() for line in words.decode("utf-8", "replace").splitlines() if line.strip()]
    wanted = [line for line in lines if "error" in line or "warning" in line] or lines
    return "".join(c if c.isprintable() else " " for c in " | ".join(wanted[:SHOWN_LINES]))
