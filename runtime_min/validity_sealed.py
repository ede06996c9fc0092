"""What must be true of a sealed model, beyond the types of its fields."""

from __future__ import annotations

import math
from collections.abc import Iterator

from runtime_min.arithmetic import ACCUMULATOR_BITS, ROUND
from runtime_min.device_numbers import device_numbers
from runtime_min.model import ARITHMETICS, INTEGERS, Counts, Input, SealedModel
from runtime_min.names import c_position_name, model_name_problem, name_problem
from runtime_min.proof import proof
from runtime_min.validity_request import delivery_problems, request_problems
from runtime_min.validity_rules import AGAIN, Found, class_problems, digest_problems, distinct


def sealed_problems(sealed: SealedModel) -> list[Found]:
    """Every problem of a sealed model whose fields have the right types."""
    if sealed.arithmetic not in ARITHMETICS:
        known = ", ".join(ARITHMETICS)
        return [("model.arithmetic", f'found "{sealed.arithmetic}"', f"this version knows {known}")]
    found = list(_sealed(sealed))
    if not found and sealed.arithmetic in INTEGERS:
        found = list(_overflows(sealed))
    return found


def count_limits(counts: Counts) -> tuple[int, int]:
    """The least and the largest count of so many bits; the least signed one is left out, since it means missing."""
    if counts.signed:
        return 1 - 2 ** (counts.bits - 1), 2 ** (counts.bits - 1) - 1
    return 0, 2**counts.bits - 1


def _sealed(sealed: SealedModel) -> Iterator[Found]:
    problem = model_name_problem(sealed.name)
    if problem:
        yield "model.name", problem, AGAIN
    yield from class_problems("model", sealed.classes, len(sealed.intercepts))
    yield from distinct("model.inputs", [entry.name for entry in sealed.inputs], "an input's name")
    yield from _spelled_alike(sealed)
    for position, entry in enumerate(sealed.inputs):
        yield from _input(f"model.inputs[{position}]", entry)
    yield from _terms(sealed)
    if not sealed.decision.low <= sealed.decision.high:
        yield "model.decision", "found low above high", AGAIN
    yield from _integers(sealed) if sealed.arithmetic in INTEGERS else _floats(sealed)
    yield from digest_problems("about.rows_sha256", sealed.about.rows_sha256)
    yield from digest_problems("about.plan_sha256", sealed.about.plan_sha256)
    yield from request_problems(sealed)


def _spelled_alike(sealed: SealedModel) -> Iterator[Found]:
    """C tells inputs apart by the names of their positions."""
    spelled: dict[str, str] = {}
    for entry in sealed.inputs:
        if any(delivery_problems(entry)):
            continue
        in_c = c_position_name(entry)
        if spelled.setdefault(in_c, entry.name) != entry.name:
            found = f'found the inputs "{spelled[in_c]}" and "{entry.name}", both {in_c} in C'
            yield "model.inputs", found, "choose another name for one of them"


def _terms(sealed: SealedModel) -> Iterator[Found]:
    for position, term in enumerate(sealed.terms):
        place = f"model.terms[{position}]"
        if term.form not in ("value", "level"):
            yield f"{place}.form", f'found "{term.form}"', "this version knows value and level"
            continue
        if len(term.of) != 1 or not 0 <= term.of[0] < len(sealed.inputs):
            yield f"{place}.of", f"found {list(term.of)}", f"expected one position below {len(sealed.inputs)}"
            continue
        levels = sealed.inputs[term.of[0]].levels
        if bool(levels) != (term.form == "level"):
            yield f"{place}.form", f'found "{term.form}" for input "{sealed.inputs[term.of[0]].name}"', AGAIN
        wanted = (len(sealed.intercepts), len(levels) or 1)
        if len(term.weights) != wanted[0] or any(len(row) != wanted[1] for row in term.weights):
            yield f"{place}.weights", "found another shape", f"expected {wanted[0]} rows of {wanted[1]}"
        if term.datum is not None and term.form == "level":
            yield f"{place}.datum", f"found {term.datum}", "a level has no datum"
    order = [term.of[0] for term in sealed.terms if term.of]
    if order != list(range(len(sealed.inputs))):
        yield "model.terms", f"found the inputs in the order {order}", "expected each input once, in its place"


