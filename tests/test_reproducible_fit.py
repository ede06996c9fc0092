"""The same rows give the same centres, scales and weights, bit for bit, in any order, with any threads, blocks, kernel.

Six sets and a large one, 20 orders each, times 1 and 2 BLAS threads, times 2 block sizes; then the same in fresh
interpreters under two BLAS kernels. A control shows that plain sums and unrounded weights give many results.
"""

from __future__ import annotations

import itertools
import json
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from threadpoolctl import threadpool_info, threadpool_limits

from trainer import solve as solve_module
from trainer.objective import BLOCK_ROWS, Prior, objective_of
from trainer.solve import solve
from trainer.standardise import class_sums, standardise

Rows = tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.float64] | None, list[bool], Prior]

ORDERS = 20
THREADS = (1, 2)
BLOCKS = (256, BLOCK_ROWS)
ROOT = Path(__file__).resolve().parent.parent


def _labels(draws: np.random.Generator, log_odds: NDArray[np.float64]) -> NDArray[np.int64]:
    return (draws.random(len(log_odds)) < 1.0 / (1.0 + np.exp(-log_odds))).astype(np.int64)


def _ridge(width: int, sd: float = 1.0) -> Prior:
    return Prior((0.0,) * width, (sd,) * width)


def ordinary() -> Rows:
    draws = np.random.default_rng(1)
    values = draws.normal(size=(2000, 6)) @ draws.normal(size=(6, 6))
    return values, _labels(draws, 0.5 * values[:, 0]), None, [True] * 6, _ridge(6)


def near_duplicates() -> Rows:
    """Correlation 1 − 1e-10: the difference of the two weights hangs on the last bits."""
    draws = np.random.default_rng(2)
    values = draws.normal(size=(1500, 3))
    values = np.column_stack((values, values[:, 0] + 1.4e-5 * draws.normal(size=1500)))
    return values, _labels(draws, values[:, 0]), None, [True] * 4, _ridge(4, 30.0)


def row_weights_far_apart() -> Rows:
    draws = np.random.default_rng(3)
    values = draws.normal(size=(1200, 4))
    weights = draws.choice([0.0, 1e-3, 1.0, 7.3, 1e12], size=1200)
    return values, _labels(draws, values[:, 1]), weights, [True] * 4, _ridge(4)


def offsets_and_scales() -> Rows:
    draws = np.random.default_rng(4)
    values = draws.normal(size=(1800, 5))
    labels = _labels(draws, values.sum(axis=1))
    return (
        values * (1e-12, 1.0, 1e12, 1.0, 1e3) + (0.0, 1e9, 0.0, -77.7, 1e7),
        labels,
        None,
        [True] * 5,
        _ridge(5, float("inf")),
    )


def rare_event_and_levels() -> Rows:
    """Readings of two decimals, level indicators, 9 events in 15,000 rows."""
    draws = np.random.default_rng(5)
    rows = 15_000
    level = draws.integers(3, size=rows)
    values = np.column_stack((np.round(draws.normal(size=(rows, 3)) * 20 + 50, 2), level == 1, level == 2))
    labels = np.zeros(rows, dtype=np.int64)
    labels[draws.choice(rows, 9, replace=False)] = 1
    return values, labels, None, [True, True, True, False, False], _ridge(5, 0.5)


def more_columns_than_rows() -> Rows:
    draws = np.random.default_rng(6)
    values = draws.normal(size=(60, 90)) ** 3
    return values, _labels(draws, values[:, 0]), draws.random(60), [True] * 90, _ridge(90, 0.3)


def many_rows() -> Rows:
    """Large enough for the path over a sample and limited-memory steps."""
    draws = np.random.default_rng(7)
    values = draws.normal(size=(9000, 24)) + draws.normal(size=(9000, 1))
    return values, _labels(draws, values[:, 0] - values[:, 1]), None, [True] * 24, _ridge(24)


