"""Rows in .npz, in Parquet, and in several files: the same rows as in one CSV, and a sentence for each bad file."""

from __future__ import annotations

import contextlib
import hashlib
import io
import sys
import zipfile
from pathlib import Path

import numpy as np
import pyarrow
import pytest
from pyarrow import parquet

from runtime_min.errors import RowsError
from trainer.plan import read_plan
from trainer.table import Rows, read_rows

PLAN = """
model = "m"
[rows]
file = "FILE"
label = "state"
weight = "hours"
group = "pump"
held_out = "test"
[[input]]
name = "flow"
missing = "typical"
[[input]]
name = "wheel"
levels = ["closed", "open"]
"""
CSV = """flow,wheel,state,hours,pump,test
1.5,closed,0,1,1,0
,open,1,0.25,2,1
0.1,open,0,3,3,0
2,closed,1,1,1,0
"""
COLUMNS = {
    "flow": np.array([1.5, np.nan, 0.1, 2.0]),
    "wheel": np.array(["closed", "open", "open", "closed"]),
    "state": np.array([0, 1, 0, 1], np.int8),
    "hours": np.array([1, 0.25, 3, 1], np.float32),
    "pump": np.array([1, 2, 3, 1], np.uint64),
    "test": np.array([False, True, False, False]),
}


def read(folder: Path, file: str) -> Rows:
    (folder / "plan.toml").write_text(PLAN.replace("FILE", file))
    return read_rows(read_plan(folder / "plan.toml"))


def sentence(folder: Path, file: str) -> str:
    with pytest.raises(RowsError) as caught:
        read(folder, file)
    (problem,) = caught.value.problems
    return str(problem).replace(f"{folder}/", "")


def same(one: Rows, other: Rows) -> bool:
    assert one.keys == other.keys
    assert one.inputs == other.inputs
    assert (one.classes, one.groups, one.total, one.dropped) == (
        other.classes,
        other.groups,
        other.total,
        other.dropped,
    )
    for name in ("values", "labels", "weights", "held_out"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))
    return True


@pytest.fixture
def csv_rows(tmp_path: Path) -> Rows:
    (tmp_path / "runs.csv").write_text(CSV)
    return read(tmp_path, "runs.csv")


# --- .npz ------------------------------------------------------------------------------------------------------------


def test_npz_gives_the_rows_of_the_csv(tmp_path: Path, csv_rows: Rows) -> None:
    np.savez(tmp_path / "runs.npz", **COLUMNS)
    rows = read(tmp_path, "runs.npz")
    assert same(rows, csv_rows)
    assert rows.sha256 == hashlib.sha256((tmp_path / "runs.npz").read_bytes()).hexdigest()


@pytest.mark.parametrize(
    ("labels", "classes"),
    [
        (np.array([False, True, False, True]), ("false", "true")),
        (np.array([0, 1, 0, 1], np.int64), ("0", "1")),
        (np.array([0.0, 1.5, 0.0, 1.5]), ("0", "1.5")),
        (np.array([2**63 + 1, 2**63, 2**63 + 1, 2**63], np.uint64), ("9223372036854775808", "9223372036854775809")),
        (np.array(["a", "é", "a", "é"]), ("a", "é")),
        (np.array(["a", "é", "a", "é"]).astype(object).astype("U"), ("a", "é")),
        (np.array([text.encode() for text in ("a", "é", "a", "é")]), ("a", "é")),
    ],
    ids=["bools", "integers", "floats", "large integers", "texts", "texts of objects", "UTF-8"],
)
def test_labels_of_any_type_are_taken_as_texts(labels: np.ndarray, classes: tuple[str, ...], tmp_path: Path) -> None:
    np.savez_compressed(tmp_path / "runs.npz", **{**COLUMNS, "state": labels})
    assert read(tmp_path, "runs.npz").classes == classes


def test_texts_in_an_npz_are_read_as_numbers_where_the_plan_says_so(tmp_path: Path, csv_rows: Rows) -> None:
    np.savez(tmp_path / "runs.npz", **{**COLUMNS, "flow": np.array(["1.5", "", "0.1", "2"])})
    assert same(read(tmp_path, "runs.npz"), csv_rows)


class Pickled:
    """An object that would leave a mark where it is unpickled."""

    def __reduce__(self) -> tuple[object, tuple[str]]:
        return print, ("unpickled",)


