"""What to say where an error budget is larger than the tolerance: what costs most, and what would fit."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from decimal import ROUND_CEILING, Context, Decimal
from fractions import Fraction

from export.budget import Budget, derive
from runtime_min.errors import Problem, SealError
from runtime_min.model import FLOATS, INTEGERS, Request, SealedModel, TrainedModel
from runtime_min.sealing import datum_of, seal_request


def advise(trained: TrainedModel, sealed: SealedModel, budget: Budget, tolerance: Fraction) -> Problem:
    """Why a budget is larger than the tolerance, and what would fit: another arithmetic, an origin, a tolerance."""
    costliest = max(budget.items, key=lambda item: item.bound)
    found = (
        f"{_text(budget.log_odds)} in log-odds is more than the tolerance {_text(tolerance)}, and the costliest item "
        f"is {costliest.what}, {_text(costliest.bound)}"
    )
    options = [*_other_arithmetics(trained, sealed, tolerance), *_origins(trained, sealed, budget, tolerance)]
    options.append(f"raise the tolerance to {_text(budget.log_odds)}")
    return Problem("error budget", found, ", or ".join(options))


def _other_arithmetics(trained: TrainedModel, sealed: SealedModel, tolerance: Fraction) -> Iterator[str]:
    for arithmetic in (*FLOATS, *INTEGERS):
        if arithmetic == sealed.arithmetic:
            continue
        bound = _bound(trained, replace(sealed.about.request, arithmetic=arithmetic))
        if bound is not None and bound <= tolerance:
            yield f'choose arithmetic = "{arithmetic}" (its bound is {_text(bound)})'


def _origins(trained: TrainedModel, sealed: SealedModel, budget: Budget, tolerance: Fraction) -> Iterator[str]:
    """Constants that the device could subtract before a value becomes a float, so that its rounding costs less."""
    request, chosen = sealed.about.request, []
    if sealed.arithmetic in INTEGERS:
        return
    costly = [item.input for item in sorted(budget.items, key=lambda item: -item.bound) if item.kind == "input"]
    for name in costly:
        entry = next(entry for entry in request.inputs if entry.name == name)
        if entry.counts is not None or entry.origin is not None:
            continue
        midpoint = datum_of(Fraction(str(entry.low)), Fraction(str(entry.high)))
        if midpoint is None:
            continue
        origin = f"{float(midpoint):.10g}"
        inputs = tuple(replace(other, origin=origin) if other is entry else other for other in request.inputs)
        request = replace(request, inputs=inputs)
        chosen.append(f'origin = {origin} at "{name}"')
        bound = _bound(trained, request)
        if bound is not None and bound <= tolerance:
            constants = " and ".join(chosen)
            yield f"write {constants}: the device subtracts it before the value becomes a float (the bound is then " + (
                f"{_text(bound)})"
            )
            return


def _bound(trained: TrainedModel, request: Request) -> Fraction | None:
    """What another request's budget would be; None where it cannot be sealed."""
    try:
        return derive(trained, seal_request(trained, request)).log_odds
    except SealError:
        return None


def _text(value: Fraction) -> str:
    """Three digits, rounded up."""
    context = Context(prec=3, rounding=ROUND_CEILING)
    return f"{float(context.divide(Decimal(value.numerator), Decimal(value.denominator))):.3g}"
