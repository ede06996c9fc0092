"""Arrays in a .npz or a Parquet file -> rows: one array a column, of bools, integers, floats or texts.

Nothing is unpickled. In a float array NaN is a missing value, in Parquet null is too.
"""

from __future__ import annotations

import hashlib
import importlib
import math
import zipfile
import zlib
from collections.abc import Iterator
from functools import partial
from pathlib import Path
from typing import IO, Any, BinaryIO

import numpy as np
import numpy.typing as npt

from runtime_min.errors import Problem, RowsError
from trainer.cells import Block, Cells, Findings
from trainer.plan_checks import shown

_BLOCK_ROWS = 65_536
_TAKEN = "give bools, integers, floats or texts"
_HEADERS = {(1, 0): np.lib.format.read_array_header_1_0, (2, 0): np.lib.format.read_array_header_2_0}


class NpzFile:
    """A .npz as a source of rows: each array is a column, and its name the column's header."""

    place = "row"

    def __init__(self, path: Path, stream: BinaryIO) -> None:
        self.where = str(path)
        self._sha256 = _digest(stream)
        try:
            self._archive = zipfile.ZipFile(stream)
        except (zipfile.BadZipFile, ValueError, EOFError) as error:
            raise self._broken(error) from None
        members = [member for member in self._archive.infolist() if member.filename.endswith(".npy")]
        self._members = [member.filename for member in members]
        self.header = [name.removesuffix(".npy") for name in self._members]
        if not members:
            raise RowsError(Problem(self.where, "found no array", "give one array a column"))
        shapes = [self._shape(member) for member in members]
        problems = [
            Problem(self.here(name), f"found the shape {shape}", "give arrays of one dimension, one a column")
            for name, shape in zip(self.header, shapes, strict=True)
            if len(shape) != 1
        ]
        if not problems and len(set(shapes)) > 1:
            other = next(at for at, shape in enumerate(shapes) if shape != shapes[0])
            found = f"found {shapes[other][0]} rows where {shown(self.header[0])} has {shapes[0][0]}"
            problems.append(Problem(self.here(self.header[other]), found, "give arrays of one length"))
        if problems:
            raise RowsError(problems)
        self._rows = shapes[0][0]

    def here(self, name: str) -> str:
        return f"{self.where}: array {shown(name)}"

    def blocks(self, findings: Findings) -> Iterator[Block]:
        arrays: dict[int, npt.NDArray[Any]] = {}

        def cells(position: int) -> Cells:
            if position not in arrays:
                arrays[position] = self._array(position)
            part = arrays[position][start : start + _BLOCK_ROWS]
            return part.tolist() if part.dtype.kind == "U" else part

        for start in range(0, self._rows, _BLOCK_ROWS):
            yield Block(range(start + 1, min(start + _BLOCK_ROWS, self._rows) + 1), cells)

    def sha256(self) -> str:
        return self._sha256

    def _shape(self, member: zipfile.ZipInfo) -> tuple[int, ...]:
        """The array's shape; refuses what cannot be read, or would be larger than the file says that it is."""
        name = member.filename.removesuffix(".npy")
        try:
            with self._archive.open(member) as stored:
                shape, dtype = _array_header(stored)
        except (zipfile.BadZipFile, zlib.error, ValueError, EOFError, NotImplementedError, RuntimeError) as error:
            raise self._broken(error, name) from None
        if dtype.hasobject:
            found = "found Python objects, which only unpickling could read"
            raise RowsError(Problem(self.here(name), found, "save numbers, or texts of a fixed length"))
        if dtype.kind not in "biufUS":
            raise RowsError(Problem(self.here(name), f"found the type {dtype}", _TAKEN))
        if math.prod(shape) * dtype.itemsize > member.file_size:
            raise self._broken("an array that ends too soon", name)
        return shape

    def _array(self, position: int) -> npt.NDArray[Any]:
        name = self.header[position]
        try:
            with self._archive.open(self._members[position]) as stored:
                array = np.lib.format.read_array(stored, allow_pickle=False)
            return np.char.decode(array, "utf-8") if array.dtype.kind == "S" else array
        except UnicodeDecodeError:
            found = "found text that is not UTF-8"
            raise RowsError(Problem(self.here(name), found, "save the texts as UTF-8")) from None
        except (zipfile.BadZipFile, zlib.error, ValueError, EOFError) as error:
            raise self._broken(error, name) from None

    def _broken(self, error: Exception | str, name: str | None = None) -> RowsError:
        where = self.where if name is None else self.here(name)
        return RowsError(Problem(where, f"found what is not a whole .npz ({error})", "save the arrays again"))


