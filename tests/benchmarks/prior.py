"""Time the choice of the prior's strength: `python tests/benchmarks/prior.py [rounds]` prints Markdown tables.

Ours is `choose_sd`: 30 strengths x 5 folds, raw columns in, curve and choice out, the strengths near the best compared
to their last bit. A reference is a loop over folds and strengths: scikit-learn's LogisticRegression with C = sd^2 on
columns standardised once a fold. Its tolerance is the loosest power of ten whose curve errs by no more than ALLOWED
(the error of ours stands beside it); the error is the largest difference from the curve with every strength fitted to
the last bit. One BLAS thread for all. Each round runs all of them one after the other; a ratio is the median over
rounds of reference / ours. Processor time beside wall time, since other work on the machine disturbs it less.
Data: invented, as in `fit.py`.

The second table says what standardising once, over all rows, would save. It would let the rows left out reach the fits
that leave them out, so it is not done.
"""

from __future__ import annotations

import sys
import time
import warnings
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))
sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from fit import SKLEARN_SOLVERS, invented_rows, seconds
from sklearn.linear_model import LogisticRegression
from threadpoolctl import threadpool_limits

from runtime_min.model import TrainedInput
from trainer import prior
from trainer.prior import FOLDS, STRENGTHS, ColumnPrior, PriorRule, choose_sd
from trainer.standardise import standardise

SIZES = ((1_000, 8), (10_000, 30))
AIM = 1.5  # times faster than the fastest reference
ALLOWED = 1e-7  # error of a reference's curve
TOLERANCES = tuple(10.0**-digits for digits in range(3, 10))

Array = np.ndarray


def reference(values: Array, labels: Array, fold: Array, solver: str, tolerance: float) -> Callable[[], Array]:
    def curve() -> Array:
        losses = np.zeros(len(STRENGTHS))
        for index in range(FOLDS):
            out = fold == index
            mean, sd = values[~out].mean(axis=0), values[~out].std(axis=0)
            columns, left, sides = (values[~out] - mean) / sd, (values[out] - mean) / sd, 1.0 - 2.0 * labels[out]
            for at, strength in enumerate(STRENGTHS):
                model = LogisticRegression(C=strength**2, solver=solver, tol=tolerance, max_iter=5000)
                model.fit(columns, labels[~out])
                losses[at] += np.logaddexp(0.0, sides * (left @ model.coef_[0] + model.intercept_[0])).sum()
        return losses / len(labels)

    return curve


def one_size(rows: int, width: int, rounds: int) -> tuple[list[str], str]:
    values, labels = invented_rows(rows, width)
    fold = np.random.default_rng(1).permutation(rows) % FOLDS
    inputs = [TrainedInput(f"x{position}", "", (), None) for position in range(width)]
    rule = PriorRule((ColumnPrior(),) * width)

    def ours() -> Array:
        return np.array([entry.log_loss for entry in choose_sd(inputs, values, labels, None, fold, rule).strengths])

    claimed, prior._LOSS_ERROR = prior._LOSS_ERROR, 1e9
    exact = ours()  # with every strength within reach, all are fitted to the last bit
    prior._LOSS_ERROR = claimed
    error = {"ours": float(np.abs(ours() - exact).max())}
    curves: dict[str, Callable[[], Array]] = {}
    for solver in SKLEARN_SOLVERS:
        for tolerance in TOLERANCES:
            curve = reference(values, labels, fold, solver, tolerance)
            name = f"scikit-learn {solver}, tol {tolerance:.0e}"
            error[name] = float(np.abs(curve() - exact).max())
            if error[name] <= ALLOWED:
                curves[name] = curve
                break
    own, others = [], {name: [] for name in curves}
    for _ in range(rounds):
        own.append(seconds(ours))
        for name, curve in curves.items():
            others[name].append(seconds(curve))
    ratio = {name: np.median(np.array(times) / np.array(own), axis=0) for name, times in others.items()}
    strongest = min(ratio, key=lambda name: ratio[name][0])
    lines = [f"| {rows:,} x {width} | ours | {_milliseconds(own)} | {error['ours']:.0e} | 1 | 1 |"]
    for name in sorted(ratio, key=lambda name: ratio[name][0]):
        wall, processor = (f"{value:.2f}" for value in ratio[name])
        shown = f"**{wall}** (aim {AIM:g})" if name == strongest else wall
        lines.append(f"| | {name} | {_milliseconds(others[name])} | {error[name]:.0e} | {shown} | {processor} |")
    start = time.perf_counter()
    for index in range(FOLDS):
        standardise(values[fold != index], None, [True] * width)
    spent = time.perf_counter() - start
    share = 100 * spent / np.median(np.array(own)[:, 0])
    return lines, f"| {rows:,} x {width} | {1e3 * spent:.1f} | {share:.0f} % |"


def _milliseconds(times: list[tuple[float, float]]) -> str:
    return f"{1e3 * np.median(np.array(times)[:, 0]):.0f}"


def main() -> None:
    warnings.simplefilter("ignore")  # a solver that stops short says so; the error of its curve does too
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    print(f"{len(STRENGTHS)} strengths x {FOLDS} folds, one thread, {rounds} rounds\n")
    print("| rows x columns | choice | median ms | curve error | times ours, wall | processor |")
    print("|---|---|---|---|---|---|")
    spent = []
    with threadpool_limits(1):
        for rows, width in SIZES:
            lines, row = one_size(rows, width, rounds)
            spent.append(row)
            print("\n".join(lines), flush=True)
    print("\n| rows x columns | standardising each fold, ms | of the whole |\n|---|---|---|")
    print("\n".join(spent))


if __name__ == "__main__":
    main()
