"""A folder that appears whole or not at all, and replaces an old one in one step.

The new folder is built beside its place under a name that starts with a dot, and is locked while it is being built.
What a killed run left behind is not locked, and the next run removes it.
"""

from __future__ import annotations

import contextlib
import ctypes
import errno
import fcntl
import os
import shutil
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

from runtime_min.errors import Problem, ReleaseError

_EXCHANGE = 2  # RENAME_EXCHANGE of renameat2(2)
_HERE = -100  # AT_FDCWD


def _prefix(place: Path) -> str:
    return f".{place.name}.unfinished-"


@contextlib.contextmanager
def building(place: Path) -> Iterator[Path]:
    """An empty folder beside `place` to build in. Whatever is in it at the end and was not moved away is removed.

    Raises ReleaseError where it cannot be made or filled.
    """
    place = place.absolute()
    try:
        place.parent.mkdir(parents=True, exist_ok=True)
        _sweep(place)
        folder = Path(tempfile.mkdtemp(prefix=_prefix(place), dir=place.parent))
    except OSError as error:
        raise _cannot(place, error) from None
    lock = os.open(folder, os.O_RDONLY)
    try:
        fcntl.flock(lock, fcntl.LOCK_EX)
        folder.chmod(0o755)
        yield folder
    except OSError as error:
        raise _cannot(place, error) from None
    finally:
        shutil.rmtree(folder, ignore_errors=True)
        os.close(lock)


def put_in_place(folder: Path, place: Path) -> None:
    """Move a complete folder to its place; an old one there is exchanged for it in one step and then removed."""
    place = place.absolute()
    try:
        try:
            folder.rename(place)
        except OSError as error:
            if error.errno not in (errno.ENOTEMPTY, errno.EEXIST, errno.ENOTDIR):
                raise
            _exchange(folder, place)
            shutil.rmtree(folder, ignore_errors=True)
    except OSError as error:
        raise _cannot(place, error) from None


def _exchange(folder: Path, place: Path) -> None:
    if sys.platform == "linux":
        libc = ctypes.CDLL(None, use_errno=True)
        if libc.renameat2(_HERE, os.fsencode(folder), _HERE, os.fsencode(place), _EXCHANGE) == 0:
            return
        code = ctypes.get_errno()
        if code not in (errno.EINVAL, errno.ENOSYS):
            raise OSError(code, os.strerror(code))
    # No exchange on this system: two steps, and the old folder stands beside under the dotted name in between.
    aside = folder.with_name(folder.name + "-old")
    place.rename(aside)
    folder.rename(place)
    aside.rename(folder)


def _sweep(place: Path) -> None:
    """Remove what killed runs left: unfinished folders that nobody holds locked."""
    for left in place.parent.glob(_prefix(place).replace("[", "[[]") + "*"):
        with contextlib.suppress(OSError):
            lock = os.open(left, os.O_RDONLY)
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
                shutil.rmtree(left, ignore_errors=True)
            finally:
                os.close(lock)


def _cannot(place: Path, error: OSError) -> ReleaseError:
    reason = error.strerror or str(error)
    return ReleaseError(Problem(str(place), f"cannot be written ({reason})", "free the place or choose another --into"))


def write_files(into: Path, files: dict[str, bytes]) -> None:
    """Write files into a folder that may hold others: each whole or not at all. Raises ReleaseError."""
    try:
        into.mkdir(parents=True, exist_ok=True)
        for name, data in files.items():
            handle, partial = tempfile.mkstemp(prefix=f".{name}.", dir=into)
            try:
                with os.fdopen(handle, "wb") as file:
                    file.write(data)
                os.chmod(partial, 0o644)
                os.replace(partial, into / name)
            except BaseException:
                os.unlink(partial)
                raise
    except OSError as error:
        raise _cannot(into, error) from None
