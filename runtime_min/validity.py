"""What must be true of a trained and of a sealed model, beyond the types of their fields.

Each function returns every problem as (place, what was found, what to do).
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence

from runtime_min.arithmetic import ROUND
from runtime_min.model import ARITHMETICS, Input, InputRequest, SealedModel, TrainedModel
from runtime_min.names import name_problem

Found = tuple[str, str, str]
_AGAIN = "take the file from the release again, or seal the trained model again"


def sealed_problems(sealed: SealedModel) -> list[Found]:
    """Every problem of a sealed model whose fields have the right types."""
    if sealed.arithmetic not in ARITHMETICS:
        known = ", ".join(ARITHMETICS)
        return [("model.arithmetic", f'found "{sealed.arithmetic}"', f"this version knows {known}")]
    return list(_sealed(sealed))


def trained_problems(trained: TrainedModel) -> list[Found]:
    """Every problem of a trained model whose fields have the right types."""
    return list(_trained(trained))


def _sealed(sealed: SealedModel) -> Iterator[Found]:
    problem = name_problem(sealed.name)
    if problem:
        yield "model.name", problem, _AGAIN
    yield from _classes("model", sealed.classes, len(sealed.intercepts))
    yield from _distinct("model.inputs", [entry.name for entry in sealed.inputs], "an input's name")
    for position, entry in enumerate(sealed.inputs):
        yield from _input(f"model.inputs[{position}]", entry)
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
            yield f"{place}.form", f'found "{term.form}" for input "{sealed.inputs[term.of[0]].name}"', _AGAIN
        wanted = (len(sealed.intercepts), len(levels) or 1)
        if len(term.weights) != wanted[0] or any(len(row) != wanted[1] for row in term.weights):
            yield f"{place}.weights", "found another shape", f"expected {wanted[0]} rows of {wanted[1]}"
        if term.datum is not None and term.form == "level":
            yield f"{place}.datum", f"found {term.datum}", "a level has no datum"
    order = [term.of[0] for term in sealed.terms if term.of]
    if order != list(range(len(sealed.inputs))):
        yield "model.terms", f"found the inputs in the order {order}", "expected each input once, in its place"
    if not sealed.decision.low <= sealed.decision.high:
        yield "model.decision", "found low above high", _AGAIN
    coefficients = sealed.exponential.coefficients
    if len(coefficients) < 3 or coefficients[:2] != (1.0, 1.0):
        yield "model.exponential.coefficients", "found others than 1, 1, …", _AGAIN
    rounded = ROUND[sealed.arithmetic]
    for place, number in device_numbers(sealed):
        if rounded(number) != number or math.copysign(1.0, number) < 0 == number:
            yield place, f"found {number!r}", f"expected a {sealed.arithmetic} number"
    yield from _digest("about.rows_sha256", sealed.about.rows_sha256)
    yield from _digest("about.plan_sha256", sealed.about.plan_sha256)
    yield from _request(sealed)


def _request(sealed: SealedModel) -> Iterator[Found]:
    request = sealed.about.request
    place = "about.request"
    if request.arithmetic != sealed.arithmetic or request.model != sealed.name:
        yield place, "asks for another model or arithmetic than the one sealed", _AGAIN
    if _policies(request.inputs) != _policies(sealed.inputs):
        yield f"{place}.inputs", "are not the inputs of the model", _AGAIN
    for position, entry in enumerate(request.inputs):
        for key in ("low", "high"):
            text = getattr(entry, key)
            if bool(entry.levels) != (text is None) or not _is_exact(text):
                yield f"{place}.inputs[{position}].{key}", f"found {_shown(text)}", "expected " + (
                    "null for an input with levels" if entry.levels else _EXACT_TEXT
                )
    decision = request.decision
    given = (decision.cost_false_alarm is not None, decision.cost_miss is not None, decision.threshold is not None)
    if given not in ((True, True, False), (False, False, True)):
        yield f"{place}.decision", "found other than two costs or one threshold", _AGAIN
    for key, text in (("cost_false_alarm", decision.cost_false_alarm), ("cost_miss", decision.cost_miss)):
        if not _is_exact(text, positive=True):
            yield f"{place}.decision.{key}", f"found {_shown(text)}", f"expected {_EXACT_TEXT}, above 0"
    if not _is_exact(decision.threshold):
        yield f"{place}.decision.threshold", f"found {_shown(decision.threshold)}", f"expected {_EXACT_TEXT}"
    if not _is_exact(request.tolerance, positive=True):
        yield f"{place}.tolerance", f"found {_shown(request.tolerance)}", f"expected {_EXACT_TEXT}, above 0"


def _policies(inputs: Sequence[Input] | Sequence[InputRequest]) -> list[tuple[str, str, tuple[str, ...], str, str]]:
    return [(entry.name, entry.unit, entry.levels, entry.outside, entry.missing) for entry in inputs]


_EXACT_TEXT = 'a number as a text like "-95", "0.1" or "1/10"'
_EXACT = re.compile(r"-?[0-9]{1,2000}(?:/0*[1-9][0-9]{0,2000}|(?:\.[0-9]{1,2000})?(?:[eE][+-]?[0-9]{1,3})?)")


def _is_exact(text: str | None, positive: bool = False) -> bool:
    """True for None and for what a Fraction reads at once; with an exponent of eight digits it would never return."""
    if text is None:
        return True
    digits = re.split("[/eE]", text)[0]
    return bool(_EXACT.fullmatch(text)) and not (positive and (text[0] == "-" or not digits.strip("0.")))


def _shown(text: str | None) -> str:
    return "null" if text is None else f'"{text}"' if len(text) <= 60 else f'"{text[:57]}..."'


def device_numbers(sealed: SealedModel) -> Iterator[tuple[str, float]]:
    """Every number that a device carries, with its place in the file, in the order of the tables' CRC-32."""
    for key in ("low", "high", "typical"):
        for position, entry in enumerate(sealed.inputs):
            value = getattr(entry, key)
            if value is not None:
                yield f"model.inputs[{position}].{key}", value
    for k, intercept in enumerate(sealed.intercepts):
        yield f"model.intercepts[{k}]", intercept
    for position, term in enumerate(sealed.terms):
        if term.datum is not None:
            yield f"model.terms[{position}].datum", term.datum
    for k in range(len(sealed.intercepts)):
        for position, term in enumerate(sealed.terms):
            for column, weight in enumerate(term.weights[k] if k < len(term.weights) else ()):
                yield f"model.terms[{position}].weights[{k}][{column}]", weight
    yield "model.decision.low", sealed.decision.low
    yield "model.decision.high", sealed.decision.high
    exponential = sealed.exponential
    for key in ("inv_ln2", "ln2_high", "ln2_low", "floor"):
        yield f"model.exponential.{key}", getattr(exponential, key)
    for position, value in enumerate(exponential.coefficients):
        yield f"model.exponential.coefficients[{position}]", value


