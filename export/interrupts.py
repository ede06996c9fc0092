"""Ctrl-C, SIGTERM and a closed terminal become one exception, at a moment when nothing is half done.

An exception that starts inside an import or a finaliser is lost or mislaid there (a C extension answers with an
ImportError of its own), so the signal is sent again a little later instead.
"""

from __future__ import annotations

import os
import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
AGAIN_SECONDS = 0.02
AT_ONCE = b"stopped at once; the next ship removes what is unfinished\n"


class Stopped(BaseException):
    """A signal asked the command to stop. `exit_status` is what a shell shows for it: 128 + its number."""

    def __init__(self, number: int) -> None:
        super().__init__("Ctrl-C" if number == signal.SIGINT else signal.Signals(number).name)
        self.exit_status = 128 + number


@contextmanager
def stoppable() -> Iterator[None]:
    """Inside, the first signal raises Stopped; a second one, while the first is being obeyed, ends the process.

    Signals that are ignored stay so (nohup, a shell's background jobs). Outside the main thread nothing changes.
    """
    stopping = False

    def stop(number: int, frame: FrameType | None) -> None:
        nonlocal stopping
        if stopping:
            os.write(2, AT_ONCE)
            os._exit(128 + number)
        if _would_be_lost(frame):
            threading.Timer(AGAIN_SECONDS, os.kill, (os.getpid(), number)).start()
            return
        stopping = True
        raise Stopped(number)

    before = _replace(stop)
    try:
        yield
    finally:
        _put_back(before)


@contextmanager
def undisturbed() -> Iterator[None]:
    """Inside, signals wait: for a step that must not be cut in two, and is short."""
    waiting: list[int] = []
    before = _replace(lambda number, frame: waiting.append(number))
    try:
        yield
    finally:
        _put_back(before)
        for number in waiting[:1]:
            signal.raise_signal(number)


def _replace(handler: Any) -> dict[signal.Signals, Any]:
    """Set the handler of every signal that is not ignored; returns the handlers that were there."""
    if threading.current_thread() is not threading.main_thread():
        return {}
    found = {number: signal.getsignal(number) for number in SIGNALS}
    before = {number: old for number, old in found.items() if old is not signal.SIG_IGN and old is not None}
    for number in before:
        signal.signal(number, handler)
    return before


def _put_back(before: dict[signal.Signals, Any]) -> None:
    for number, handler in before.items():
        signal.signal(number, handler)


def _would_be_lost(frame: FrameType | None) -> bool:
    while frame is not None:
        if frame.f_code.co_filename.startswith("<frozen importlib") or frame.f_code.co_name == "__del__":
            return True
        frame = frame.f_back
    return False
