"""How the model does on rows that were never fitted, beside a forecast that always says the base rate.

With z the log-odds of the event, s = +1 for a row of the event and -1 for another, and p = logistic(z):

    log loss    mean of log(1 + exp(-s z))
    Brier score mean of (p - y)^2 = logistic(-s z)^2    (Brier 1950, in its form for two classes)
    AUC         (pairs of one event and one other row that z puts in order + ties / 2) / pairs
                (Mann and Whitney 1947; Hanley and McNeil 1982)

Sums are rounded once and pairs are counted in whole numbers, so the order of the rows changes no bit.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from scipy.special import expit

from runtime_min.model import HeldOut

Floats = npt.NDArray[np.float64]


def held_out_results(log_odds: Floats, labels: npt.NDArray[np.integer], base_rate: float) -> HeldOut:
    """Results from the log-odds (n,) and the classes (n,), 0 or 1, of n >= 1 held-out rows.

    base_rate: the weighted share of events among the *fitted* rows, above 0 and below 1.
    """
    rows = len(labels)
    events = int(np.count_nonzero(labels == 1))
    against = np.where(labels == 1, -log_odds, log_odds)
    return HeldOut(
        rows=rows,
        events=events,
        log_loss=math.fsum(np.logaddexp(0.0, against)) / rows,
        brier=math.fsum(expit(against) ** 2) / rows,
        auc=area_under_roc(log_odds, labels),
        base_rate=base_rate,
        base_log_loss=-(events * math.log(base_rate) + (rows - events) * math.log1p(-base_rate)) / rows,
        base_brier=(events * (1.0 - base_rate) ** 2 + (rows - events) * base_rate**2) / rows,
    )


def area_under_roc(log_odds: Floats, labels: npt.NDArray[np.integer]) -> float | None:
    """The share of pairs in order, ties half; None where all rows are of one class."""
    others = np.sort(log_odds[labels == 0])
    events = log_odds[labels == 1]
    if not len(others) or not len(events):
        return None
    below = int(np.searchsorted(others, events, "left").sum())
    not_above = int(np.searchsorted(others, events, "right").sum())
    return (below + not_above) / (2 * len(others) * len(events))
