"""Trained model -> every number that one arithmetic carries, in rationals, each rounded once.

For class k + 1 against class 0, with the trained model's weights W, centres c and scales s:

    w_j = W_j / s_j        b = B - sum_j w_j c_j        (the fold, exact)

What the device delivers may be x with v = offset + gain x (a count, or the value less an origin): w then becomes gain w,
and b becomes b + w offset. A stated prevalence shifts b (Saerens, Latinne and Decaestecker 2002; King and Zeng 2001).

In floating point an input whose range lies away from zero gets a datum d (the range's midpoint, short), and the device
computes w (x - d); then b becomes b + sum w_j d_j with the unrounded w_j and the rounded d_j.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Context, Decimal
from fractions import Fraction
from typing import Any, cast

from runtime_min.arithmetic import CONSTANTS
from runtime_min.errors import Problem, SealError
from runtime_min.model import (
    About,
    Counts,
    DecisionRequest,
    Exponential,
    Input,
    InputRequest,
    Request,
    SealedModel,
    Term,
    Thresholds,
    TrainedModel,
)
from runtime_min.names import name_problem
from runtime_min.validity import sealed_problems

TOOL = "firmlogit 0.1.0"

# (digits of the significand, exponent of the smallest subnormal, exponent above the largest number)
FORMATS = {"binary64": (53, -1074, 1024), "binary32": (24, -149, 128)}
DATUM_BITS = 8


@dataclass(frozen=True)
class ExactScore:
    """Intercept and one weight a term, per unit of the term: exact rationals."""

    intercept: Fraction
    weights: tuple[Fraction, ...]


def fold(trained: TrainedModel) -> tuple[ExactScore, ...]:
    """Absorb standardisation into the weights, exactly: one score a class after the first."""
    result = []
    for score in trained.scores:
        weights = tuple(
            Fraction(weight) / Fraction(term.scale) for weight, term in zip(score.weights, trained.terms, strict=True)
        )
        shift = sum((w * Fraction(term.centre) for w, term in zip(weights, trained.terms, strict=True)), Fraction(0))
        result.append(ExactScore(Fraction(score.intercept) - shift, weights))
    return tuple(result)


def round_to(arithmetic: str, value: Fraction) -> float:
    """`value` rounded once to the nearest number of the arithmetic, ties to even; infinity where it is too large."""
    digits, lowest, limit = FORMATS[arithmetic]
    if value == 0:
        return 0.0
    magnitude = abs(value)
    exponent = magnitude.numerator.bit_length() - magnitude.denominator.bit_length()
    if magnitude < Fraction(2) ** exponent:
        exponent -= 1  # now 2^exponent <= magnitude < 2^(exponent + 1)
    unit = max(exponent - digits + 1, lowest)
    units = round(magnitude / Fraction(2) ** unit)
    if units.bit_length() + unit > limit:
        return math.inf if value > 0 else -math.inf
    return math.copysign(math.ldexp(units, unit), value) if units else 0.0


def log_of_quotient(numerator: Fraction, denominator: Fraction) -> Fraction:
    """ln(numerator / denominator) to 60 digits: the logarithms of the quotient's terms, subtracted."""
    quotient = numerator / denominator
    context = Context(prec=60, rounding=ROUND_HALF_EVEN)
    difference = context.subtract(
        context.ln(Decimal(quotient.numerator)), context.ln(Decimal(quotient.denominator))
    )
    return Fraction(difference)


def threshold_of(decision: DecisionRequest) -> Fraction:
    """The threshold in log-odds, exact or to 60 digits: ln(cost_false_alarm / cost_miss) (Elkan 2001)."""
    if decision.threshold is not None:
        return Fraction(decision.threshold)
    if decision.cost_false_alarm is None or decision.cost_miss is None:
        raise SealError(Problem("decision", "found neither costs nor a threshold", "give one of them"))
    return log_of_quotient(Fraction(decision.cost_false_alarm), Fraction(decision.cost_miss))


def thresholds_of(decision: DecisionRequest) -> tuple[Fraction, Fraction]:
    """The lower and the upper threshold: `no_call` below and above the threshold."""
    threshold, half_width = threshold_of(decision), Fraction(decision.no_call or 0)
    return threshold - half_width, threshold + half_width


