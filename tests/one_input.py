"""Models of one input whose every number is given, for tests that derive by hand what must come out."""

from __future__ import annotations

from dataclasses import replace

from models import Quantity, make_request, make_trained

from runtime_min.model import DecisionRequest, Score, SealedModel, TrainedModel
from runtime_min.sealing import seal_request

AT_ZERO = DecisionRequest(None, None, "0")


def line(
    low: str,
    high: str,
    *,
    weight: float = 1.0,
    centre: float = 0.0,
    scale: float = 1.0,
    intercept: float = 0.0,
    arithmetic: str = "binary32",
    decision: DecisionRequest = AT_ZERO,
) -> tuple[TrainedModel, SealedModel]:
    """Trained log-odds intercept + weight * (x - centre) / scale of one input "x" with the range low to high."""
    quantity = Quantity("x", "kPa", low, high)
    trained = make_trained([quantity], 1)
    trained = replace(
        trained,
        terms=(replace(trained.terms[0], centre=centre, scale=scale),),
        scores=(Score(intercept, (weight,)),),
        witness=(),
    )
    return trained, seal_request(trained, make_request([quantity], arithmetic=arithmetic, decision=decision))
