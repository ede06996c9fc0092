"""The trained model's log-odds as the exact real function that they are, in rationals.

In the standardised form, B + sum_j W_j (v_j - centre_j) / scale_j, term by term, and without the fold that sealing
uses: what is sealed is held against this.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

from runtime_min.model import TrainedModel

ZERO = Fraction(0)


def trained_log_odds(trained: TrainedModel, inputs: Sequence[Fraction]) -> tuple[Fraction, ...]:
    """T(X), one number a class after the first. inputs: one number an input; levels: 0, 1, … K - 1."""
    values = [
        inputs[term.of[0]] if term.level is None else Fraction(inputs[term.of[0]] == term.level)
        for term in trained.terms
    ]
    columns = [
        (value - Fraction(term.centre)) / Fraction(term.scale)
        for value, term in zip(values, trained.terms, strict=True)
    ]
    return tuple(
        Fraction(score.intercept)
        + sum((Fraction(w) * column for w, column in zip(score.weights, columns, strict=True)), ZERO)
        for score in trained.scores
    )


def slopes(trained: TrainedModel, k: int, position: int, levels: int) -> tuple[Fraction, ...]:
    """The trained weight of one input per unit, for class k + 1: one number, or one a level (0 for the reference)."""
    weights = [ZERO] * (levels or 1)
    for term, weight in zip(trained.terms, trained.scores[k].weights, strict=True):
        if term.of == (position,):
            weights[term.level or 0] += Fraction(weight) / Fraction(term.scale)
    return tuple(weights)