def _floats(sealed: SealedModel) -> Iterator[Found]:
    """What floating point carries, and nothing of integers."""
    if sealed.exponential is None:
        yield "model.exponential", "found null", f"{sealed.arithmetic} needs its constants"
    elif len(sealed.exponential.coefficients) < 3 or sealed.exponential.coefficients[:2] != (1.0, 1.0):
        yield "model.exponential.coefficients", "found others than 1, 1, …", AGAIN
    if sealed.accumulator_shift is not None:
        yield "model.accumulator_shift", f"found {sealed.accumulator_shift}", f"{sealed.arithmetic} has none"
    if sealed.table is not None:
        yield "model.table", "found a table", f"{sealed.arithmetic} has none"
    for position, term in enumerate(sealed.terms):
        if term.shift is not None:
            yield f"model.terms[{position}].shift", f"found {term.shift}", f"{sealed.arithmetic} has none"
    for position, entry in enumerate(sealed.inputs):
        if entry.counts is not None and entry.counts.chosen:
            yield f"model.inputs[{position}].counts", "found counts that sealing chose", "only integers have them"
    rounded = ROUND[sealed.arithmetic]
    for place, number in device_numbers(sealed):
        if rounded(number) != number or math.copysign(1.0, number) < 0 == number:
            yield place, f"found {number!r}", f"expected a {sealed.arithmetic} number"


def _integers(sealed: SealedModel) -> Iterator[Found]:
    """What integers carry, and nothing of floating point."""
    if sealed.exponential is not None:
        yield "model.exponential", "found constants", f"{sealed.arithmetic} has none"
    most = ACCUMULATOR_BITS[sealed.arithmetic] - 2
    if sealed.accumulator_shift is None or not 0 <= sealed.accumulator_shift <= most:
        yield "model.accumulator_shift", f"found {sealed.accumulator_shift}", f"expected 0 to {most}"
    table = sealed.table
    if table is None:
        yield "model.table", "found null", f"{sealed.arithmetic} needs one"
    else:
        if not 0 <= table.drop < most or not 1 <= table.step <= 30:
            yield "model.table", f"found drop {table.drop} and step {table.step}", AGAIN
        nodes = list(table.nodes)
        if len(nodes) < 2 or nodes[0] != 2**14 or nodes[-1] > 2**15 or nodes != sorted(nodes):
            yield "model.table.nodes", "found others than 16384 and on upwards to 32768 at most", AGAIN
    for position, term in enumerate(sealed.terms):
        place = f"model.terms[{position}]"
        if term.form == "value" and term.datum is None:
            yield f"{place}.datum", "found null", "a count has a datum"
        if (term.shift is None) == (term.form == "value") or not 0 <= (term.shift or 0) <= most:
            yield f"{place}.shift", f"found {term.shift}", "a count has one, a level has none"
    for position, entry in enumerate(sealed.inputs):
        if not entry.levels and entry.counts is None:
            yield f"model.inputs[{position}].counts", "found null", "integers need them"
        if entry.origin is not None:
            yield f"model.inputs[{position}].origin", f'found "{entry.origin}"', "counts have an offset"
    for place, number in device_numbers(sealed):
        if not isinstance(number, int):
            yield place, f"found {number!r}", f"expected an integer in {sealed.arithmetic}"


def _overflows(sealed: SealedModel) -> Iterator[Found]:
    """Every step of a device that the proof does not cover, in a model that has no other problem."""
    for step in proof(sealed):
        if not step.fits:
            of = f' of "{step.of}"' if step.of else ""
            found = f"{step.what}{of} comes to {step.largest}, beyond a signed integer of {step.bits} bits"
            yield "model", found, AGAIN


def _input(place: str, entry: Input) -> Iterator[Found]:
    problem = name_problem(entry.name)
    if problem:
        yield f"{place}.name", problem, AGAIN
    if not entry.low < entry.high:
        yield place, f"found the range {entry.low!r} to {entry.high!r}", "the lower limit must be below the upper"
    if entry.outside not in ("fault", "clamp"):
        yield f"{place}.outside", f'found "{entry.outside}"', "expected fault or clamp"
    if entry.missing not in ("fault", "typical"):
        yield f"{place}.missing", f'found "{entry.missing}"', "expected fault or typical"
    if (entry.typical is None) == (entry.missing == "typical"):
        yield f"{place}.typical", "does not fit the policy for a missing value", AGAIN
    elif entry.typical is not None and not entry.low <= entry.typical <= entry.high:
        yield f"{place}.typical", f"found {entry.typical!r} outside the range", AGAIN
    if entry.levels:
        yield from distinct(f"{place}.levels", entry.levels, "a level")
        if (entry.low, entry.high) != (0.0, len(entry.levels) - 1.0) or entry.outside != "fault":
            yield place, "found another range or policy than that of its levels", AGAIN
        if entry.typical is not None and entry.typical != int(entry.typical):
            yield f"{place}.typical", f"found {entry.typical!r}", "expected the position of a level"
    wrong = [(f"{place}.{key}", found, todo) for key, found, todo in delivery_problems(entry)]
    yield from wrong
    counts = entry.counts
    if counts is not None and not wrong:
        least, most = count_limits(counts)
        for key in ("low", "high", "typical"):
            count = getattr(entry, key)
            if count is not None and not (least <= count <= most and count == int(count)):
                yield f"{place}.{key}", f"found {count!r}", f"expected a count from {least} to {most}"
