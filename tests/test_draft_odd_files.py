"""Drafts from files that nobody prepared: what cannot be read is said in words that lead to the mistake."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

import pytest
from test_draft import plan_of

from runtime_min.errors import RowsError
from trainer.draft import Draft, draft

ROWS = 60


def file_of(folder: Path, header: str, rows: Iterable[str], name: str = "runs.csv") -> Path:
    (folder / name).write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return folder / name


def readings(*columns: tuple[str, ...]) -> list[str]:
    """Rows with a reading in `x`, then each column's texts in turn."""
    return [",".join([f"{at * 7 % 31}.5", *(texts[at % len(texts)] for texts in columns)]) for at in range(ROWS)]


def refusal(path: Path) -> str:
    with pytest.raises(RowsError) as caught:
        draft(path)
    assert len(caught.value.problems) == 1
    return str(caught.value).removeprefix(str(path)).removeprefix(": ")


def why(made: Draft, column: str) -> tuple[str, str]:
    return next((guess.taken_for, guess.why) for guess in made.guesses if guess.column == column)


@pytest.mark.parametrize(("mark", "name"), [(";", "semicolons"), ("\t", "tabs")])
def test_file_without_commas_is_refused_in_one_sentence(tmp_path: Path, mark: str, name: str) -> None:
    path = file_of(tmp_path, mark.join("xyz"), [mark.join(("1,5", "2,5", "ok"))] * 3)
    todo = "save the file with commas between the fields and points in the numbers"
    assert refusal(path) == f"line 1: found {name} between the fields; {todo}"


def test_label_with_stray_spaces_is_named_with_its_texts(tmp_path: Path) -> None:
    path = file_of(tmp_path, "x,state", readings(("good", "bad", "bad ")))
    assert refusal(path) == (
        'found no column with exactly two values; "state" has "bad", "bad ", "good"; '
        "write one of two classes in each row, or add the column with the class"
    )


def test_label_with_empty_rows_is_named(tmp_path: Path) -> None:
    path = file_of(tmp_path, "x,state", [*readings(("good", "bad")), ",", ","])
    assert '"state" has "bad", "good", and is empty in 2 rows; write one of two classes' in refusal(path)


def test_three_classes_are_named_before_another_column_of_few_texts(tmp_path: Path) -> None:
    path = file_of(tmp_path, "x,class,colour", readings(("a", "b", "c"), ("red", "blue", "white", "grey")))
    assert '"class" has "a", "b", "c";' in refusal(path)


def test_two_columns_of_one_name_are_refused_as_they_are_when_shipped(tmp_path: Path) -> None:
    path = file_of(tmp_path, "x,x,state", readings(("1", "2", "3"), ("ok", "bad")))
    assert refusal(path) == 'line 1: found 2 columns named "x"; rename all but one'


def test_file_without_a_header_is_refused(tmp_path: Path) -> None:
    path = file_of(tmp_path, "7.5,0", readings(("0", "1")))
    assert refusal(path) == (
        "line 1: found numbers alone where the names of the columns stand; "
        "write a line with a name for each column above the rows"
    )


@pytest.mark.parametrize(
    ("header", "texts", "event", "reason"),
    [
        ("ok", ("true", "false"), "false", '"true" stands for "ok" in the header'),
        ("Passed?", ("Y", "N"), "N", '"Y" stands for "passed" in the header'),
        ("ok", ("1", "0"), "0", '"1" stands for "ok" in the header'),
        ("not ok", ("ok", "nok"), "nok", "it reads like one"),
        ("fault", ("1", "0"), "1", "it reads like one"),
        ("fault", ("1", "2", "1"), "2", "it is the rarer class (20 of 60 rows)"),
    ],
)
def test_event_is_what_the_header_and_the_classes_say(
    header: str, texts: tuple[str, ...], event: str, reason: str, tmp_path: Path
) -> None:
    made = draft(file_of(tmp_path, f"x,{header}", readings(texts)))
    assert plan_of(made, tmp_path)["rows"]["classes"][1] == event
    assert why(made, event) == ("event", reason)


@pytest.mark.parametrize("rows", [ROWS, 2 * ROWS])
def test_text_among_numbers_is_named(rows: int, tmp_path: Path) -> None:
    lines = [f"{at}.5,{'N/A' if at % 9 == 8 else f'{at}.25'},{'ok' if at % 3 else 'bad'}" for at in range(rows)]
    made = draft(file_of(tmp_path, "x,temp,state", lines))
    reason = 'it has "N/A" beside numbers; leave the field empty where there is no value'
    assert why(made, "temp") == ("left out", reason)
    assert f"# left out: temp: {reason}" in made.text
    plan_of(made, tmp_path)


def test_text_among_more_numbers_than_are_told_apart_is_named(tmp_path: Path) -> None:
    lines = [f"{at % 9}.5,{'-' if at == 2500 else f'{at}.25'},{'ok' if at % 3 else 'bad'}" for at in range(3000)]
    made = draft(file_of(tmp_path, "x,temp,state", lines))
    assert why(made, "temp")[1].startswith('it has "-" beside numbers')


def test_column_that_may_count_equal_rows_says_so(tmp_path: Path) -> None:
    made = draft(file_of(tmp_path, "x,count,state", readings(("3", "5", "9", "2"), ("ok", "bad", "ok"))))
    said = 'the header names no unit; if it counts equal rows, write weight = "count" in [rows] and remove this input'
    assert why(made, "count") == ("input", said)
    assert plan_of(made, tmp_path)["input"][1]["name"] == "count"


def test_model_is_never_called_as_the_test_vectors_are(tmp_path: Path) -> None:
    made = draft(file_of(tmp_path, "x,state", readings(("ok", "bad")), name="vectors.csv"))
    assert plan_of(made, tmp_path)["model"] == "model"
