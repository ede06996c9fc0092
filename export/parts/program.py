"""Fill a program's template, compile it for a part, run it there: what it wrote, or what went wrong."""

from __future__ import annotations

import subprocess
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryDirectory

from export.parts import HERE, Part
from export.targets.c.template import fill
from runtime_min.arithmetic import ACCUMULATOR_BITS, ROUND, raw_bits
from runtime_min.integer_score import count_bits, missing_count
from runtime_min.model import FLOATS, SealedModel

# As firmware is compiled, in the dialect that the compiler takes where nothing is said: it may fuse products and sums.
FLAGS = ("-std=gnu99", "-Os")
SECONDS = 60
SHOWN_LINES = 3
# What linkers and compilers say of a program, a section or an array that is larger than the part.
TOO_LARGE = (" overflowed by ", "will not fit in region", "is too large")
END = "end"


@dataclass(frozen=True)
class Types:
    """The header's types in C, and how many hexadecimal digits their bits have."""

    input: str
    log_odds: str
    probability: str
    digits: tuple[int, int, int]


def types_of(sealed: SealedModel) -> Types:
    """The types that the model's header has."""
    if sealed.arithmetic in FLOATS:
        real, digits = {"binary32": ("float", 8), "binary64": ("double", 16)}[sealed.arithmetic]
        return Types(real, real, real, (digits, digits, digits))
    bits, wide = count_bits(sealed), ACCUMULATOR_BITS[sealed.arithmetic]
    return Types(f"int{bits}_t", f"int{wide}_t", "uint16_t", (bits // 4, wide // 4, 4))


class TroubleError(Exception):
    """A program that does not compile, does not end, or ends in a fault: one sentence."""


class SpaceError(TroubleError):
    """A program that is larger than the part's memory."""


@contextmanager
def folder_of(part: Part, sources: Mapping[str, bytes]) -> Iterator[Path]:
    """A folder with these files and those that every program of the part needs."""
    with TemporaryDirectory(prefix="firmlogit-") as folder:
        for name in part.chain.SUPPORT:
            (Path(folder) / name).write_bytes((HERE / name).read_bytes())
        for name, data in sources.items():
            (Path(folder) / name).write_bytes(data)
        yield Path(folder)


def compile_program(part: Part, folder: Path, flags: Sequence[str]) -> None:
    """Compile every C file of the folder to one program.

    Raises SpaceError where it does not fit, TroubleError with the compiler's first words where something else is wrong.
    """
    sources = sorted(path.name for path in folder.iterdir() if path.suffix == ".c")
    does_not_fit = f"it does not fit into {part.rom} bytes of program memory and {part.ram} of data memory"
    done = _ran(part.chain.compile_command(part, flags, sources), folder, SECONDS, "the compiler")
    if done.returncode != 0:
        if any(words in done.stderr for words in TOO_LARGE):
            raise SpaceError(does_not_fit)
        lines = [line for line in done.stderr.splitlines() if "error" in line or "warning" in line]
        raise TroubleError("it does not compile: " + (" | ".join(lines[:SHOWN_LINES]) or "no message"))
    text, data = sizes(part, folder)
    if text > part.rom or data > part.ram:  # not every linker knows how large the part is
        raise SpaceError(does_not_fit)


def sizes(part: Part, folder: Path) -> tuple[int, int]:
    """Bytes of program memory (initial values of data included) and of data memory, as the toolchain's `size` says."""
    command = [part.tools[0].command.removesuffix("gcc") + "size", "program.elf"]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=30, check=True)
    text, data, bss = (int(word) for word in done.stdout.splitlines()[1].split()[:3])
    return text + data, data + bss


def run_program(part: Part, folder: Path, seconds: float, *, counted: bool = False, end: str | None = END) -> list[str]:
    """The lines that the program wrote, without the last one, which is `end`.

    Raises TroubleError where the last line is another.
    """
    done = _ran(part.chain.emulate_command(part, counted), folder, seconds, "the program")
    lines = part.chain.written(done.stdout, done.stderr).splitlines()
    if end is None:
        return lines
    if not lines or lines[-1] != end:
        last = f', last "{_printable(lines[-1])}"' if lines else ""
        raise TroubleError(f"the program stopped early, after {len(lines)} lines{last}")
    return lines[:-1]


def program(template: str, part_sealed: SealedModel, **context: object) -> bytes:
    """The C file that a template of this folder makes of a model."""
    return fill((str(HERE / template),), part_sealed, types=types_of(part_sealed), header="model.h", **context)


def row_bytes(row: Sequence[float], sealed: SealedModel) -> str:
    """The bits of a row's inputs, rounded to the arithmetic, as C lists bytes: the least significant first."""
    size = types_of(sealed).digits[0] // 2
    words = (_bits(value, sealed) % 256**size for value in row)
    return ", ".join(f"0x{byte:02x}" for word in words for byte in word.to_bytes(size, "little"))


def _bits(value: float, sealed: SealedModel) -> int:
    if sealed.arithmetic in FLOATS:
        return raw_bits(ROUND[sealed.arithmetic](float(value)), sealed.arithmetic)
    return missing_count(sealed) if value != value else int(value)


def _ran(command: Sequence[str], folder: Path, seconds: float, what: str) -> subprocess.CompletedProcess[str]:
    try:
        return subprocess.run(
            command, cwd=folder, stdin=subprocess.DEVNULL, capture_output=True, text=True, errors="replace",
            timeout=seconds, check=False,
        )  # fmt: skip
    except subprocess.TimeoutExpired:
        raise TroubleError(f"{what} did not finish within {seconds:g} s") from None
    except OSError as error:
        raise TroubleError(f"{what} did not start ({error.strerror})") from None


def _printable(text: str) -> str:
    return "".join(c if c.isprintable() else "?" for c in text[:60])
