"""Random plans over random rows: shipped for real, every artefact gives the same bits, every error is in the budget."""

from __future__ import annotations

import contextlib
import io
import json
import random
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from export.check import check_release
from export.commands import main
from runtime_min.codec import load, load_trained, sealed_text, trained_text

ARITHMETICS = ("binary32", "binary64", "int16", "int32")


@st.composite
def plans(draw: st.DrawFn, folder: Path) -> Path:
    """A plan and its rows: one to five inputs of any place and width, some with levels, policies, costs and a prior."""
    rng = random.Random(draw(st.integers(0, 2**32)))
    count = draw(st.integers(1, 5))
    arithmetic = draw(st.sampled_from(ARITHMETICS))
    tables, columns = [], []
    for at in range(count):
        if at and draw(st.booleans()):
            tables.append(f'[[input]]\nname = "i{at}"\nlevels = ["a", "b", "c"]\nmissing = "typical"\n')
            columns.append([rng.choice(["a", "b", "c", "c", ""]) for _ in range(150)])
            continue
        middle, width = draw(st.sampled_from([0.0, 3.5, -400.0])), draw(st.sampled_from([0.02, 1.0, 90.0]))
        missing, outside = draw(st.sampled_from(["fault", "typical"])), draw(st.sampled_from(["fault", "clamp"]))
        limits = f"[{middle - 4 * width!r}, {middle + 4 * width!r}]"
        table = f'[[input]]\nname = "i{at}"\nrange = {limits}\nmissing = "{missing}"\noutside = "{outside}"\n'
        tables.append(table)
        readings = [
            f"{min(max(rng.gauss(middle, width), middle - 3.9 * width), middle + 3.9 * width)!r}" for _ in range(150)
        ]
        columns.append([text if rng.random() > 0.03 else "" for text in readings])
    strength = rng.gauss(0, 2)
    first = [float(text or "0") if text not in ("a", "b", "c") else 0.0 for text in columns[0]]
    labels = ["on" if strength * (x - first[0]) + rng.gauss(0, 1) > 0 else "off" for x in first]
    labels[:6] = ["on", "off"] * 3
    lines = [",".join([*(f"i{at}" for at in range(count)), "y"])]
    lines += [",".join([*row, label]) for *row, label in zip(*columns, labels, strict=True)]
    (folder / "rows.csv").write_text("\n".join(lines) + "\n")
    decision = (
        f"[decision]\ncost_miss = {draw(st.sampled_from([1, 7, 0.2]))}\nno_call = {draw(st.sampled_from([0, 0.5]))}\n"
    )
    if draw(st.booleans()):
        decision += "prevalence = 0.07\n"
    (folder / "plan.toml").write_text(
        'model = "random"\n[rows]\nfile = "rows.csv"\nlabel = "y"\nheld_out = 0.2\nclasses = ["off", "on"]\n'
        + "".join(tables)
        + f"[prior]\nsd = {draw(st.sampled_from(['0.5', '2.0']))}\n{decision}"
        + f'[device]\narithmetic = "{arithmetic}"\n[release]\nwrite = ["python", "c", "onnx", "table"]\n'
    )
    return folder / "plan.toml"


@pytest.mark.slow
@settings(max_examples=12, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
@given(data=st.data())
def test_random_plan_ships_with_the_same_bits_everywhere_and_every_file_reads_back(
    data: st.DataObject, tmp_path_factory: pytest.TempPathFactory
) -> None:
    folder = tmp_path_factory.mktemp("random")
    plan = data.draw(plans(folder))
    out, errors = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(errors):
        status = main(["ship", str(plan), "--json"])
    assert status == 0, (errors.getvalue(), out.getvalue(), plan.read_text())
    report = json.loads(out.getvalue())
    assert {check["artefact"].rpartition(".")[2] for check in report["checks"]} >= {"py", "h", "onnx"}
    assert report["budget"]["worst_found"] <= report["budget"]["log_odds"]
    release = folder / "release"
    for name, read, text in (("sealed", load, sealed_text), ("trained", load_trained, trained_text)):
        path = release / f"random.{name}.json"
        assert text(read(path)) == path.read_text(), name
    assert check_release(release).ok