def _array_header(stored: IO[bytes]) -> tuple[tuple[int, ...], np.dtype[Any]]:
    version = np.lib.format.read_magic(stored)
    if version not in _HEADERS:
        raise ValueError(f"version {version[0]}.{version[1]} of its format")
    shape, _, dtype = _HEADERS[version](stored)
    return shape, dtype


class ParquetFile:
    """A Parquet file as a source of rows."""

    place = "row"

    def __init__(self, path: Path, stream: BinaryIO, arrow: Any, parquet: Any) -> None:
        self.where = str(path)
        self._arrow = arrow
        self._sha256 = _digest(stream)
        try:
            self._file = parquet.ParquetFile(stream)
            self.header: list[str] = list(self._file.schema_arrow.names)
        except (arrow.ArrowException, OSError, ValueError) as error:
            raise self._broken(error) from None

    def blocks(self, findings: Findings) -> Iterator[Block]:
        first = 1
        batches = self._file.iter_batches(batch_size=_BLOCK_ROWS)
        while True:
            try:
                batch = next(batches, None)
            except (self._arrow.ArrowException, OSError, ValueError) as error:
                raise self._broken(error) from None
            if batch is None:
                return
            yield Block(range(first, first + batch.num_rows), partial(self._cells, batch))
            first += batch.num_rows

    def sha256(self) -> str:
        return self._sha256

    def _cells(self, batch: Any, position: int) -> Cells:
        types, cells = self._arrow.types, batch.column(position)
        if types.is_dictionary(cells.type):
            cells = cells.dictionary_decode()
        if types.is_string(cells.type) or types.is_large_string(cells.type):
            return ["" if text is None else text for text in cells.to_pylist()]
        if types.is_boolean(cells.type) and cells.null_count:
            cells = cells.cast("int8")
        if types.is_null(cells.type) or types.is_decimal(cells.type) or types.is_float16(cells.type):
            cells = cells.cast("float64")
        if types.is_boolean(cells.type) or types.is_integer(cells.type) or types.is_floating(cells.type):
            array: npt.NDArray[Any] = cells.to_numpy(zero_copy_only=False)
            return array
        where = f"{self.where}: column {shown(self.header[position])}"
        raise RowsError(Problem(where, f"found the type {cells.type}", _TAKEN))

    def _broken(self, error: Exception) -> RowsError:
        told = " ".join(str(error).split())[:100]
        return RowsError(Problem(self.where, f"found what is not a whole Parquet file ({told})", "write it again"))


def parquet_file(path: Path, stream: BinaryIO) -> ParquetFile:
    """Raises RowsError where the package that reads it is not installed."""
    try:
        arrow, parquet = importlib.import_module("pyarrow"), importlib.import_module("pyarrow.parquet")
    except ImportError:
        found = "needs the package pyarrow, which is not installed"
        raise RowsError(Problem(str(path), found, 'run pip install "firmlogit[parquet]", or give a .csv')) from None
    return ParquetFile(path, stream, arrow, parquet)


def _digest(stream: BinaryIO) -> str:
    digest = hashlib.sha256()
    while chunk := stream.read(1 << 20):
        digest.update(chunk)
    stream.seek(0)
    return digest.hexdigest()
