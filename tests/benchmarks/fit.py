"""Time the fit against general-purpose references: `python tests/benchmarks/fit.py [rounds]` prints a Markdown table.

Ours is `standardise` and `solve` on raw columns: reproducible rounding, certificate and covariance included. The
references get the standardised columns, the same objective (Gaussian prior sd 1, flat intercept) and stop at the
gradient norm of our *rounded* weights, which is coarser than what the unrounded ones reach. Each round runs all of
them one after the other; a ratio is the median over rounds of reference / ours, 1 means as fast. References run with
1 and with 2 BLAS threads; ours limits itself to 1. A reference that stops short of the gradient norm does not count;
one that a first trial shows to be 3 times slower than the fastest reference is left out. Each timed run follows an
untimed one of the same kind, so that caches, threads and memory are in the state that it makes for itself.
Beside wall time stands the ratio of processor time for one thread, which other work on the machine disturbs less.
Data: invented, normal columns with correlations, balanced classes, seed fixed.
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
from trainer.standardise import standardise

SIZES = ((1_000, 8, 3.0), (10_000, 30, 1.5), (100_000, 50, 2.0))  # rows, columns, how many times faster we aim to be
SKLEARN_SOLVERS = ("lbfgs", "newton-cg", "newton-cholesky")
THREADS = (1, 2)
_CALM = 0.15  # seconds until the threads of a two-thread run no longer wait in a loop

Array = np.ndarray
Fit = Callable[[], Array]


def invented_rows(rows: int, width: int) -> tuple[Array, Array]:
    draws = np.random.default_rng(11)
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


def one_size(rows: int, width: int, aim: float, rounds: int) -> list[str]:
    values, labels = invented_rows(rows, width)
    prior = Prior((0.0,) * width, (1.0,) * width)
    columns = standardise(values, None, [True] * width).columns

    def ours() -> Array:
        solution = solve(standardise(values, None, [True] * width).columns, labels, None, prior)
        return np.append(solution.intercept, solution.weights)

    tolerance = gradient_norm(columns, labels, ours())
    references: dict[str, tuple[int, Fit]] = {}
    for threads in THREADS:
        note = f", {threads} thread{'s' if threads > 1 else ''}"
        for solver in SKLEARN_SOLVERS:
            references[f"scikit-learn {solver}{note}"] = (threads, scikit_learn(columns, labels, solver, tolerance))
        references[f"scipy trust-exact{note}"] = (threads, trust_exact(columns, labels, tolerance))
    reached, trial = {}, {}
    for name, (threads, fit) in references.items():
        with threadpool_limits(threads):
            trial[name] = seconds(fit)[0]
            reached[name] = gradient_norm(columns, labels, fit())
    fastest = min(trial[name] for name in references if reached[name] <= 1.5 * tolerance)
    references = {name: value for name, value in references.items() if trial[name] <= 3.0 * fastest}
    own, standard, others = [], [], {name: [] for name in references}
    for _ in range(rounds):
        time.sleep(_CALM)
        own.append(seconds(ours))
        standard.append(seconds(lambda: standardise(values, None, [True] * width)))
        for name, (threads, fit) in references.items():
            with threadpool_limits(threads):
                others[name].append(seconds(fit))
    ratio = {name: np.median(np.array(times) / np.array(own), axis=0) for name, times in others.items()}
    counted = [name for name in references if reached[name] <= 1.5 * tolerance]
    strongest = min(counted, key=lambda name: ratio[name][0])
    lines = [
        f"| {rows:,} x {width} | ours | {_milliseconds(own)} (standardisation {_milliseconds(standard)}) "
        f"| {tolerance:.0e} | 1 | 1 |"
    ]
    for name in sorted(references, key=lambda name: ratio[name][0]):
        mark = "" if name in counted else " (stops short)"
        wall, processor = (f"{value:.2f}" for value in ratio[name])
        shown = f"**{wall}** (aim {aim:g})" if name == strongest else wall
        processor = processor if references[name][0] == 1 else ""
        lines.append(
            f"| | {name}{mark} | {_milliseconds(others[name])} | {reached[name]:.0e} | {shown} | {processor} |"
        )
    return lines


def _milliseconds(times: list[tuple[float, float]]) -> str:
    return f"{1e3 * np.median(np.array(times)[:, 0]):.2f}"


def main() -> None:
    warnings.simplefilter("ignore")  # a solver that stops short says so; the table does too
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 7
    kernels = sorted({entry["architecture"] for entry in threadpool_info() if entry["internal_api"] == "openblas"})
    print(f"OpenBLAS kernel {', '.join(kernels)}; {os.cpu_count()} cores; numpy {np.__version__}, scipy", end=" ")
    print(f"{scipy.__version__}, scikit-learn {sklearn.__version__}; {rounds} rounds\n")
    print("| rows x columns | fit | median ms | gradient norm / n | times ours, wall | processor |")
    print("|---|---|---|---|---|---|")
    for rows, width, aim in SIZES:
        print("\n".join(one_size(rows, width, aim, rounds if rows > 20_000 else 3 * rounds)), flush=True)


if __name__ == "__main__":
    main()
