"""Commands in forked processes, for tests that end them at a moment of their own choice. See `fork_server`."""

from __future__ import annotations

import itertools
import json
import os
import signal
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from fork_server import ROOT


@dataclass(frozen=True)
class Ended:
    """A command that has ended: exit status (negative: the signal), what it printed, and how long it took."""

    status: int
    out: str
    err: str
    seconds: float


class Server:
    """Starts commands and waits for them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._number = itertools.count()
        self._process = subprocess.Popen(
            [sys.executable, str(ROOT / "tests" / "fork_server.py")],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )

    def close(self) -> None:
        """End the server."""
        self._process.communicate()

    def warm_up(self, *arguments: str | Path) -> None:
        """Run a command in the server itself: what it compiled and loaded, all that are started later have."""
        assert self._ask({"here": [str(argument) for argument in arguments]}) == 0

    def start(self, *arguments: str | Path, **bad_day: Any) -> Command:
        """Start a command; it is running its first line when this returns."""
        streams = self.folder / f"streams-{next(self._number)}"
        streams.mkdir()
        order = {"start": [str(argument) for argument in arguments], "streams": str(streams), **bad_day}
        pid = self._ask(order)
        began = time.monotonic()
        while not (streams / "started").exists() and time.monotonic() < began + 30:
            time.sleep(0.0005)
        return Command(self, pid, streams, time.monotonic())

    def run(self, *arguments: str | Path, **bad_day: Any) -> Ended:
        """Start a command and wait for its end."""
        return self.start(*arguments, **bad_day).end()

    def _ask(self, order: dict[str, Any]) -> int:
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(json.dumps(order) + "\n")
        self._process.stdin.flush()
        return int(self._process.stdout.readline())


@dataclass(frozen=True)
class Command:
    """A command that was started."""

    server: Server
    pid: int
    streams: Path
    began: float

    def signal_after(self, seconds: float, number: signal.Signals) -> Ended:
        """Send a signal so long after the start, and wait for the end."""
        time.sleep(max(0.0, self.began + seconds - time.monotonic()))
        os.kill(self.pid, number)  # where it has ended it is still there to be waited for
        return self.end()

    def end(self) -> Ended:
        """Wait for the end."""
        status = self.server._ask({"wait": self.pid})
        seconds = time.monotonic() - self.began
        out, err = (path.read_text() if path.exists() else "" for path in (self.streams / "out", self.streams / "err"))
        return Ended(status, out, err, seconds)
