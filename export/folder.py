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

from export.interrupts import undisturbed
from runtime_min.errors import Problem, ReleaseError

_EXCHANGE = 2  # RENAME_EXCHANGE of renameat2(2)
_HERE = -100  # AT_FDCWD
_OLD = "-old"

_TODO = {
    errno.ENOSPC: "free space there, or choose another --into",
    errno.EDQUOT: "free space there, or choose another --into",
    errno.EFBIG: "allow larger files there, or choose another --into",
    errno.EROFS: "allow writing there, or choose another --into",
    errno.EACCES: "allow writing there, or choose another --into",
    errno.EPERM: "allow writing there, or choose another --into",
}


def followed(place: Path) -> Path:
    """Where a folder really stands: links are followed, so that a link to a release stays a link."""
    return Path(os.path.realpath(place))


def identity(place: Path) -> tuple[int, int] | None:
    """What tells one folder at this place from the next one there; None where there is none."""
    try:
        found = place.stat()
    except OSError:
        return None
    return found.st_dev, found.st_ino


@contextlib.contextmanager
def building(place: Path, named: Path | None = None) -> Iterator[Path]:
    """An empty folder beside `place` to build in. Whatever is in it at the end and was not moved away is removed.

    Raises ReleaseError where it cannot be made or filled; its sentence is about `named`, by default the place.
    """
    place = followed(place)
    named = named or place
    made: list[Path] = []
    try:
        try:
            _make(place.parent, made)
            _clear_up(place)
            folder, lock = _locked_folder(place)
        except OSError as error:
            raise _cannot(named, error) from None
        try:
            yield folder
        except OSError as error:
            raise _cannot(named, error, folder) from None
        finally:
            with undisturbed():
                shutil.rmtree(folder, ignore_errors=True)
                os.close(lock)
    finally:
        for parent in reversed(made):
            with contextlib.suppress(OSError):  # it holds something now
                parent.rmdir()


def put_in_place(folder: Path, place: Path) -> None:
    """Move a complete folder to its place; an old one there is exchanged for it in one step and then removed.

    Raises ReleaseError where that cannot be done; the old one is then there as before.
    """
    place = followed(place)
    try:
        _to_disk(folder)
        with undisturbed():
            try:
                folder.rename(place)
            except OSError as error:
                if error.errno not in (errno.ENOTEMPTY, errno.EEXIST, errno.ENOTDIR):
                    raise
                _exchange(folder, place)
                shutil.rmtree(folder, ignore_errors=True)
    except OSError as error:
        raise _cannot(place, error, folder) from None


def write_files(into: Path, files: dict[str, bytes]) -> None:
    """Write files into a folder that may hold others, and move all of them there when the last one is complete.

    Raises ReleaseError.
    """
    into = followed(into)
    try:
        for name in files:
            if (into / name).is_dir():
                raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR), str(into / name))
        with building(into / "files", into) as folder:
            for name, data in files.items():
                (folder / name).write_bytes(data)
            _to_disk(folder)
            with undisturbed():
                for name in files:
                    os.replace(folder / name, into / name)
    except OSError as error:
        raise _cannot(into, error) from None


def _prefix(place: Path) -> str:
    return f".{place.name}.unfinished-"


def _make(parent: Path, made: list[Path]) -> None:
    """Make a folder and those above it; `made` gets each that was not there."""
    missing = []
    while not parent.exists():
        missing.append(parent)
        parent = parent.parent
    for folder in reversed(missing):
        with contextlib.suppress(FileExistsError):  # another run made it just now
            folder.mkdir()
            made.append(folder)


def _locked_folder(place: Path) -> tuple[Path, int]:
    """A new folder and the descriptor that holds its lock.

    Between the making and the locking another run may take the folder for one that was left, and remove it.
    """
    while True:
        folder = Path(tempfile.mkdtemp(prefix=_prefix(place), dir=place.parent))
        try:
            lock = os.open(folder, os.O_RDONLY)
        except FileNotFoundError:
            continue
        fcntl.flock(lock, fcntl.LOCK_EX)
        here = os.fstat(lock)
        if identity(folder) == (here.st_dev, here.st_ino):
            folder.chmod(0o755)
            return folder, lock
        os.close(lock)


def _exchange(folder: Path, place: Path) -> None:
    if sys.platform == "linux":
        libc = ctypes.CDLL(None, use_errno=True)
        if libc.renameat2(_HERE, os.fsencode(folder), _HERE, os.fsencode(place), _EXCHANGE) == 0:
            return
        code = ctypes.get_errno()
        if code not in (errno.EINVAL, errno.ENOSYS):
            raise OSError(code, os.strerror(code))
    # No exchange on this system: two steps, and the old folder stands beside under the dotted name in between. Where
    # the run is killed there, the next one puts the old folder back.
    aside = folder.with_name(folder.name + _OLD)
    lock = os.open(place, os.O_RDONLY)
    try:
        fcntl.flock(lock, fcntl.LOCK_EX)
        place.rename(aside)
        try:
            folder.rename(place)
        except OSError:
            aside.rename(place)
            raise
        aside.rename(folder)
    finally:
        os.close(lock)


def _clear_up(place: Path) -> None:
    """Put back an old folder that a killed run left aside; remove unfinished folders that nobody holds locked."""
    for left in place.parent.glob(_prefix(place).replace("[", "[[]") + "*"):
        with contextlib.suppress(OSError):
            lock = os.open(left, os.O_RDONLY)
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
                if left.name.endswith(_OLD) and not place.exists():
                    left.rename(place)
                else:
                    shutil.rmtree(left, ignore_errors=True)
            finally:
                os.close(lock)


def _to_disk(folder: Path) -> None:
    """Wait until the files are on the disk, so that a power cut after the exchange finds them whole."""
    for path in (*folder.iterdir(), folder):
        handle = os.open(path, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def _cannot(place: Path, error: OSError, folder: Path | None = None) -> ReleaseError:
    """In one sentence: the place, or the other file that the error is of, and the reason."""
    reason = error.strerror or str(error)
    named = error.filename if isinstance(error.filename, str) else None
    if folder is not None and named is not None and not named.startswith((str(folder), str(place))):
        return ReleaseError(Problem(named, f"cannot be used ({reason})", "make it usable"))
    todo = _TODO.get(error.errno or 0, "free the place or choose another --into")
    return ReleaseError(Problem(str(place), f"cannot be written ({reason})", todo))