SETS: dict[str, Callable[[], Rows]] = {
    maker.__name__: maker
    for maker in (
        ordinary,
        near_duplicates,
        row_weights_far_apart,
        offsets_and_scales,
        rare_event_and_levels,
        more_columns_than_rows,
        many_rows,
    )
}


def orders(rows: int) -> list[NDArray[np.intp]]:
    """As they come, backwards, and shuffled."""
    shuffles = [np.random.default_rng(seed).permutation(rows) for seed in range(ORDERS - 2)]
    return [np.arange(rows), np.arange(rows)[::-1], *shuffles]


def fit_bits(rows: Rows, order: NDArray[np.intp], block_rows: int) -> tuple[str, ...]:
    """Every number that the model id hangs on, in hexadecimal."""
    values, labels, row_weights, numeric, prior = rows
    weights = None if row_weights is None else row_weights[order]
    standardised = standardise(values[order], weights, numeric, block_rows=block_rows)
    solution = solve(standardised.columns, labels[order], weights, prior, block_rows=block_rows)
    numbers = (
        *standardised.centres,
        *standardised.scales,
        solution.intercept,
        *solution.weights,
        *class_sums(labels[order], weights, 2),
    )
    return tuple(number.hex() for number in numbers)


@pytest.mark.parametrize("name", SETS)
def test_order_threads_and_blocks_change_no_bit(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(solve_module, "_blas", [])  # the fit's own limit, so that two threads do add in another order
    rows = SETS[name]()
    found = set()
    for threads in THREADS:
        with threadpool_limits(threads, user_api="blas"):
            found |= {fit_bits(rows, order, b) for order, b in itertools.product(orders(len(rows[1])), BLOCKS)}
    assert len(found) == 1


@pytest.mark.parametrize("name", SETS)
def test_plain_sums_and_unrounded_weights_would_not_do(name: str) -> None:
    """The control: the same orders change a plain mean, and the weights before they are rounded."""
    values, labels, row_weights, numeric, prior = SETS[name]()
    columns = standardise(values, row_weights, numeric).columns
    means, weights = set(), set()
    for order in orders(len(labels)):
        own = None if row_weights is None else row_weights[order]
        means.add(tuple(np.average(values[order], axis=0, weights=own)))
        objective = objective_of(columns[order], labels[order], own, prior)
        reached, _ = solve_module._newton(objective, np.zeros(len(objective.means)), None, 1e-9, BLOCK_ROWS)
        weights.add(tuple(reached))
    assert len(means) > 1
    assert len(weights) > 1


def test_two_blas_kernels_give_the_same_bits() -> None:
    """In fresh interpreters, since the kernel is chosen when the library is loaded; all orders of each set."""
    kernels = ("Haswell", "Prescott") if _is_x86() else ("ARMV8", "NEOVERSEN1")
    answers = {kernel: _under_kernel(kernel) for kernel in kernels}
    first, second = answers.values()
    assert first["kernel"] != second["kernel"]
    assert first["bits"] == second["bits"]
    assert first["bits"] == _bits_of_all_orders()


def _is_x86() -> bool:
    return os.uname().machine in ("x86_64", "AMD64")


def _bits_of_all_orders() -> dict[str, list[list[str]]]:
    found = {}
    for name, make in SETS.items():
        rows = make()
        found[name] = [list(fit_bits(rows, order, BLOCK_ROWS)) for order in orders(len(rows[1]))]
    return found


def _under_kernel(kernel: str) -> dict[str, object]:
    environment = {**os.environ, "OPENBLAS_CORETYPE": kernel, "PYTHONPATH": f"{ROOT}{os.pathsep}{ROOT / 'tests'}"}
    done = subprocess.run(
        [sys.executable, str(Path(__file__).resolve())],
        env=environment,
        capture_output=True,
        text=True,
        check=True,
        timeout=300,
    )
    answer: dict[str, object] = json.loads(done.stdout)
    return answer


if __name__ == "__main__":
    kernel_names = sorted({entry["architecture"] for entry in threadpool_info() if entry["internal_api"] == "openblas"})
    print(json.dumps({"kernel": kernel_names, "bits": _bits_of_all_orders()}))
