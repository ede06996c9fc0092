"""The attack on an error budget: a search over the ranges for the inputs with the largest error.

`attack_floats` and `attack_integers` search, in NumPy; the search only guides. What is reported was computed anew in
rationals, from the trained model as it stands and the reference scorer.

Deterministic: the same models, seed and effort give the same result.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from export.attack_effort import EFFORTS
from export.attack_floats import DTYPES, search_floats
from export.attack_integers import search_integers
from export.budget import Budget
from export.exact import log_odds_of, slopes, unit
from runtime_min.model import INTEGERS, Input, SealedModel, TrainedModel
from runtime_min.score import scores
from runtime_min.sealing import round_to

NEAREST = Fraction(2**30 - 1, 2**30)
"""Reals are taken at this share of half a gap: beyond it ties decide which number a real rounds to."""


@dataclass(frozen=True)
class Attack:
    """The largest error found. `inputs`: the device numbers; `reals`: the real inputs that round to them.

    Both are of what the device delivers. `tried`: how many rows; `everything`: these are all that there are.
    """

    worst: Fraction
    share: float
    inputs: tuple[float, ...]
    reals: tuple[Fraction, ...]
    tried: int
    everything: bool


def attack(trained: TrainedModel, sealed: SealedModel, budget: Budget, seed: int, effort: str) -> Attack:
    """Search for the largest |device log-odds - trained log-odds|. effort: "quick" (half a second at most for 40
    inputs) or "thorough" (a few seconds). Where there are few enough rows, all are tried.

    A share above 1 means that the budget, or something that it relies on, is wrong.
    """
    search = search_integers if sealed.arithmetic in INTEGERS else search_floats
    results, tried, everything = [], 0, True
    for k in range(len(sealed.intercepts)):
        found = search(trained, sealed, k, np.random.default_rng([seed, k]), EFFORTS[effort])
        results += [_verified(trained, sealed, k, row) for row in found.rows]
        tried += found.tried
        everything = everything and found.everything
    worst = max(results, key=lambda result: result[0])
    share = float(worst[0] / budget.log_odds) if budget.log_odds else (math.inf if worst[0] else 0.0)
    return Attack(worst[0], share, worst[1], worst[2], tried, everything)


def carried(sealed: SealedModel, entry: Input, real: Fraction) -> float:
    """What the device has of a real number that it is to be given."""
    if sealed.arithmetic in INTEGERS:
        return round(real)
    return round_to(sealed.arithmetic, real if entry.counts is None else Fraction(round(real)))


def error_at(trained: TrainedModel, sealed: SealedModel, reals: Sequence[Fraction], k: int = 0) -> Fraction:
    """|device log-odds - trained log-odds| of class k + 1, in rationals, by the reference scorer.

    reals: what the device delivers, before it is rounded to a number or a count.
    """
    inputs = tuple(carried(sealed, entry, real) for entry, real in zip(sealed.inputs, reals, strict=True))
    return abs(Fraction(scores(sealed, inputs)[k]) * unit(sealed) - log_odds_of(trained, sealed, reals)[k])


def _verified(
    trained: TrainedModel, sealed: SealedModel, k: int, row: tuple[float, ...]
) -> tuple[Fraction, tuple[float, ...], tuple[Fraction, ...]]:
    """The error at the worst reals that round to a row, both ways."""
    results = []
    for sign in (1, -1):
        reals = []
        for position, (value, entry) in enumerate(zip(row, sealed.inputs, strict=True)):
            rising = slopes(trained, sealed, k, position)[0] > 0
            real = Fraction(value) + _half_gap(sealed, entry, value, -1 if rising == (sign > 0) else 1)
            reals.append(real if carried(sealed, entry, real) == value else Fraction(value))
        results.append((error_at(trained, sealed, reals, k), row, tuple(reals)))
    return max(results, key=lambda result: result[0])


def _half_gap(sealed: SealedModel, entry: Input, value: float, way: int) -> Fraction:
    """How far the last real lies, that way, that still gives the device this value."""
    if entry.levels:
        return Fraction(0)
    if sealed.arithmetic in INTEGERS:
        chosen = entry.counts is not None and entry.counts.chosen
        return Fraction(way, 2) * NEAREST if chosen else Fraction(0)
    neighbour = np.nextafter(DTYPES[sealed.arithmetic](value), way * np.inf)
    half = (Fraction(float(neighbour)) - Fraction(value)) / 2
    return Fraction(int(half)) if entry.counts is not None else half * NEAREST
