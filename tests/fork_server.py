"""A process that has imported everything and forks once a command, so that hundreds of commands cost little.

Started as `python fork_server.py`, it reads one JSON object a line and answers each with one line:

    {"start": [ARGUMENTS], "streams": FOLDER, ...}   the new process's id
    {"wait": ID}                                     its exit status, or minus the signal that ended it
    {"here": [ARGUMENTS]}                            its exit status; run without a fork, so that templates are compiled

More keys of "start", for a bad day in that process alone: "out" (where standard output goes), "environment" (names to
texts), "largest_file" (bytes), "obey_modes" (true: root loses the right to pass over file modes), "kill_at" and
"beside" (SIGKILL at the n-th operation on files in that folder, from 1).
"""

from __future__ import annotations

import contextlib
import ctypes
import importlib
import io
import json
import os
import resource
import signal
import sys
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent
CAP_DAC_OVERRIDE = 1  # linux/capability.h
CAPABILITY_VERSION_3 = 0x20080522
BY_PATH = ("open", "os.mkdir", "os.rename", "os.chmod", "os.listdir", "os.scandir", "tempfile.mkdtemp")
ANYWAY = ("os.remove", "os.rmdir", "fcntl.flock", "ctypes.dlsym")


def warm() -> None:
    """Import all that a command would import on its way."""
    for room in ("commands", "optimality", "release", "report", "targets"):
        importlib.import_module(f"export.{room}")
    for room in ("fit", "request", "table"):
        importlib.import_module(f"trainer.{room}")
    importlib.import_module("runtime_min.__main__")
    for name in sys.modules["export.targets"].TARGETS:
        importlib.import_module(f"export.targets.{name}.emit")
        importlib.import_module(f"export.targets.{name}.runner")


def obey_modes() -> None:
    """Give up the right of root to write where the modes forbid it."""
    libc = ctypes.CDLL(None, use_errno=True)
    header = (ctypes.c_uint32 * 2)(CAPABILITY_VERSION_3, 0)
    sets = (ctypes.c_uint32 * 6)()
    if libc.capget(header, sets) == 0:
        sets[0] &= ~(1 << CAP_DAC_OVERRIDE)
        if libc.capset(header, sets) != 0:
            raise OSError(ctypes.get_errno(), "capset")


def kill_at(wanted: int, beside: str) -> None:
    """Count this process's operations on files in a folder; end by SIGKILL at the one wanted."""
    count = 0

    def hook(event: str, arguments: tuple[Any, ...]) -> None:
        nonlocal count
        named = event in BY_PATH and any(beside in os.fsdecode(a) for a in arguments if isinstance(a, str | bytes))
        if named or event in ANYWAY:
            count += 1
            if count == wanted:
                os.kill(os.getpid(), signal.SIGKILL)

    sys.addaudithook(hook)


def become(order: dict[str, Any]) -> None:
    """The forked process: streams to files, the bad day, then the command as if it were a program of its own."""
    streams = Path(order["streams"])
    for name, number in (("out", 1), ("err", 2)):
        os.dup2(os.open(order.get(name, streams / name), os.O_WRONLY | os.O_CREAT), number)
    os.dup2(os.open(os.devnull, os.O_RDONLY), 0)
    sys.stdin = open(0, encoding="utf-8", closefd=False)  # noqa: SIM115
    sys.stdout = open(1, "w", encoding="utf-8", closefd=False)  # noqa: SIM115
    sys.stderr = open(2, "w", encoding="utf-8", errors="backslashreplace", closefd=False, buffering=1)  # noqa: SIM115
    os.environ.update(order.get("environment", {}))
    if "largest_file" in order:
        resource.setrlimit(resource.RLIMIT_FSIZE, (order["largest_file"],) * 2)
    if order.get("obey_modes"):
        obey_modes()
    if "kill_at" in order:
        kill_at(order["kill_at"], order["beside"])
    from export.commands import main

    (streams / "started").touch()
    status = 1
    try:
        status = main(order["start"])
    except SystemExit as end:
        status = int(end.code or 0)
    except BaseException:
        sys.excepthook(*sys.exc_info())  # type: ignore[arg-type]
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(status)


def hear_signals() -> None:
    """A process started in the background inherits ignored signals; here they must arrive."""
    signal.signal(signal.SIGINT, signal.default_int_handler)
    for number in (signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.SIG_DFL)


def serve() -> None:
    """Answer until the input ends."""
    hear_signals()
    warm()
    for line in sys.stdin:
        order = json.loads(line)
        if "wait" in order:
            answer = os.waitstatus_to_exitcode(os.waitpid(order["wait"], 0)[1])
        elif "here" in order:
            with contextlib.redirect_stdout(io.StringIO()):
                answer = sys.modules["export.commands"].main(order["here"])
        else:
            answer = os.fork()
            if answer == 0:
                become(order)
        print(answer, flush=True)


if __name__ == "__main__":
    sys.path.insert(0, str(ROOT))
    os.chdir(ROOT)
    serve()
