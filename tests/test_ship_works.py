"""Rows that look wrong and are not: `fit` takes them, and says what was trained."""

from __future__ import annotations

import csv
import json
import math
from pathlib import Path

import numpy as np
import pyarrow
import pytest
from pyarrow import parquet

from export.commands import main

PLAN = """
model = "pump"
[rows]
file = "runs.csv"
label = "state"
classes = ["sound", "bad"]
held_out = 0
MORE
[[input]]
name = "flow"
[[input]]
name = "wheel"
levels = ["closed", "open"]
[prior]
sd = 1.0
"""
N = 60
FLOWS = [((at * 37) % 61) / 7 for at in range(N)]
WHEELS = [("closed", "open")[at % 3 == 0] for at in range(N)]
STATES = [("sound", "bad")[(flow + 3 * math.sin(at)) > 4] for at, flow in enumerate(FLOWS)]


def csv_of(flows: list[float], hours: list[float] | None = None) -> str:
    header = "flow,wheel,state" + (",hours\n" if hours else "\n")
    rows = zip(flows, WHEELS, STATES, hours or [""] * N, strict=True)
    return header + "".join(
        f"{flow!r},{wheel},{state}{f',{hour!r}' if hours else ''}\n" for flow, wheel, state, hour in rows
    )


def trained(folder: Path, rows: str | bytes, plan: str = PLAN, more: str = "") -> dict[str, object]:
    folder.mkdir(exist_ok=True)
    (folder / "plan.toml").write_text(plan.replace("MORE", more))
    (folder / "runs.csv").write_bytes(rows.encode() if isinstance(rows, str) else rows)
    assert main(["fit", str(folder / "plan.toml")]) == 0
    return json.loads((folder / "pump.trained.json").read_text())["trained"]


def weights_of(model: dict[str, object]) -> list[float]:
    (score,) = model["scores"]
    return [score["intercept"], *score["weights"]]


@pytest.mark.parametrize(
    "dressed",
    [
        lambda text: b"\xef\xbb\xbf" + text.encode(),
        lambda text: text.replace("\n", "\r\n").encode(),
        lambda text: text.rstrip("\n").encode(),
        lambda text: text.replace("closed", '"closed"').encode(),
    ],
    ids=["byte order mark", "CRLF", "no last line end", "quotes"],
)
def test_dress_of_the_file_changes_no_weight(dressed, tmp_path: Path) -> None:
    plain = trained(tmp_path / "plain", csv_of(FLOWS))
    other = trained(tmp_path / "other", dressed(csv_of(FLOWS)))
    assert weights_of(plain) == weights_of(other)


def test_quoted_commas_and_newlines_in_fields_belong_to_them(tmp_path: Path) -> None:
    plan = PLAN.replace('"closed"', '"clo,\\nsed"')
    model = trained(tmp_path / "quoted", csv_of(FLOWS).replace("closed", '"clo,\nsed"'), plan)
    assert model["inputs"][1]["levels"] == ["clo,\nsed", "open"]
    assert weights_of(model) == weights_of(trained(tmp_path / "plain", csv_of(FLOWS)))


@pytest.mark.parametrize("scale", [1e-12, 1e12])
def test_scale_of_a_column_changes_no_standardised_weight(scale: float, tmp_path: Path) -> None:
    # Standardised columns do not depend on the unit, but for the rounding of the scaled values (2^-53 of each).
    plain = weights_of(trained(tmp_path / "plain", csv_of(FLOWS)))
    scaled = weights_of(trained(tmp_path / "scaled", csv_of([flow * scale for flow in FLOWS])))
    np.testing.assert_allclose(scaled, plain, rtol=0, atol=2.0**-29)


def test_offset_of_a_billion_changes_no_log_odds(tmp_path: Path) -> None:
    # Multiples of 2^-10 stay exact beside 1e9, which has 30 bits. Two fits, each with a weight and an intercept on the
    # grid of 2^-30 and standardised values within 2: their log-odds differ by at most 2 * 2^-31 * (1 + 2 + 1).
    flows = [round(flow * 1024) / 1024 for flow in FLOWS]
    plan = PLAN + '[device]\narithmetic = "binary64"\n'
    log_odds = []
    for offset in (0.0, 1e9):
        model = trained(tmp_path / str(offset), csv_of([flow + offset for flow in flows]), plan)
        intercept, flow_weight, wheel_weight = weights_of(model)
        flow_term = model["terms"][0]
        columns = (np.array(flows) - (flow_term["centre"] - offset)) / flow_term["scale"]
        log_odds.append(intercept + flow_weight * columns + wheel_weight * np.array([w == "open" for w in WHEELS]))
    np.testing.assert_allclose(log_odds[1], log_odds[0], rtol=0, atol=2.0**-28)


