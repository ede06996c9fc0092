"""The two-class data sets of tests/check_values as arrays, beside their records."""

from __future__ import annotations

import csv
import json
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

FOLDER = Path(__file__).resolve().parent / "check_values"
TWO_CLASS_SETS = (
    "beetle",
    "crabs",
    "crabs_width_color",
    "iris_vv",
    "lowbwt_hl22",
    "lowbwt_vr",
    "orings_binary",
    "orings_grouped",
    "pima_tr",
    "spector",
    "spector_binary32",
    "womensrole",
)


@dataclass(frozen=True)
class CheckSet:
    """values (n, d), labels (n,) 0/1, row_weights (n,) or None, and the record with the outside values."""

    values: NDArray[np.float64]
    labels: NDArray[np.int64]
    row_weights: NDArray[np.float64] | None
    record: dict[str, Any]

    @property
    def numeric(self) -> list[bool]:
        """The records standardise every column, indicators too."""
        return [True] * self.values.shape[1]


@cache
def check_set(name: str) -> CheckSet:
    record = json.loads((FOLDER / "sets" / f"{name}.json").read_text(encoding="utf-8"))
    with (FOLDER / record["data"]).open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    weight = record.get("weight")
    return CheckSet(
        np.array([[float(row[column]) for column in record["inputs"]] for row in rows]),
        np.array([int(row[record["label"]] == record["event"]) for row in rows]),
        np.array([float(row[weight]) for row in rows]) if weight else None,
        record,
    )
