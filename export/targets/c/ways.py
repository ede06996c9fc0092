"""The ways of compiling the header for a check: which compilers there are, and with which flags each is tried."""

from __future__ import annotations

import platform
import shutil
import sys
from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path

from export.targets.programs import run_program

STRICT = ("-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Wdouble-promotion", "-Werror")
SECONDS = 30
SECONDS_ZIG = 300  # it builds its own C library at the first compile


@dataclass(frozen=True)
class Compiler:
    """A compiler family that is there. `cxx` is None where its C++ half is missing."""

    version: str
    c: tuple[str, ...]
    cxx: tuple[str, ...] | None
    seconds: int


@dataclass(frozen=True)
class Way:
    """One compiler with one set of flags. `separate`: declarations in one file, the code in another."""

    compiler: Compiler
    language: str
    flags: tuple[str, ...]
    separate: bool = False

    @property
    def what(self) -> str:
        """How the way is shown."""
        apart = ", code in a file of its own" if self.separate else ""
        return f"{self.compiler.version} {' '.join(self.flags)}{apart}"

    @property
    def command(self) -> tuple[str, ...]:
        """The compiler's command with all flags but files."""
        program = self.compiler.cxx if self.language == "c++" else self.compiler.c
        assert program is not None
        return (*program, "-x", self.language, *self.flags, *STRICT)


def compilers() -> list[Compiler]:
    """gcc and clang where present; only where neither is, cc, and then the compiler of the Python package ziglang."""
    found = [
        compiler
        for c, cxx in (("gcc", "g++"), ("clang", "clang++"))
        for compiler in [_compiler(c, cxx)]
        if compiler is not None
    ]
    if not found:
        found = [compiler for compiler in [_compiler("cc", "c++"), _zig()] if compiler is not None][:1]
    return found


def quick(compiler: Compiler) -> list[Way]:
    """Three ways that differ in what matters most: strict C, fused operations allowed, C++."""
    ways = [Way(compiler, "c", ("-std=c99", "-O2")), Way(compiler, "c", ("-std=gnu17", "-O3", *fused_flags()))]
    if compiler.cxx:
        ways.append(Way(compiler, "c++", ("-std=c++17", "-O2")))
    return ways


def thorough(compiler: Compiler) -> list[Way]:
    """The whole matrix of one compiler."""
    native = "-march=native" if platform.machine() in ("x86_64", "AMD64") else "-mcpu=native"
    fused = fused_flags()
    ways = [
        Way(compiler, "c", ("-std=c99", "-O0")),
        Way(compiler, "c", ("-std=c99", "-O2")),
        Way(compiler, "c", ("-std=c99", "-O3", native)),
        Way(compiler, "c", ("-std=c99", "-O2", *fused, "-ffp-contract=fast")),
        Way(compiler, "c", ("-std=gnu99", "-O2", *fused)),
        Way(compiler, "c", ("-std=gnu17", "-O3", *fused)),
        Way(compiler, "c", ("-std=c99", "-O2"), separate=True),
    ]
    if compiler.cxx:
        ways += [
            Way(compiler, "c++", ("-std=c++98", "-O2")),
            Way(compiler, "c++", ("-std=c++17", "-O2")),
            Way(compiler, "c++", ("-std=gnu++17", "-O3", *fused, "-ffp-contract=fast")),
            Way(compiler, "c++", ("-std=c++17", "-O2"), separate=True),
        ]
    return ways


def fused_flags() -> tuple[str, ...]:
    """What makes the compiler use fused operations, where this machine's processor can run them.

    Other processors than x86 either have them without a flag or not at all.
    """
    if platform.machine() not in ("x86_64", "AMD64"):
        return ()
    try:
        flags = set(Path("/proc/cpuinfo").read_text(encoding="ascii", errors="replace").split())
    except OSError:
        return ()
    return ("-march=haswell",) if {"fma", "avx2", "bmi1", "bmi2", "movbe"} <= flags else ()


def _compiler(c: str, cxx: str) -> Compiler | None:
    path, cxx_path = shutil.which(c), shutil.which(cxx)
    version = _first_line((path, "--version")) if path else None
    if path is None or version is None:
        return None
    # "gcc (Debian 12.2.0-14) 12.2.0", "Debian clang version 14.0.6": the last word with a digit first.
    numbers = [word for word in version.split() if word[0].isdigit()]
    return Compiler(" ".join([c, *numbers[-1:]]), (path,), (cxx_path,) if cxx_path else None, SECONDS)


def _zig() -> Compiler | None:
    if find_spec("ziglang") is None:
        return None
    zig = (sys.executable, "-m", "ziglang")
    version = _first_line((*zig, "version"))
    return Compiler(f"zig {version}", (*zig, "cc"), (*zig, "c++"), SECONDS_ZIG) if version else None


def _first_line(command: tuple[str, ...]) -> str | None:
    done = run_program(command, SECONDS)
    lines = done.out.decode("utf-8", "replace").splitlines()
    return lines[0] if done.status == 0 and lines else None
