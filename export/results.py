"""The results on held-out rows, computed again from the raw rows, in another way than the trainer's.

Log-odds in long doubles; the losses from probabilities of either class; the area under the curve as the share of pairs
in order, with bounds, since two rows of equal log-odds may come apart in the last bit on either side.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from export.raw_rows import RawRows
from runtime_min.model import TrainedModel

# What sums in another order and logarithms in another form may differ by.
SHARE = 1e-9
# Log-odds that are no further apart may be in either order.
TIE = 1e-9

Doubles = npt.NDArray[np.float64]
LongDoubles = npt.NDArray[np.longdouble]


def wrong_results(trained: TrainedModel, rows: RawRows) -> Iterator[str]:
    """One sentence for each result that the held-out rows do not give."""
    said = trained.held_out
    if not rows.held_out.any() or said is None:
        if (said is None) != (not rows.held_out.any()):
            yield "the held-out results are there without held-out rows, or missing"
        return
    labels, weights = rows.labels[rows.held_out], rows.weights[rows.held_out]
    z = _log_odds(trained, rows.values[rows.held_out])
    rate = trained.class_weights[1] / sum(trained.class_weights)
    happened = labels == 1
    event = _logistic(z)
    base = np.full(len(z), rate, dtype=np.longdouble)
    results = (
        ("rows", said.rows, len(labels)),
        ("events", said.events, int(np.sum(happened))),
        ("log loss", said.log_loss, _log_loss(_logistic(np.where(happened, z, -z)), weights)),
        ("Brier score", said.brier, _mean((event - labels) ** 2, weights)),
        ("base rate", said.base_rate, rate),
        ("log loss of the base rate", said.base_log_loss, _log_loss(np.where(happened, base, 1 - base), weights)),
        ("Brier score of the base rate", said.base_brier, _mean((base - labels) ** 2, weights)),
    )
    for what, stated, found in results:
        if not abs(stated - found) <= SHARE * max(1.0, abs(found)):
            yield f"the held-out rows give {what} {found:.10g}, the trained model says {stated:.10g}"
    area = _area(z.astype(float), labels, weights)
    if (area is None) != (said.auc is None) or (
        area is not None and said.auc is not None and not area[0] - SHARE <= said.auc <= area[1] + SHARE
    ):
        yield f"the held-out rows give an area under ROC of {area}, the trained model says {said.auc}"


def _log_odds(trained: TrainedModel, values: Doubles) -> LongDoubles:
    z = np.full(len(values), trained.intercept, dtype=np.longdouble)
    for term, weight in zip(trained.terms, trained.weights, strict=True):
        typical = trained.inputs[term.of[0]].typical
        column = values[:, term.of[0]].astype(np.longdouble)
        column = np.where(np.isnan(column), np.nan if typical is None else typical, column)
        if term.form == "level":
            column = (column == term.level).astype(np.longdouble)
        z += weight * (column - term.centre) / term.scale
    return z


def _logistic(z: LongDoubles) -> LongDoubles:
    return np.asarray(1 / (1 + np.exp(-z)), dtype=np.longdouble)


def _log_loss(probability: LongDoubles, weights: Doubles) -> float:
    return _mean(-np.log(probability), weights)


def _mean(values: LongDoubles, weights: Doubles) -> float:
    return float((weights * values).sum() / weights.sum(dtype=np.longdouble))


def _area(z: Doubles, labels: npt.NDArray[np.int64], weights: Doubles) -> tuple[float, float] | None:
    """The least and the largest weighted share of pairs (event, other) in order, ties half."""
    if len(set(labels.tolist())) < 2:
        return None
    order = np.argsort(z[labels == 0])
    others = z[labels == 0][order]
    up_to = np.concatenate(([0.0], np.cumsum(weights[labels == 0][order])))
    events, heavy = z[labels == 1], weights[labels == 1]
    least = up_to[np.searchsorted(others, events - TIE, "left")]
    most = up_to[np.searchsorted(others, events + TIE, "right")]
    pairs = heavy.sum() * up_to[-1]
    return float((heavy * least).sum() / pairs), float((heavy * most).sum() / pairs)
