"""What must be true of a request, beyond the types of its fields. Sealing and loading ask the same questions."""

from __future__ import annotations

from collections.abc import Iterator

from runtime_min.model import Counts, Input, InputRequest, Request, SealedModel
from runtime_min.validity_rules import (
    AGAIN,
    EXACT_TEXT,
    Found,
    is_exact,
    is_exact_above_zero,
    is_exact_from_zero,
    is_zero,
    shown,
)

MOST_BITS = 32
ADDRESS_BITS = 32


def delivery_problems(entry: Input | InputRequest) -> Iterator[Found]:
    """Problems of what the device delivers, origin or counts, as (key, what was found, what to do)."""
    if entry.levels and (entry.origin is not None or entry.counts is not None):
        yield ("origin" if entry.counts is None else "counts"), "found beside levels", "leave it out"
    if not is_exact(entry.origin):
        yield "origin", f"found {shown(entry.origin)}", f"expected {EXACT_TEXT}"
    counts = entry.counts
    if counts is None:
        return
    if entry.origin is not None:
        yield "counts", "found beside an origin", "keep one of the two: the offset of counts is an origin"
    if not 1 + counts.signed <= counts.bits <= MOST_BITS:
        yield "counts.bits", f"found {counts.bits}", f"expected {1 + counts.signed} to {MOST_BITS}"
    if not is_exact(counts.gain) or is_zero(counts.gain):
        yield "counts.gain", f"found {shown(counts.gain)}", f"expected {EXACT_TEXT}, other than 0"
    if not is_exact(counts.offset):
        yield "counts.offset", f"found {shown(counts.offset)}", f"expected {EXACT_TEXT}"
    if counts.chosen and isinstance(entry, InputRequest):
        yield "counts.chosen", "found true", "only sealing chooses counts"


def decision_problems(request: Request) -> Iterator[Found]:
    """Problems of the costs, the threshold, the no-call and the tolerance, as (key, what was found, what to do)."""
    decision = request.decision
    given = (decision.cost_false_alarm is not None, decision.cost_miss is not None, decision.threshold is not None)
    if given not in ((True, True, False), (False, False, True)):
        yield "decision", "found other than two costs or one threshold", AGAIN
    for key, text in (("cost_false_alarm", decision.cost_false_alarm), ("cost_miss", decision.cost_miss)):
        if not is_exact_above_zero(text):
            yield f"decision.{key}", f"found {shown(text)}", f"expected {EXACT_TEXT}, above 0"
    if not is_exact(decision.threshold):
        yield "decision.threshold", f"found {shown(decision.threshold)}", f"expected {EXACT_TEXT}"
    if not is_exact_from_zero(decision.no_call):
        yield "decision.no_call", f"found {shown(decision.no_call)}", f"expected {EXACT_TEXT}, 0 or more"
    if not is_exact_above_zero(request.tolerance):
        yield "tolerance", f"found {shown(request.tolerance)}", f"expected {EXACT_TEXT}, above 0"


def placement_problems(request: Request) -> Iterator[Found]:
    """Problems of where the table lies, as (key, what was found, what to do)."""
    if request.table is None:
        return
    if not 0 <= request.table.address < 2**ADDRESS_BITS:
        yield "table.address", f"found {request.table.address}", f"expected an address below 2^{ADDRESS_BITS}"
    if request.table.byte_order not in ("little", "big"):
        yield "table.byte_order", f"found {shown(request.table.byte_order)}", "expected little or big"


def request_problems(sealed: SealedModel) -> Iterator[Found]:
    """Problems of the request in a sealed file, the model's inputs among them."""
    request = sealed.about.request
    place = "about.request"
    if request.arithmetic != sealed.arithmetic or request.model != sealed.name:
        yield place, "asks for another model or arithmetic than the one sealed", AGAIN
    if [_asked(entry) for entry in request.inputs] != [_asked(entry) for entry in sealed.inputs]:
        yield f"{place}.inputs", "are not the inputs of the model", AGAIN
    for position, entry in enumerate(request.inputs):
        at = f"{place}.inputs[{position}]"
        for key in ("low", "high"):
            text = getattr(entry, key)
            if bool(entry.levels) != (text is None) or not is_exact(text):
                yield (
                    f"{at}.{key}",
                    f"found {shown(text)}",
                    "expected " + ("null for an input with levels" if entry.levels else EXACT_TEXT),
                )
        for key, found, todo in delivery_problems(entry):
            yield f"{at}.{key}", found, todo
    for key, found, todo in (*decision_problems(request), *placement_problems(request)):
        yield f"{place}.{key}", found, todo


def _asked(entry: Input | InputRequest) -> tuple[str | tuple[str, ...] | Counts | None, ...]:
    """What a request and the sealed model agree on; counts that sealing chose are in the model alone."""
    counts = None if entry.counts is not None and entry.counts.chosen else entry.counts
    return (entry.name, entry.unit, entry.levels, entry.outside, entry.missing, entry.origin, counts)