def _input(place: str, entry: Input) -> Iterator[Found]:
    problem = name_problem(entry.name)
    if problem:
        yield f"{place}.name", problem, _AGAIN
    if not entry.low < entry.high:
        yield place, f"found the range {entry.low!r} to {entry.high!r}", "the lower limit must be below the upper"
    if entry.outside not in ("fault", "clamp"):
        yield f"{place}.outside", f'found "{entry.outside}"', "expected fault or clamp"
    if entry.missing not in ("fault", "typical"):
        yield f"{place}.missing", f'found "{entry.missing}"', "expected fault or typical"
    if (entry.typical is None) == (entry.missing == "typical"):
        yield f"{place}.typical", "does not fit the policy for a missing value", _AGAIN
    elif entry.typical is not None and not entry.low <= entry.typical <= entry.high:
        yield f"{place}.typical", f"found {entry.typical!r} outside the range", _AGAIN
    if entry.levels:
        yield from _distinct(f"{place}.levels", entry.levels, "a level")
        if (entry.low, entry.high) != (0.0, len(entry.levels) - 1.0) or entry.outside != "fault":
            yield place, "found another range or policy than that of its levels", _AGAIN
        if entry.typical is not None and entry.typical != int(entry.typical):
            yield f"{place}.typical", f"found {entry.typical!r}", "expected the position of a level"


