"""Rows that are hard on a fit and on the check of it: `ship` holds every check on them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from export.commands import main

Columns = dict[str, np.ndarray]


def ordinary(count: int = 400, inputs: int = 2, events: float = 0.5) -> Columns:
    """Invented readings x0, x1, … and a state that depends on the first two, with honest overlap."""
    rng = np.random.default_rng(count + inputs)
    table: Columns = {f"x{position}": rng.normal(size=count) for position in range(inputs)}
    z = 1.2 * table["x0"] - 0.8 * table["x1"] + rng.normal(size=count)
    table["state"] = np.where(z > np.quantile(z, 1 - events), "bad", "ok")
    return table


def changed(table: Columns, **columns: np.ndarray) -> Columns:
    return {**table, **columns}


def weighed(table: Columns) -> Columns:
    weights = np.ones(len(table["x0"]))
    weights[::7], weights[3] = 0.0, 1e12
    return changed(table, hours=weights)


BASE = ordinary()
ROWS = {
    "an offset of 1e9": (changed(BASE, x0=BASE["x0"] + 1e9), "binary64"),
    "an offset of 1e9 in int32": (changed(BASE, x0=BASE["x0"] + 1e9), "int32"),
    "an offset of 1e9 and a spread of 1e-3": (changed(BASE, x0=BASE["x0"] * 1e-3 + 1e9), "binary64"),
    "scales of 1e12 and 1e-12": (changed(BASE, x0=BASE["x0"] * 1e12, x1=BASE["x1"] * 1e-12), "binary32"),
    "weights 0 and 1e12": (weighed(BASE), "binary32"),
    "more columns than rows": (ordinary(count=30, inputs=40), "binary32"),
    "columns that nearly repeat each other": (changed(BASE, twin=BASE["x0"] + 1e-5 * BASE["x1"][::-1]), "binary64"),
    "1 event in 100,000 rows": (ordinary(count=100_001, events=1e-5), "binary32"),
}


@pytest.mark.parametrize("name", ROWS)
def test_hard_rows_ship_with_every_check(name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    table, arithmetic = ROWS[name]
    lines = [",".join(map(str, row)) for row in zip(*(column.tolist() for column in table.values()), strict=True)]
    (tmp_path / "rows.csv").write_text("\n".join([",".join(table), *lines]) + "\n", encoding="utf-8")
    sd = "inf" if "twin" in table else "1.0"
    weight = 'weight = "hours"\n' if "hours" in table else ""
    (tmp_path / "plan.toml").write_text(
        f'model = "hard"\n[rows]\nfile = "rows.csv"\nlabel = "state"\nclasses = ["ok", "bad"]\nheld_out = 0\n{weight}'
        f'[prior]\nsd = {sd}\n[device]\narithmetic = "{arithmetic}"\n[release]\nwrite = ["python"]\n',
        encoding="utf-8",
    )
    status = main(["ship", str(tmp_path / "plan.toml")])
    printed = capsys.readouterr()
    assert (status, printed.err) == (0, ""), printed.out
