"""Trained model -> every number that one arithmetic carries, in rationals, each rounded once.

`folding` has the exact numbers, `sealing_floats` and `sealing_integers` what each arithmetic makes of them.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from fractions import Fraction

from runtime_min.errors import Problem, SealError
from runtime_min.folding import (
    FORMATS,
    datum_of,
    delivered,
    delivered_limits,
    float_text,
    fold,
    log_of_quotient,
    prevalence_shift,
    round_to,
    threshold_of,
    thresholds_of,
    unit_map,
)
from runtime_min.model import (
    ARITHMETICS,
    INTEGERS,
    About,
    DecisionRequest,
    InputRequest,
    Request,
    SealedModel,
    TrainedModel,
)
from runtime_min.names import exact_decimal, model_name_problem
from runtime_min.sealing_floats import seal_floats
from runtime_min.sealing_integers import seal_integers
from runtime_min.validity import sealed_problems
from runtime_min.validity_request import decision_problems, delivery_problems
from runtime_min.validity_rules import shown
from runtime_min.validity_sealed import count_limits
from runtime_min.validity_trained import SHARE_WANTED, is_share

__all__ = [
    "FORMATS",
    "count_limits",
    "datum_of",
    "delivered",
    "delivered_limits",
    "float_text",
    "fold",
    "log_of_quotient",
    "prevalence_shift",
    "round_to",
    "seal",
    "seal_request",
    "threshold_of",
    "thresholds_of",
    "unit_map",
]

TOOL = "firmlogit 0.1.0"


def seal_request(
    trained: TrainedModel,
    request: Request,
    purpose: str = "",
    plan_sha256: str | None = None,
) -> SealedModel:
    """Seal a trained model as a request asks.

    Raises SealError with every mistake of the request, or with every number that the arithmetic cannot carry.
    """
    if request.arithmetic not in ARITHMETICS:
        known = " or ".join(ARITHMETICS)
        raise SealError(Problem("arithmetic", f'found "{request.arithmetic}"', f"choose {known}"))
    _same_inputs(trained, request)
    problems = list(_asked_wrongly(trained, request))
    if problems:
        raise SealError(problems)
    about = About(purpose, request, trained.rows.sha256, plan_sha256, TOOL)
    sealing = seal_integers if request.arithmetic in INTEGERS else seal_floats
    sealed = sealing(trained, request, about)
    found = sealed_problems(sealed)
    if found:
        raise SealError(Problem(*problem) for problem in found)
    return sealed


def _asked_wrongly(trained: TrainedModel, request: Request) -> Iterator[Problem]:
    for key, found, todo in decision_problems(request):
        yield Problem(key, found, todo)
    if not is_share(trained.prevalence):
        yield Problem("prevalence", f"found {shown(trained.prevalence)}", SHARE_WANTED)
    for entry in request.inputs:
        place = f'input "{entry.name}"'
        wrong = [Problem(f"{place}: {key}", found, todo) for key, found, todo in delivery_problems(entry)]
        yield from wrong
        if entry.counts is not None and not wrong:
            yield from _no_counts(place, entry)


def _no_counts(place: str, entry: InputRequest) -> Iterator[Problem]:
    """The range must hold two counts at least."""
    assert entry.counts is not None
    low, high = delivered_limits(entry)
    if low < high:
        return
    least, most = count_limits(entry.counts)
    gain, offset = unit_map(entry)
    ends = sorted(offset + gain * count for count in (least, most))
    values = " to ".join(exact_decimal(end) for end in ends)
    held = f"only the count {low}" if low == high else "no count"
    found = f"the range {entry.low} to {entry.high} holds {held}; from {least} to {most} they mean {values}"
    yield Problem(f"{place}: counts", found, "correct the range or the counts")


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
    if not isinstance(ranges, Mapping):
        raise SealError(Problem("ranges", f"found a {type(ranges).__name__}", 'give {"name": (low, high)}'))
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
    if problem := model_name_problem(name):
        problems.append(Problem("name", problem, "choose another name"))
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


def _same_inputs(trained: TrainedModel, request: Request) -> None:
    asked = [(entry.name, entry.levels) for entry in request.inputs]
    have = [(entry.name, entry.levels) for entry in trained.inputs]
    if asked != have:
        found = "asks for the inputs " + ", ".join(name for name, _ in asked)
        raise SealError(Problem("request", found, "the trained model has " + ", ".join(name for name, _ in have)))