def test_one_event_in_a_hundred_thousand_rows_is_fitted(tmp_path: Path) -> None:
    lines = [f"{(at * 7919) % 1000 / 10},{('closed', 'open')[at % 2]},sound\n" for at in range(100_000)]
    model = trained(tmp_path / "rare", "flow,wheel,state\n" + "".join(lines) + "99.5,open,bad\n")
    assert model["class_weights"] == [100_000.0, 1.0]
    intercept, flow, _ = weights_of(model)
    assert -14 <= intercept <= -math.log(100_000) / 1.05
    assert flow > 0


def test_more_columns_than_rows_fit_with_a_prior(tmp_path: Path) -> None:
    # 10 rows, 30 columns. The optimum's own condition: each weight is sd^2 times its column's residual sum, sd = 1.
    values = np.random.default_rng(5).normal(size=(10, 30)).round(3)
    states = ["sound", "bad"] * 5
    header = ",".join(f"x{j}" for j in range(30)) + ",state\n"
    text = header + "".join(
        ",".join(map(str, row)) + f",{state}\n" for row, state in zip(values.tolist(), states, strict=True)
    )
    plan = PLAN.partition("[[input]]")[0] + "[prior]\nsd = 1.0\n"
    model = trained(tmp_path / "wide", text, plan)
    weights = np.array(weights_of(model))
    columns = (values - values.mean(axis=0)) / values.std(axis=0)
    probability = 1 / (1 + np.exp(-(weights[0] + columns @ weights[1:])))
    residual = np.array([state == "bad" for state in states]) - probability
    np.testing.assert_allclose(columns.T @ residual, weights[1:], rtol=0, atol=1e-7)
    assert abs(residual.sum()) <= 1e-7


def test_weight_of_zero_has_no_influence(tmp_path: Path) -> None:
    # Rows of weight 0 whose values would widen every range, fill another class, and move the split.
    hours = [1.0 + at % 4 for at in range(N)]
    more = 'weight = "hours"'
    plan = PLAN.replace("held_out = 0", "held_out = 0.25")
    without = trained(tmp_path / "without", csv_of(FLOWS, hours), plan, more)
    zeros = "".join(f"{500 + at},open,bad,0\n" for at in range(40))
    added = trained(tmp_path / "added", csv_of(FLOWS, hours) + zeros, plan, more)
    assert (added["rows"]["total"], without["rows"]["total"]) == (N + 40, N)
    for model in (without, added):
        del model["rows"]
    assert added == without


def test_weight_of_1e12_outweighs_every_other_row(tmp_path: Path) -> None:
    hours = [1.0] * N
    bad, sound = STATES.index("bad"), STATES.index("sound")
    hours[bad], hours[sound] = 1e12, 3e12
    model = trained(tmp_path / "heavy", csv_of(FLOWS, hours), more='weight = "hours"')
    others = STATES.count("bad") - 1
    assert model["class_weights"] == [3e12 + N - 2 - others, 1e12 + others]


def test_integer_weights_are_the_rows_as_often(tmp_path: Path) -> None:
    hours = [1 + at % 3 for at in range(N)]
    often = "flow,wheel,state\n" + "".join(
        f"{flow!r},{wheel},{state}\n" * hour
        for flow, wheel, state, hour in zip(FLOWS, WHEELS, STATES, hours, strict=True)
    )
    weighted = trained(tmp_path / "weighted", csv_of(FLOWS, [float(hour) for hour in hours]), more='weight = "hours"')
    assert weights_of(weighted) == weights_of(trained(tmp_path / "often", often))


def toml(text: str) -> str:
    return '"' + "".join(f"\\U{ord(character):08x}" for character in text) + '"'


