"""Time the fit against general-purpose references: `python tests/benchmarks/fit.py [rounds [rows]]` prints Markdown.

Ours is `standardise` and `solve` on raw columns: reproducible rounding, certificate and covariance included. The
references get the standardised columns, the same objective (Gaussian prior sd 1, flat intercept) and stop at the
gradient norm of our *rounded* weights, which is coarser than what the unrounded ones reach. Each round runs all of
them one after the other; a ratio is the median over rounds of reference / ours, 1 means as fast. References run with
1 and with 2 BLAS threads; ours limits itself to 1. Sets on which a reference stops short of the gradient norm do not
count; one that a first trial shows to be 4 times slower than the fastest is left out. Each timed run follows an
untimed one of the same kind, so that caches, threads and memory are in the state that it makes for itself.
Beside wall time stands the ratio of processor time for one thread, which other work on the machine disturbs less.
Data: invented, normal columns with correlations, balanced classes, seeds fixed. Several sets a size where a fit is
short, since what one takes hangs on chance: a weight or a centre that lies beside a midpoint costs a closer look.
"""

from __future__ import annotations

import os
import sys
import time
import warnings
from collections.abc import Callable
from pathlib import Path

if "OPENBLAS_CORETYPE" in os.environ:  # the kernel that the machine would choose by itself is the one to time
    del os.environ["OPENBLAS_CORETYPE"]
    os.execv(sys.executable, [sys.executable, *sys.argv])

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
import scipy
import sklearn
from scipy.optimize import minimize
from scipy.special import expit
from sklearn.linear_model import LogisticRegression
from threadpoolctl import threadpool_info, threadpool_limits

from trainer.objective import Prior
from trainer.solve import solve
from trainer.standardise import Standardised, standardise

# Rows, columns, how many times faster we aim to be, sets.
SIZES = ((1_000, 8, 3.0, 5), (10_000, 30, 1.5, 5), (100_000, 50, 2.0, 1))
FIRST_SEED = 11
SKLEARN_SOLVERS = ("lbfgs", "newton-cg", "newton-cholesky")
THREADS = (1, 2)
_CALM = 0.15  # seconds until the threads of a two-thread run no longer wait in a loop

Array = np.ndarray
Fit = Callable[[], Array]


def invented_rows(rows: int, width: int, seed: int = FIRST_SEED) -> tuple[Array, Array]:
    draws = np.random.default_rng(seed)
    mixing = np.eye(width) + 0.9 * draws.normal(size=(width, width)) / np.sqrt(width)
    values = draws.normal(size=(rows, width)) @ mixing
    log_odds = values @ draws.normal(size=width) * 1.2 / np.sqrt(width)
    return values * np.exp(draws.normal(size=width)) + 5.0, (draws.random(rows) < expit(log_odds)).astype(int)


def gradient_norm(columns: Array, labels: Array, theta: Array) -> float:
    """Largest |component| of the gradient of the mean loss, the measure by which scikit-learn stops."""
    residual = expit(columns @ theta[1:] + theta[0]) - labels
    return float(np.abs(np.append(columns.T @ residual + theta[1:], residual.sum())).max()) / len(labels)


def scikit_learn(columns: Array, labels: Array, solver: str, tolerance: float) -> Fit:
    def fit() -> Array:
        model = LogisticRegression(C=1.0, solver=solver, tol=tolerance, max_iter=5000).fit(columns, labels)
        return np.append(model.intercept_, model.coef_)

    return fit


def trust_exact(columns: Array, labels: Array, tolerance: float) -> Fit:
    design = np.column_stack((np.ones(len(labels)), columns))
    signs = 1.0 - 2.0 * labels
    ridge = np.append(0.0, np.ones(columns.shape[1]))

    def value_and_gradient(theta: Array) -> tuple[float, Array]:
        t = signs * (design @ theta)
        value = np.logaddexp(0.0, t).sum() + 0.5 * ridge @ theta**2
        return value, (signs * expit(t)) @ design + ridge * theta

    def hessian(theta: Array) -> Array:
        p = expit(design @ theta)
        return (design * (p * (1.0 - p))[:, np.newaxis]).T @ design + np.diag(ridge)

    def fit() -> Array:
        start = np.zeros(design.shape[1])
        options = {"gtol": tolerance * len(labels)}
        return minimize(value_and_gradient, start, jac=True, hess=hessian, method="trust-exact", options=options).x

    return fit


def seconds(fit: Fit) -> tuple[float, float]:
    """Wall and processor time of one fit."""
    fit()
    before, used = time.perf_counter(), time.process_time()
    fit()
    return time.perf_counter() - before, time.process_time() - used


