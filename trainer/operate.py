"""How the model does on rows that were never fitted, beside a forecast that always says the base rate.

With z the log-odds of the event, s = +1 for a row of the event and -1 for another, and p = logistic(z):

    log loss    mean of log(1 + exp(-s z))
    Brier score mean of (p - y)^2 = logistic(-s z)^2    (Brier 1950, in its form for two classes)
    AUC         (pairs of one event and one other row that z puts in order + ties / 2) / pairs
                (Mann and Whitney 1947; Hanley and McNeil 1982)

With row weights the means are weighted, and a pair counts as the product of its rows' weights. Sums are rounded once,
and pairs are counted in whole numbers or along rows sorted by log-odds and weight, so the order of the rows changes no
bit.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from scipy.special import expit

from runtime_min.model import HeldOut
from trainer.standardise import class_sums

Floats = npt.NDArray[np.float64]


def held_out_results(
    log_odds: Floats, labels: npt.NDArray[np.integer], base_rate: float, row_weights: Floats | None = None
) -> HeldOut:
    """Results from the log-odds (n,) and the classes (n,), 0 or 1, of n >= 1 held-out rows; row_weights (n,) > 0.

    base_rate: the weighted share of events among the *fitted* rows, above 0 and below 1. `rows` and `events` are counts
    of rows, whatever these weigh.
    """
    weights = np.ones(len(labels)) if row_weights is None else row_weights
    others, events = class_sums(labels, row_weights, 2)
    total = math.fsum(weights)
    against = np.where(labels == 1, -log_odds, log_odds)
    return HeldOut(
        rows=len(labels),
        events=int(np.count_nonzero(labels == 1)),
        log_loss=math.fsum(weights * np.logaddexp(0.0, against)) / total,
        brier=math.fsum(weights * expit(against) ** 2) / total,
        auc=area_under_roc(log_odds, labels, row_weights),
        base_rate=base_rate,
        base_log_loss=-(events * math.log(base_rate) + others * math.log1p(-base_rate)) / total,
        base_brier=(events * (1.0 - base_rate) ** 2 + others * base_rate**2) / total,
    )


def area_under_roc(
    log_odds: Floats, labels: npt.NDArray[np.integer], row_weights: Floats | None = None
) -> float | None:
    """The share of pairs in order, ties half; None where all rows are of one class."""
    event = labels == 1
    if event.all() or not event.any():
        return None
    if row_weights is None:
        others = np.sort(log_odds[~event])
        below = int(np.searchsorted(others, log_odds[event], "left").sum())
        not_above = int(np.searchsorted(others, log_odds[event], "right").sum())
        return (below + not_above) / (2 * len(others) * int(np.count_nonzero(event)))
    order = np.lexsort((row_weights[~event], log_odds[~event]))
    others = log_odds[~event][order]
    up_to = np.concatenate(([0.0], np.cumsum(row_weights[~event][order])))
    sums = up_to[np.searchsorted(others, log_odds[event], "left")]
    sums += up_to[np.searchsorted(others, log_odds[event], "right")]
    pairs = math.fsum(row_weights[event]) * float(up_to[-1])
    return min(math.fsum(row_weights[event] * sums) / (2.0 * pairs), 1.0)