def test_hostile_text_ships_and_every_artefact_runs(tmp_path: Path) -> None:
    # Text from the plan and from the rows that would be code, a comment's end, or a terminal's command anywhere else.
    classes = ['so"und\n', "b*/ad\a??/"]
    levels = ["*/ int planted; /*", '"""', "??/\n{{ 7 * 7 }}\u202e\a\\"]
    column, unit, purpose = 'Fl"ow,\n*/\u202e', '*/"""\\\n\a{{', "*/ #error planted\n''' \\N{x} %s {0} \u2028\x85\x7f"
    (tmp_path / "plan.toml").write_text(
        f"""model = "pump"
        purpose = {toml(purpose)}
        rows = {{ file = "runs.csv", label = {toml('sta"te')}, classes = [{", ".join(map(toml, classes))}] }}
        input = [{{ name = "flow", column = {toml(column)}, unit = {toml(unit)} }},
                 {{ name = "wheel", levels = [{", ".join(map(toml, levels))}] }}]
        prior = {{ sd = 1.0 }}
        """
    )
    with (tmp_path / "runs.csv").open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream)
        writer.writerow([column, "wheel", 'sta"te'])
        for at, flow in enumerate(FLOWS):
            writer.writerow([flow, levels[at % 3], classes[STATES[at] == "bad"]])
    assert main(["ship", str(tmp_path / "plan.toml")]) == 0
    sealed = json.loads((tmp_path / "release" / "pump.sealed.json").read_text())
    assert (sealed["model"]["classes"], sealed["model"]["inputs"][1]["levels"]) == (classes, levels)
    assert (sealed["model"]["inputs"][0]["unit"], sealed["about"]["purpose"]) == (unit, purpose)


LEAST = """
model = "pump"
[rows]
file = "FILE"
label = "state"
"""


def test_plan_of_model_file_and_label_ships(tmp_path: Path) -> None:
    (tmp_path / "plan.toml").write_text(LEAST.replace("FILE", "runs.csv"))
    (tmp_path / "runs.csv").write_text(csv_of(FLOWS).replace("flow,", "Flow [m³/h],"), encoding="utf-8")
    assert main(["ship", str(tmp_path / "plan.toml")]) == 0
    model = json.loads((tmp_path / "release" / "pump.trained.json").read_text())["trained"]
    assert [(entry["name"], entry["unit"], entry["levels"]) for entry in model["inputs"]] == [
        ("flow", "m³/h", []),
        ("wheel", "", ["closed", "open"]),
    ]
    assert model["classes"] == ["bad", "sound"]
    assert model["choice"]["method"] == "cross-validation"
    assert model["rows"]["held_out"] == round(N / 4)
    request = json.loads((tmp_path / "release" / "pump.sealed.json").read_text())["about"]["request"]
    assert [entry["assumed"] for entry in request["inputs"]] == [True, True]


def test_same_rows_in_any_file_are_the_same_model(tmp_path: Path) -> None:
    hours = [0.5 + at % 4 for at in range(N)]
    columns = {"flow": FLOWS, "wheel": WHEELS, "state": STATES, "hours": hours}
    header, *lines = csv_of(FLOWS, hours).splitlines(keepends=True)
    (tmp_path / "runs.csv").write_text(header + "".join(lines))
    (tmp_path / "a log.csv").write_text(header + "".join(lines[20:]))
    (tmp_path / "b log.csv").write_text(header + "".join(lines[:20]))
    np.savez(tmp_path / "runs.npz", **{name: np.array(column) for name, column in columns.items()})
    parquet.write_table(pyarrow.table(columns), tmp_path / "runs.parquet")
    sealed = []
    for file in ("runs.csv", "runs.npz", "runs.parquet", "*log.csv"):
        (tmp_path / "plan.toml").write_text(LEAST.replace("FILE", file) + 'weight = "hours"\n')
        assert main(["fit", str(tmp_path / "plan.toml")]) == 0
        sealed.append(json.loads((tmp_path / "pump.sealed.json").read_text())["model"])
    assert sealed == [sealed[0]] * 4


def test_levels_and_labels_may_be_numbers_and_truth_values_as_texts(tmp_path: Path) -> None:
    plan = PLAN.replace('["sound", "bad"]', '["False", "True"]').replace('["closed", "open"]', '["0", "1.0"]')
    text = csv_of(FLOWS).replace("sound", "False").replace("bad", "True").replace("closed", "0").replace("open", "1.0")
    model = trained(tmp_path / "texts", text, plan)
    assert model["classes"] == ["False", "True"]
    assert weights_of(model) == weights_of(trained(tmp_path / "plain", csv_of(FLOWS)))
