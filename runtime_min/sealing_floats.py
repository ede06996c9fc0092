"""Sealing in floating point: every exact number rounded once to the arithmetic.

An input whose range lies away from zero gets a datum d (the range's midpoint, short), and the device computes
w (x - d); then b becomes b + sum w_j d_j with the unrounded w_j and the rounded d_j.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction
from typing import Any, cast

from runtime_min.arithmetic import CONSTANTS
from runtime_min.errors import Problem, SealError
from runtime_min.folding import (
    FORMATS,
    datum_of,
    delivered_limits,
    float_text,
    fold,
    prevalence_shift,
    round_to,
    thresholds_of,
    unit_map,
)
from runtime_min.model import (
    About,
    Exponential,
    Input,
    InputRequest,
    Request,
    SealedModel,
    Term,
    Thresholds,
    TrainedModel,
)


def seal_floats(trained: TrainedModel, request: Request, about: About) -> SealedModel:
    """Seal in binary64 or binary32. Raises SealError with every number that the arithmetic cannot carry."""
    problems: list[Problem] = []
    arithmetic = request.arithmetic

    def device(place: str, value: Fraction) -> float:
        rounded = round_to(arithmetic, value)
        if not math.isfinite(rounded):
            found = f"{float_text(value)} is too large for {arithmetic}"
            problems.append(Problem(place, found, "rescale the inputs, or choose binary64"))
            return 0.0
        return rounded

    inputs = tuple(
        _device_input(entry, typical.typical, arithmetic, device, problems)
        for entry, typical in zip(request.inputs, trained.inputs, strict=True)
    )
    scores = fold(trained)
    intercepts = [score.intercept + prevalence_shift(trained) for score in scores]
    terms = []
    for position, entry in enumerate(request.inputs):
        columns = [j for j, term in enumerate(trained.terms) if term.of == (position,)]
        place = f'weight of "{entry.name}"'
        if entry.levels:
            rows = tuple(
                (0.0, *(device(f"{place}={entry.levels[at + 1]}", score.weights[j]) for at, j in enumerate(columns)))
                for score in scores
            )
            terms.append(Term("level", (position,), None, rows))
            continue
        gain, offset = unit_map(entry)
        datum = datum_of(*delivered_limits(entry))
        for k, score in enumerate(scores):
            intercepts[k] += score.weights[columns[0]] * (offset + gain * (datum or 0))
        rows = tuple((device(place, score.weights[columns[0]] * gain),) for score in scores)
        shown = None if datum is None else device(f'datum of "{entry.name}"', datum)
        terms.append(Term("value", (position,), shown, rows))
    low, high = (device("threshold", value) for value in thresholds_of(request.decision))
    rounded_intercepts = tuple(device("intercept", value) for value in intercepts)
    if problems:
        raise SealError(problems)
    return SealedModel(
        name=request.model,
        arithmetic=arithmetic,
        classes=trained.classes,
        inputs=inputs,
        terms=tuple(terms),
        intercepts=rounded_intercepts,
        decision=Thresholds(low, high),
        exponential=Exponential(**cast(Any, CONSTANTS[arithmetic])),
        about=about,
    )


def _device_input(
    entry: InputRequest,
    typical: float | None,
    arithmetic: str,
    device: Callable[[str, Fraction], float],
    problems: list[Problem],
) -> Input:
    place = f'input "{entry.name}"'
    stand_in = None
    if entry.missing == "typical":
        if typical is None:
            problems.append(Problem(place, "has no typical value", "fit the model again"))
        else:
            gain, offset = unit_map(entry)
            exact = (Fraction(typical) - offset) / gain
            stand_in = device(f"{place}: typical", exact if entry.counts is None else Fraction(round(exact)))
    if entry.levels:
        low, high = 0.0, len(entry.levels) - 1.0
    else:
        told = len(problems)
        exact_low, exact_high = delivered_limits(entry)
        if entry.counts is not None:
            problems += _count_problems(place, exact_low, exact_high, arithmetic)
        low, high = (device(f"{place}: range", end) for end in (exact_low, exact_high))
        if not low < high and len(problems) == told:
            found = f"the range {entry.low} to {entry.high} has no width once rounded"
            problems.append(Problem(place, found, "widen the range, or choose binary64"))
        if stand_in is not None:
            stand_in = min(max(stand_in, low), high)
    return Input(
        name=entry.name,
        unit=entry.unit,
        levels=entry.levels,
        low=low,
        high=high,
        outside=entry.outside,
        missing=entry.missing,
        typical=stand_in,
        origin=entry.origin,
        counts=entry.counts,
    )


def _count_problems(place: str, low: Fraction, high: Fraction, arithmetic: str) -> list[Problem]:
    """A count next to 2^p could have been rounded from one that binary floating point of p bits does not carry."""
    if max(abs(low), abs(high)) < 2 ** FORMATS[arithmetic][0]:
        return []
    found = f"found counts from {low} to {high}, beyond 2^{FORMATS[arithmetic][0]}, where {arithmetic} skips some"
    return [Problem(f"{place}: counts", found, "narrow the range, or choose binary64")]
