"""Rows of the data in a release: only where the plan says so, and then as the device delivers them. Invented rows."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from test_fit_plan_prior import written

from export import check_release, write_release
from export.vectors import make_vectors, self_test_of
from export.witness import witness_rows
from runtime_min.model import SealedModel, TrainedModel
from runtime_min.sealing import seal_request
from trainer import fit_plan, read_plan, read_rows
from trainer.request import request_of


def made(folder: Path, real: bool, arithmetic: str = "binary32") -> tuple[TrainedModel, SealedModel]:
    path = written(folder, prior="sd = 1.0", decision="prevalence = 0.05", real=real)
    path.write_text(path.read_text(encoding="utf-8") + f'[device]\narithmetic = "{arithmetic}"\n', encoding="utf-8")
    plan = read_plan(path)
    rows = read_rows(plan)
    trained = fit_plan(plan, rows)
    return trained, seal_request(trained, request_of(plan, rows))


@pytest.mark.parametrize("arithmetic", ["binary32", "binary64"])
def test_vectors_hold_the_witness_rows_only_where_the_plan_allows_real_rows(arithmetic: str, tmp_path: Path) -> None:
    rounded = np.float32 if arithmetic == "binary32" else np.float64
    trained, sealed = made(tmp_path, True, arithmetic)
    vectors = make_vectors(sealed, trained)
    shown = [vector.inputs for vector in vectors if vector.kind == "witness"]
    assert shown == [tuple(float(rounded(value)) for value in row.inputs) for row in trained.witness]
    assert all(vector.expected.fault == 0 for vector in vectors if vector.kind == "witness")
    invented = tuple(vector for vector in vectors if vector.kind != "witness")
    assert invented == make_vectors(sealed)
    assert self_test_of(sealed, vectors) == self_test_of(sealed, invented)
    trained, sealed = made(tmp_path, False, arithmetic)
    assert {vector.kind for vector in make_vectors(sealed, trained)} == {"random", "corner", "threshold", "policy"}


def test_integers_get_the_nearest_counts_of_the_witness_rows(tmp_path: Path) -> None:
    trained, sealed = made(tmp_path, True, "int16")
    shown = list(witness_rows(trained, sealed))
    assert len(shown) > 16
    assert all(isinstance(count, int) for row in shown for count in row)


def test_release_with_real_rows_holds_every_check(tmp_path: Path) -> None:
    trained, sealed = made(tmp_path, True)
    into = tmp_path / "release"
    report = write_release(sealed, trained, into, write=["python"])
    assert [entry for entry in report.checks if not entry.ok] == []
    assert (into / "vectors.csv").read_text(encoding="ascii").count("\nwitness,") == len(trained.witness)
    assert check_release(into).ok
