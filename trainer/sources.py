"""The files of a plan's rows, opened: each a source with a header, blocks of rows, and a SHA-256.

`records` knows CSV, `stored_arrays` knows .npz and Parquet.
"""

from __future__ import annotations

import glob
import hashlib
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Protocol

from runtime_min.errors import Problem, RowsError
from trainer.cells import Block, Findings
from trainer.plan_checks import shown
from trainer.plan_rows import is_pattern
from trainer.records import CsvFile


class Source(Protocol):
    """`place`: what a row is called, "line" or "row". `sha256` may be asked for once the last block was taken."""

    where: str
    header: list[str]

    @property
    def place(self) -> str: ...

    def blocks(self, findings: Findings) -> Iterator[Block]: ...

    def sha256(self) -> str: ...


def row_files(file: Path, folder: Path) -> tuple[Path, ...]:
    """The file itself, or, where no file has that name and it is a pattern, those that match it, sorted by name.

    `*`, `?` and `[…]` match within a name, `**` any folders; characters of `folder`, the plan's, mean themselves.
    Raises RowsError where nothing matches.
    """
    name = str(file.relative_to(folder)) if file.is_relative_to(folder) else str(file)
    if not is_pattern(name) or os.path.lexists(file):
        return (file,)
    matching = tuple(folder / match for match in sorted(glob.glob(name, root_dir=folder, recursive=True)))
    if not matching:
        raise RowsError(Problem(str(file), "found no file that matches", "give the path of the rows"))
    return matching


@contextmanager
def opened(path: Path) -> Iterator[Source]:
    """The file at `path`, by the end of its name. Raises RowsError where there is none to read."""
    where, todo = str(path), "give the path of the rows"
    try:
        if path.is_dir():
            raise RowsError(Problem(where, "found a folder", todo))
        stream = path.open("rb")
    except FileNotFoundError:
        raise RowsError(Problem(where, "found no such file", todo)) from None
    except OSError as error:
        raise RowsError(Problem(where, f"cannot be read ({error.strerror})", "make it readable")) from None
    except ValueError:
        raise RowsError(Problem(shown(where), "found no path", todo)) from None
    with stream:
        try:
            if path.suffix.lower() == ".csv":
                yield CsvFile(path, stream)
                return
            from trainer.stored_arrays import NpzFile, parquet_file

            yield NpzFile(path, stream) if path.suffix.lower() == ".npz" else parquet_file(path, stream)
        except OSError as error:
            found = f"cannot be read ({error.strerror or error})"
            raise RowsError(Problem(where, found, "make it readable")) from None


def digest_of(digests: list[str]) -> str:
    """One file's SHA-256 as it is; of several files that of their digests' lines, in the order of their names."""
    if len(digests) == 1:
        return digests[0]
    return hashlib.sha256("".join(f"{digest}\n" for digest in digests).encode()).hexdigest()
