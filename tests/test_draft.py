"""A draft of a plan: every guess said and reasoned, and the draft ships as it stands."""

from __future__ import annotations

import contextlib
import io
import random
import tomllib
from pathlib import Path

import pytest
from shipped import EXAMPLE

from export.commands import main
from runtime_min.errors import RowsError
from trainer.draft import Draft, draft
from trainer.plan import read_plan


def invented(
    path: Path, headers: list[str], rows: int = 120, seed: int = 3, event: str = "yes", other: str = "no"
) -> Path:
    """A CSV of invented readings; the last column is the label, and it depends a little on the first."""
    rng = random.Random(seed)
    lines = [",".join(headers)]
    for _ in range(rows):
        values = [rng.gauss(10 * (at + 1), 3) for at in range(len(headers) - 1)]
        label = event if values[0] + rng.gauss(0, 3) > 12 else other
        lines.append(",".join([*(f"{value:.2f}" for value in values), label]))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def plan_of(made: Draft, folder: Path) -> dict:
    """The draft's tables; it must be a plan that reads without a mistake."""
    (folder / "plan.toml").write_text(made.text, encoding="utf-8")
    read_plan(folder / "plan.toml")
    return tomllib.loads(made.text)


def shipped(folder: Path) -> str:
    """What `ship` prints for the plan in a folder; it must succeed. Running C is left to other tests."""
    out = io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(out):
        status = main(["ship", str(folder / "plan.toml"), "--unchecked", "c"])
    assert status == 0, out.getvalue()
    return out.getvalue()


@pytest.mark.parametrize(
    ("header", "name", "unit"),
    [
        ("flow_m3_h", "flow", "m3/h"),
        ("suction_kPa", "suction", "kPa"),
        ("Motor current [A]", "motor_current", "A"),
        ("vibration_mm_s", "vibration", "mm/s"),
        ("temp_C", "temp", "°C"),
        ("speed rpm", "speed", "rpm"),
        ("level", "level", ""),
        ("for", "input_for", ""),
        ("2nd stage", "input_2nd_stage", ""),
    ],
)
def test_name_and_unit_come_from_the_header(header: str, name: str, unit: str, tmp_path: Path) -> None:
    plan = plan_of(draft(invented(tmp_path / "runs.csv", [header, "other", "alarm"])), tmp_path)
    assert (plan["input"][0]["name"], plan["input"][0]["unit"]) == (name, unit)
    assert plan["input"][0]["column"] == header


def test_draft_of_the_example_finds_label_event_group_levels_and_what_is_missing(tmp_path: Path) -> None:
    (tmp_path / "runs.csv").write_bytes((EXAMPLE / "runs.csv").read_bytes())
    made = draft(tmp_path / "runs.csv")
    plan = plan_of(made, tmp_path)
    assert plan["rows"]["label"] == "State"
    assert plan["rows"]["classes"] == ["sound", "cavitating"]
    assert plan["rows"]["group"] == "Pump"
    by_column = {entry["column"]: entry for entry in plan["input"]}
    assert by_column["Impeller"]["levels"] == ["closed", "open", "semi_open"]
    assert by_column["Water temperature"]["missing"] == "typical"
    said = {guess.column: (guess.taken_for, guess.why) for guess in made.guesses}
    assert said["cavitating"] == ("event", "it is the rarer class (636 of 3,000 rows)")
    assert said["Pump"] == ("group", "12 texts, each in many rows")


def test_draft_of_the_example_ships_as_it_stands(tmp_path: Path) -> None:
    (tmp_path / "runs.csv").write_bytes((EXAMPLE / "runs.csv").read_bytes())
    (tmp_path / "plan.toml").write_text(draft(tmp_path / "runs.csv").text, encoding="utf-8")
    assert "checks hold" in shipped(tmp_path)


def test_range_is_a_tenth_wider_than_the_rows_on_each_side(tmp_path: Path) -> None:
    (tmp_path / "runs.csv").write_text("x,y\n" + "".join(f"{7 * x % 101},{'ab'[x % 3 > 0]}\n" for x in range(101)))
    plan = plan_of(draft(tmp_path / "runs.csv"), tmp_path)
    assert plan["input"][0]["range"] == [-10.0, 110.0]


def test_columns_that_cannot_be_inputs_are_left_out_with_the_reason(tmp_path: Path) -> None:
    lines = ["row,fixed,note,empty,x,state"]
    lines += [f"{at},7,text {at},,{at % 17},{'ok' if at % 3 else 'bad'}" for at in range(1, 91)]
    (tmp_path / "runs.csv").write_text("\n".join(lines) + "\n")
    made = draft(tmp_path / "runs.csv")
    plan = plan_of(made, tmp_path)
    assert [entry["name"] for entry in plan["input"]] == ["x"]
    assert plan["rows"]["classes"] == ["ok", "bad"]
    assert {guess.column: guess.why for guess in made.guesses if guess.taken_for == "left out"} == {
        "row": "it counts the rows",
        "fixed": "it has one value",
        "note": "its texts are too many for levels",
        "empty": "it is empty",
    }


def test_draft_of_few_rows_holds_none_out_and_ships(tmp_path: Path) -> None:
    path = invented(tmp_path / "runs.csv", ["x", "y", "state"], rows=24)
    (tmp_path / "plan.toml").write_text(draft(path).text, encoding="utf-8")
    assert "held_out = 0 " in (tmp_path / "plan.toml").read_text(encoding="utf-8")
    shipped(tmp_path)


def test_hostile_headers_and_classes_stay_text_and_ship(tmp_path: Path) -> None:
    headers = ['"a ""b"" [*/]"', '"x\n]\ny"', "ü{{7*7}}", "\u202ereversed", "state"]
    path = invented(tmp_path / "runs.csv", headers, event="bad\u2028", other='"""ok"""')
    (tmp_path / "plan.toml").write_text(draft(path).text, encoding="utf-8")
    shipped(tmp_path)


def test_file_without_a_column_of_two_values_is_refused_with_a_sentence(tmp_path: Path) -> None:
    (tmp_path / "runs.csv").write_text("x,y\n1,2\n3,4\n5,6\n")
    with pytest.raises(RowsError, match="found no column with exactly two values; add the column with the class"):
        draft(tmp_path / "runs.csv")


def test_command_writes_the_plan_says_every_guess_and_never_overwrites(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = invented(tmp_path / "runs.csv", ["flow_m3_h", "y", "alarm"])
    place = tmp_path / "plans" / "mine.toml"
    assert main(["draft", str(path), "--into", str(place)]) == 0
    assert "flow_m3_h: the header ends in m3_h" in capsys.readouterr().out
    assert read_plan(place).rows.file.resolve() == path
    assert main(["draft", str(path), "--into", str(place)]) == 2
    assert capsys.readouterr().err == f"{place}: is there already; choose another --into, or remove it\n"