class OneSet:
    """One set of rows: our fit, and the references that are to reach its gradient norm."""

    def __init__(self, rows: int, width: int, seed: int) -> None:
        self.values, self.labels = invented_rows(rows, width, seed)
        self.numeric = [True] * width
        self.prior = Prior((0.0,) * width, (1.0,) * width)
        self.columns = self.standard().columns
        self.tolerance = self.norm(self.ours())

    def standard(self) -> Standardised:
        return standardise(self.values, None, self.numeric)

    def ours(self) -> Array:
        solution = solve(self.standard().columns, self.labels, None, self.prior)
        return np.append(solution.intercept, solution.weights)

    def norm(self, theta: Array) -> float:
        return gradient_norm(self.columns, self.labels, theta)

    def reference(self, name: str) -> Fit:
        if name == "scipy trust-exact":
            return trust_exact(self.columns, self.labels, self.tolerance)
        return scikit_learn(self.columns, self.labels, name.removeprefix("scikit-learn "), self.tolerance)


def one_size(rows: int, width: int, aim: float, count: int, rounds: int) -> list[str]:
    sets = [OneSet(rows, width, FIRST_SEED + index) for index in range(count)]
    names = [*(f"scikit-learn {solver}" for solver in SKLEARN_SOLVERS), "scipy trust-exact"]
    entries = [(name, threads) for name in names for threads in THREADS]
    trial, reached = {}, {}  # seconds on the first set; the sets whose gradient norm it reaches
    for name, threads in entries:
        with threadpool_limits(threads):
            fits = [(one, one.reference(name)) for one in sets]
            trial[name, threads] = min(seconds(fits[0][1])[0] for _ in range(3 if count > 1 else 1))
            reached[name, threads] = [one.norm(fit()) <= 1.5 * one.tolerance for one, fit in fits]
    counted = [entry for entry in entries if any(reached[entry])]
    fastest = min(trial[entry] for entry in counted)
    entries = [entry for entry in counted if trial[entry] <= 4.0 * fastest]
    own, standard, others = [], [], {entry: [] for entry in entries}
    for turn in range(rounds):
        one = sets[turn % count]
        time.sleep(_CALM)
        own.append(seconds(one.ours))
        standard.append(seconds(one.standard))
        for name, threads in entries:
            with threadpool_limits(threads):
                others[name, threads].append(seconds(one.reference(name)))
    ratio = {}
    for entry, times in others.items():
        quotients = np.array(times) / np.array(own)
        ratio[entry] = np.median([q for turn, q in enumerate(quotients) if reached[entry][turn % count]], axis=0)
    strongest = min(entries, key=lambda entry: ratio[entry][0])
    lines = [
        f"| {rows:,} x {width} | ours | {_milliseconds(own)} (standardisation {_milliseconds(standard)}) | 1 | 1 |"
    ]
    for entry in sorted(entries, key=lambda entry: ratio[entry][0]):
        name, threads = entry
        wall, processor = (f"{value:.2f}" for value in ratio[entry])
        shown = f"**{wall}** (aim {aim:g})" if entry == strongest else wall
        told = f"{name}, {threads} thread{'s' if threads > 1 else ''}"
        if not all(reached[entry]):
            told += f", on {sum(reached[entry])} of {count} sets, short of it on the others"
        lines.append(f"| | {told} | {_milliseconds(others[entry])} | {shown} | {processor if threads == 1 else ''} |")
    return lines


def _milliseconds(times: list[tuple[float, float]]) -> str:
    return f"{1e3 * np.median(np.array(times)[:, 0]):.2f}"


def main() -> None:
    warnings.simplefilter("ignore")  # a solver that stops short says so; the table does too
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 7
    kernels = sorted({entry["architecture"] for entry in threadpool_info() if entry["internal_api"] == "openblas"})
    print(
        f"OpenBLAS kernel {', '.join(kernels)}; {os.cpu_count()} cores, load {os.getloadavg()[0]:.1f}; numpy", end=" "
    )
    print(
        f"{np.__version__}, scipy {scipy.__version__}, scikit-learn {sklearn.__version__}; {rounds} rounds of the",
        end="",
    )
    print(" largest size, 3 times as many of the others\n")
    print("| rows x columns | fit | median ms | times ours, wall | processor |")
    print("|---|---|---|---|---|")
    chosen = [size for size in SIZES if len(sys.argv) < 3 or size[0] == int(sys.argv[2])]
    for rows, width, aim, count in chosen:
        print("\n".join(one_size(rows, width, aim, count, rounds if count == 1 else 3 * rounds)), flush=True)
    print(f"\nload at the end {os.getloadavg()[0]:.1f}")


if __name__ == "__main__":
    main()