def unit_map(entry: Input | InputRequest) -> tuple[Fraction, Fraction]:
    """(gain, offset): the value in the input's unit is offset + gain * what the device delivers."""
    if entry.counts is not None:
        return Fraction(entry.counts.gain), Fraction(entry.counts.offset)
    return Fraction(1), Fraction(entry.origin or 0)


def prevalence_shift(trained: TrainedModel) -> Fraction:
    """logit(prevalence) - logit(weighted share of the event among the fitted rows), to 60 digits; 0 without one."""
    if trained.prevalence is None:
        return Fraction(0)
    field = Fraction(trained.prevalence)
    first, event = (Fraction(weight) for weight in trained.class_weights)
    return log_of_quotient(field, 1 - field) - log_of_quotient(event, first)


def delivered_limits(entry: InputRequest) -> tuple[Fraction, Fraction]:
    """The exact limits of what the device delivers; of counts, the whole numbers inside the range and the bits."""
    gain, offset = unit_map(entry)
    ends = sorted((Fraction(str(end)) - offset) / gain for end in (entry.low, entry.high))
    if entry.counts is None:
        return ends[0], ends[1]
    least, most = count_limits(entry.counts)
    return Fraction(max(math.ceil(ends[0]), least)), Fraction(min(math.floor(ends[1]), most))


def count_limits(counts: Counts) -> tuple[int, int]:
    """The least and the largest count of so many bits; the least signed one is left out, since it means missing."""
    if counts.signed:
        return 1 - 2 ** (counts.bits - 1), 2 ** (counts.bits - 1) - 1
    return 0, 2**counts.bits - 1


def datum_of(low: Fraction, high: Fraction) -> Fraction | None:
    """The midpoint to 8 significant bits where it is farther from 0 than half the width; else None."""
    midpoint, half_width = (low + high) / 2, (high - low) / 2
    if not abs(midpoint) > half_width:
        return None
    exponent = abs(midpoint.numerator).bit_length() - midpoint.denominator.bit_length()
    if abs(midpoint) < Fraction(2) ** exponent:
        exponent -= 1
    unit = Fraction(2) ** (exponent - DATUM_BITS + 1)
    return round(midpoint / unit) * unit