def _trained(trained: TrainedModel) -> Iterator[Found]:
    yield from _classes("trained", trained.classes, len(trained.scores))
    if len(trained.class_weights) != len(trained.classes) or not all(w > 0 for w in trained.class_weights):
        yield "trained.class_weights", "found other than one positive sum a class", _AGAIN
    yield from _distinct("trained.inputs", [entry.name for entry in trained.inputs], "an input's name")
    yield from _distinct("trained.terms", [term.name for term in trained.terms], "a term's name")
    for position, entry in enumerate(trained.inputs):
        place = f"trained.inputs[{position}]"
        if problem := name_problem(entry.name):
            yield f"{place}.name", problem, _AGAIN
        if len(entry.levels) == 1:
            yield f"{place}.levels", "found one level", "expected none for a number, else two or more"
        if entry.levels:
            yield from _distinct(f"{place}.levels", entry.levels, "a level")
            if entry.typical is not None and entry.typical not in range(len(entry.levels)):
                yield f"{place}.typical", f"found {entry.typical!r}", "expected the position of a level"
    expected = list(_expected_terms(trained))
    found = [(term.name, term.form, term.of, term.level) for term in trained.terms]
    if len(found) != len(expected):
        yield "trained.terms", f"found {len(found)}", f"expected {len(expected)}, from the inputs and their levels"
    for position, (one, other) in enumerate(zip(found, expected, strict=False)):
        if one != other:
            yield f"trained.terms[{position}]", f"found {_term_text(*one)}", f"expected {_term_text(*other)}"
    for position, term in enumerate(trained.terms):
        place = f"trained.terms[{position}]"
        if not term.scale > 0:
            yield f"{place}.scale", f"found {term.scale!r}", "a scale is positive"
        if term.form == "level" and (term.centre, term.scale) != (0.0, 1.0):
            yield place, f"found centre {term.centre!r} and scale {term.scale!r}", "those of a level are 0 and 1"
    width = len(trained.terms)
    for k, score in enumerate(trained.scores):
        if len(score.weights) != width:
            yield f"trained.scores[{k}].weights", f"found {len(score.weights)} weights", f"expected {width}"
    if len(trained.prior.means) != width or len(trained.prior.sds) != width:
        yield "trained.prior", "found another number of terms", f"expected {width}"
    if any(sd is not None and not sd > 0 for sd in (*trained.prior.sds, trained.prior.intercept_sd)):
        yield "trained.prior", "found an sd that is not positive", "a prior sd is positive, or null where it is flat"
    side = len(trained.scores) * (1 + width)
    if len(trained.covariance) != side or any(len(row) != side for row in trained.covariance):
        yield "trained.covariance", "found another shape", f"expected {side} rows of {side}"
    yield from _shares_and_sizes(trained)
    for position, witness in enumerate(trained.witness):
        if len(witness.inputs) != len(trained.inputs) or not (
            len(witness.log_odds) == len(witness.bounds) == len(trained.scores)
        ):
            yield f"trained.witness[{position}]", "found another number of inputs or log-odds", _AGAIN
        if not all(bound >= 0 for bound in witness.bounds):
            yield f"trained.witness[{position}].bounds", "found a negative bound", _AGAIN


def _expected_terms(trained: TrainedModel) -> Iterator[tuple[str, str, tuple[int, ...], int | None]]:
    """Name, form, inputs and level of each term, in the order of the inputs and of their levels."""
    for position, entry in enumerate(trained.inputs):
        if not entry.levels:
            yield entry.name, "value", (position,), None
        for level in range(1, len(entry.levels)):
            yield f"{entry.name}={entry.levels[level]}", "level", (position,), level


def _term_text(name: str, form: str, of: Sequence[int], level: int | None) -> str:
    which = "" if level is None else f" {level}"
    return f'"{name}", {form}{which} of input {", ".join(map(str, of))}'


def _shares_and_sizes(trained: TrainedModel) -> Iterator[Found]:
    sizes = {f"certificate.{key}": value for key, value in vars(trained.certificate).items()}
    sizes |= {f"rows.{key}": value for key, value in vars(trained.rows).items() if key != "sha256"}
    held_out = {} if trained.held_out is None else vars(trained.held_out)
    sizes |= {f"held_out.{key}": value for key, value in held_out.items() if value is not None}
    shares = ("brier", "auc", "base_rate", "base_brier")
    for key, value in sizes.items():
        if not value >= 0 or (key.rpartition(".")[2] in shares and not value <= 1):
            yield f"trained.{key}", f"found {value!r}", "expected 0 or more, and of a share 1 or less"
    yield from _digest("trained.rows.sha256", trained.rows.sha256)


def _digest(place: str, digest: str | None) -> Iterator[Found]:
    if digest is not None and not re.fullmatch("[0-9a-f]{64}", digest):
        yield place, f"found {_shown(digest)}", "expected a SHA-256 in 64 hexadecimal digits"


def _classes(place: str, classes: Sequence[str], score_count: int) -> Iterator[Found]:
    if len(classes) != 2:
        yield f"{place}.classes", f"found {len(classes)}", "this version takes two"
    yield from _distinct(f"{place}.classes", classes, "a class")
    if score_count != len(classes) - 1:
        yield place, f"found {score_count} log-odds for {len(classes)} classes", "expected one a class after the first"


def _distinct(place: str, names: Sequence[str], what: str) -> Iterator[Found]:
    if not names:
        yield place, "found none", f"expected at least one {what.rpartition(' ')[2]}"
    for name in sorted({name for name in names if names.count(name) > 1}):
        yield place, f'found "{name}" twice', f"{what} stands once"