def test_nothing_is_unpickled(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    objects = np.array([Pickled()] * 4, dtype=object)
    np.savez(tmp_path / "runs.npz", **{**COLUMNS, "wheel": objects})
    assert sentence(tmp_path, "runs.npz") == (
        'runs.npz: array "wheel": found Python objects, which only unpickling could read; '
        "save numbers, or texts of a fixed length"
    )
    assert "unpickled" not in capsys.readouterr().out


@pytest.mark.parametrize(
    ("arrays", "expected"),
    [
        (
            {"flow": np.zeros((4, 2))},
            'array "flow": found the shape (4, 2); give arrays of one dimension, one a column',
        ),
        (
            {"wheel": np.array(["open"] * 5)},
            'array "wheel": found 5 rows where "flow" has 4; give arrays of one length',
        ),
        (
            {"flow": np.zeros(4, complex)},
            'array "flow": found the type complex128; give bools, integers, floats or texts',
        ),
        (
            {"flow": np.array(["2024-05-01"] * 4, "datetime64[D]")},
            'array "flow": found the type datetime64[D]; give bools, integers, floats or texts',
        ),
        (
            {"flow": np.array([1, 2, np.inf, 3])},
            'row 3, column "flow": found "inf", not a finite number; leave the field empty where a value is missing',
        ),
        (
            {"hours": np.array([1, -1, 2, 3])},
            'row 2, column "hours": found -1; write a weight of 0 or more, or remove the row',
        ),
        (
            {"hours": np.array([1, np.nan, 2, 3])},
            'row 2, column "hours": found an empty field; write a weight of 0 or more, or remove the row',
        ),
        (
            {"wheel": np.array([b"\xff"] * 4)},
            'array "wheel": found text that is not UTF-8; save the texts as UTF-8',
        ),
    ],
)
def test_each_bad_array_is_named(arrays: dict[str, np.ndarray], expected: str, tmp_path: Path) -> None:
    np.savez(tmp_path / "runs.npz", **{**COLUMNS, **arrays})
    assert sentence(tmp_path, "runs.npz") == f"runs.npz: {expected}"


def test_array_that_is_not_there_is_named(tmp_path: Path) -> None:
    np.savez(tmp_path / "runs.npz", **{name: column for name, column in COLUMNS.items() if name != "flow"})
    assert sentence(tmp_path, "runs.npz") == (
        'runs.npz: found no column "flow" for input "flow"; name a column of the file in the plan'
    )


def test_broken_npz_ends_in_a_sentence_wherever_it_breaks(tmp_path: Path) -> None:
    np.savez_compressed(tmp_path / "whole.npz", **COLUMNS)
    whole = (tmp_path / "whole.npz").read_bytes()
    for length in range(0, len(whole), 7):
        (tmp_path / "runs.npz").write_bytes(whole[:length])
        assert "found what is not a whole .npz" in sentence(tmp_path, "runs.npz")
    rows = read(tmp_path, "whole.npz")
    for place in range(0, len(whole), 11):  # one byte turned over: caught, or of no effect
        (tmp_path / "runs.npz").write_bytes(whole[:place] + bytes([whole[place] ^ 0xFF]) + whole[place + 1 :])
        with contextlib.suppress(RowsError):
            assert same(read(tmp_path, "runs.npz"), rows)


def test_array_that_claims_more_than_the_file_holds_is_refused_at_once(tmp_path: Path) -> None:
    header = io.BytesIO()
    np.lib.format.write_array_header_1_0(header, {"descr": "<f8", "fortran_order": False, "shape": (10**15,)})
    with zipfile.ZipFile(tmp_path / "runs.npz", "w") as archive:
        archive.writestr("flow.npy", header.getvalue() + bytes(64))
    assert sentence(tmp_path, "runs.npz") == (
        'runs.npz: array "flow": found what is not a whole .npz (an array that ends too soon); save the arrays again'
    )


# --- Parquet ---------------------------------------------------------------------------------------------------------


def table(**changed: object) -> pyarrow.Table:
    columns = {
        "flow": pyarrow.array([1.5, None, 0.1, 2.0]),
        "wheel": pyarrow.array(["closed", "open", "open", "closed"]).dictionary_encode(),
        "state": pyarrow.array([0, 1, 0, 1], pyarrow.int8()),
        "hours": pyarrow.array([1, 0.25, 3, 1], pyarrow.float32()),
        "pump": pyarrow.array(["1", "2", "3", "1"], pyarrow.large_string()),
        "test": pyarrow.array([False, True, False, False]),
    }
    return pyarrow.table({**columns, **changed})


def test_parquet_gives_the_rows_of_the_csv(tmp_path: Path, csv_rows: Rows) -> None:
    parquet.write_table(table(), tmp_path / "runs.parquet", row_group_size=3)
    rows = read(tmp_path, "runs.parquet")
    assert same(rows, csv_rows)
    assert rows.sha256 == hashlib.sha256((tmp_path / "runs.parquet").read_bytes()).hexdigest()


@pytest.mark.parametrize(
    ("column", "expected"),
    [
        (pyarrow.array([[1], [2], [3], [4]]), 'column "flow": found the type list<item: int64>'),
        (pyarrow.array([0, 1, 2, 3], pyarrow.timestamp("s")), 'column "flow": found the type timestamp[ms]'),
    ],
)
def test_column_of_another_type_is_named(column: object, expected: str, tmp_path: Path) -> None:
    parquet.write_table(table(flow=column), tmp_path / "runs.parquet")
    found = sentence(tmp_path, "runs.parquet").replace("element: int64", "item: int64")
    assert found == f"runs.parquet: {expected}; give bools, integers, floats or texts"


def test_columns_of_integers_decimals_and_nothing_are_numbers(tmp_path: Path, csv_rows: Rows) -> None:
    from decimal import Decimal

    flow = pyarrow.array([Decimal("1.5"), None, Decimal("0.1"), Decimal("2")])
    parquet.write_table(table(flow=flow), tmp_path / "runs.parquet")
    assert same(read(tmp_path, "runs.parquet"), csv_rows)
    parquet.write_table(table(flow=pyarrow.array([1, None, 3, 2])), tmp_path / "runs.parquet")
    np.testing.assert_array_equal(read(tmp_path, "runs.parquet").values[:, 0], [1, np.nan, 3, 2])
    parquet.write_table(table(flow=pyarrow.nulls(4)), tmp_path / "runs.parquet")
    assert sentence(tmp_path, "runs.parquet") == 'runs.parquet: column "flow": found no value; remove the input'


def test_broken_parquet_ends_in_a_sentence(tmp_path: Path) -> None:
    parquet.write_table(table(), tmp_path / "whole.parquet")
    whole = (tmp_path / "whole.parquet").read_bytes()
    for length in (0, 3, 100, len(whole) - 1):
        (tmp_path / "runs.parquet").write_bytes(whole[:length])
        assert sentence(tmp_path, "runs.parquet").startswith("runs.parquet: found what is not a whole Parquet file (")


def test_missing_package_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    parquet.write_table(table(), tmp_path / "runs.parquet")
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    assert sentence(tmp_path, "runs.parquet") == (
        "runs.parquet: needs the package pyarrow, which is not installed; "
        'run pip install "firmlogit[parquet]", or give a .csv'
    )


# --- several files ---------------------------------------------------------------------------------------------------


def parts(folder: Path) -> list[bytes]:
    header, *lines = CSV.splitlines(keepends=True)
    (folder / "logs").mkdir()
    written = []
    for name, some in (("b", lines[2:]), ("a", lines[:2])):
        (folder / "logs" / f"{name}.csv").write_text(header + "".join(some))
    for name in "ab":
        written.append((folder / "logs" / f"{name}.csv").read_bytes())
    return written


@pytest.mark.parametrize("pattern", ["logs/*.csv", "logs/?.csv", "logs/[ab].csv", "**/[ab].csv"])
def test_several_files_are_one_table_in_the_order_of_their_names(pattern: str, tmp_path: Path, csv_rows: Rows) -> None:
    contents = parts(tmp_path)
    rows = read(tmp_path, pattern)
    assert same(rows, csv_rows)
    lines = "".join(f"{hashlib.sha256(content).hexdigest()}\n" for content in contents)
    assert rows.sha256 == hashlib.sha256(lines.encode()).hexdigest()


def test_pattern_that_one_file_matches_has_its_digest(tmp_path: Path) -> None:
    (tmp_path / "runs.csv").write_text(CSV)
    assert read(tmp_path, "ru*.csv").sha256 == hashlib.sha256(CSV.encode()).hexdigest()


def test_brackets_in_the_name_of_a_file_or_a_folder_mean_themselves(tmp_path: Path, csv_rows: Rows) -> None:
    folder = tmp_path / "plant [1] it's *new*"
    folder.mkdir()
    (folder / "runs [2].csv").write_text(CSV)
    assert same(read(folder, "runs [2].csv"), csv_rows)
    assert same(read(folder, "runs*.csv"), csv_rows)


@pytest.mark.parametrize(
    ("header", "expected"),
    [
        ("flow,wheel,state,hours,pump,trial", 'found no column "test", which the first file has'),
        ("flow,wheel,state,hours,pump,test,note", 'found the column "note", which the first file has not'),
        ("wheel,flow,state,hours,pump,test", "found the columns of the first file in another order"),
    ],
)
def test_files_with_mixed_headers_are_refused(header: str, expected: str, tmp_path: Path) -> None:
    parts(tmp_path)
    (tmp_path / "logs" / "c.csv").write_text(header + "\n")
    assert sentence(tmp_path, "logs/*.csv") == (
        f"logs/c.csv: line 1: {expected}; give files with the same columns in the same order"
    )


def test_problem_names_its_own_file(tmp_path: Path) -> None:
    parts(tmp_path)
    with (tmp_path / "logs" / "b.csv").open("a") as stream:
        stream.write("x,open,1,1,1,0\n")
    assert sentence(tmp_path, "logs/*.csv").startswith('logs/b.csv: line 4, column "flow": found "x", not a number; ')