def seal_request(
    trained: TrainedModel,
    request: Request,
    purpose: str = "",
    plan_sha256: str | None = None,
) -> SealedModel:
    """Seal a trained model as a request asks.

    Raises SealError with every number that the arithmetic cannot carry.
    """
    problems: list[Problem] = []
    arithmetic = request.arithmetic
    if arithmetic not in FORMATS:
        known = " or ".join(FORMATS)
        raise SealError(Problem("arithmetic", f'found "{arithmetic}"', f"choose {known}"))
    _same_inputs(trained, request)

    def device(place: str, value: Fraction) -> float:
        rounded = round_to(arithmetic, value)
        if not math.isfinite(rounded):
            found = f"{float_text(value)} is too large for {arithmetic}"
            problems.append(Problem(place, found, "rescale the inputs, or choose binary64"))
            return 0.0
        return rounded

    inputs = tuple(
        _device_input(entry, typical.typical, device, problems)
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
    constants = CONSTANTS[arithmetic]
    sealed = SealedModel(
        name=request.model,
        arithmetic=arithmetic,
        classes=trained.classes,
        inputs=inputs,
        terms=tuple(terms),
        intercepts=rounded_intercepts,
        decision=Thresholds(low, high),
        exponential=Exponential(**cast(Any, constants)),
        about=About(purpose, request, trained.rows.sha256, plan_sha256, TOOL),
    )
    found = sealed_problems(sealed)
    if found:
        raise SealError(Problem(*problem) for problem in found)
    return sealed


def seal(
    trained: TrainedModel,
    *,
    ranges: Mapping[str, Sequence[float]],
    arithmetic: str = "binary32",
    threshold: float = 0.0,
    name: str = "model",
    purpose: str = "",
    tolerance: float | None = None,
) -> SealedModel:
    """Seal a model that was fitted from arrays.

    ranges: name of each numeric input -> (low, high), what the device can deliver, in the input's unit; the error
    budget covers exactly this. threshold: in log-odds, at or above which the event is decided. A float means its exact
    value. Missing values and values out of range are faults.

    Raises SealError with every problem, among them a name that ranges lacks or has too many.
    """
    problems = [
        Problem(f'ranges["{entry.name}"]', "is missing", "give (low, high)")
        for entry in trained.inputs
        if not entry.levels and entry.name not in ranges
    ]
    known = {entry.name for entry in trained.inputs}
    problems += [
        Problem(f'ranges["{key}"]', "is no input of the model", "name one of " + ", ".join(sorted(known)))
        for key in ranges
        if key not in known
    ]
    levels = {entry.name for entry in trained.inputs if entry.levels}
    exact_ranges: dict[str, tuple[str, str]] = {}
    for key, limits in ranges.items():
        exact = [_exact(limit) for limit in limits] if isinstance(limits, Sequence) or hasattr(limits, "tolist") else []
        if key in levels:
            problems.append(Problem(f'ranges["{key}"]', "is an input with levels", "leave it out"))
        elif len(exact) != 2 or exact[0] is None or exact[1] is None or not exact[0] < exact[1]:
            problems.append(Problem(f'ranges["{key}"]', f"found {limits}", "give finite (low, high), low < high"))
        else:
            exact_ranges[key] = str(exact[0]), str(exact[1])
    exact_threshold = _exact(threshold)
    if exact_threshold is None:
        problems.append(Problem("threshold", f"found {threshold}", "give a finite number in log-odds"))
    exact_tolerance = None if tolerance is None else _exact(tolerance)
    if tolerance is not None and (exact_tolerance is None or not exact_tolerance > 0):
        problems.append(Problem("tolerance", f"found {tolerance}", "give a finite number above 0, or None"))
    if name_problem(name):
        problems.append(Problem("name", str(name_problem(name)), "choose another name"))
    if problems:
        raise SealError(problems)
    inputs = tuple(
        InputRequest(entry.name, entry.name, entry.unit, entry.levels, low, high, "fault", "fault", False)
        for entry in trained.inputs
        for low, high in [exact_ranges.get(entry.name, (None, None))]
    )
    decision = DecisionRequest(None, None, str(exact_threshold))
    stated = None if exact_tolerance is None else str(exact_tolerance)
    return seal_request(trained, Request(name, arithmetic, inputs, decision, stated), purpose)


def _exact(number: object) -> Fraction | None:
    """A finite number of any kind, NumPy's too, as the rational that it is; None for anything else."""
    if isinstance(number, (str, bytes)):
        return None
    try:
        return Fraction(number) if isinstance(number, (int, float, Fraction)) else Fraction(float(number))  # type: ignore[arg-type]
    except (TypeError, ValueError, OverflowError):
        return None


def float_text(value: Fraction) -> str:
    """`value` to six digits, for a message; works beyond the range of a float."""
    context = Context(prec=6, Emax=10**9, Emin=-(10**9))
    quotient = context.divide(Decimal(value.numerator), Decimal(value.denominator))
    return f"{quotient.normalize(context) if abs(quotient.adjusted()) > 5 else quotient:g}"


def _same_inputs(trained: TrainedModel, request: Request) -> None:
    asked = [(entry.name, entry.levels) for entry in request.inputs]
    have = [(entry.name, entry.levels) for entry in trained.inputs]
    if asked != have:
        found = "asks for the inputs " + ", ".join(name for name, _ in asked)
        raise SealError(Problem("request", found, "the trained model has " + ", ".join(name for name, _ in have)))


def _device_input(
    entry: InputRequest,
    typical: float | None,
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
        low, high = (device(f"{place}: range", end) for end in delivered_limits(entry))
        if not low < high and len(problems) == told:
            found = f"the range {entry.low} to {entry.high} has no width once rounded"
            problems.append(Problem(place, found, "widen the range, or choose binary64"))
        if stand_in is not None:
            stand_in = min(max(stand_in, low), high)
    return Input(
        entry.name,
        entry.unit,
        entry.levels,
        low,
        high,
        entry.outside,
        entry.missing,
        stand_in,
        entry.origin,
        entry.counts,
    )
