"""Run a compiler or an artefact as a program of its own, with an end to it.

Whatever it started ends with it: after the time limit, or when the check is stopped, its whole process group is killed,
so that a wrapper script whose child hangs cannot hold the check up.
"""

from __future__ import annotations

import os
import signal
import subprocess
from collections.abc import Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class Ended:
    """How a program ended. `trouble` says why it did not start or finish; then `status` is None."""

    status: int | None
    out: bytes
    err: bytes
    trouble: str | None


def run_program(
    command: Sequence[str],
    seconds: float,
    given: bytes = b"",
    folder: str | Path | None = None,
    environment: Mapping[str, str] | None = None,
) -> Ended:
    """Run a command on the bytes `given` for at most `seconds`. Nothing is raised for what the program does."""
    try:
        process = subprocess.Popen(
            command,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            cwd=folder,
            env=environment,
            start_new_session=True,
        )
    except (OSError, ValueError) as error:
        return Ended(None, b"", b"", str(getattr(error, "strerror", None) or error))
    with process:
        try:
            out, err = process.communicate(given, timeout=seconds)
        except subprocess.TimeoutExpired as late:
            _kill(process)
            return Ended(None, late.stdout or b"", late.stderr or b"", f"stopped after {seconds:g} s")
        except BaseException:
            _kill(process)
            raise
    return Ended(process.returncode, out, err, None)


def _kill(process: subprocess.Popen[bytes]) -> None:
    with suppress(ProcessLookupError):
        os.killpg(process.pid, signal.SIGKILL)
